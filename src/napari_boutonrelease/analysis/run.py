"""One recording from the movie to its tables: the steps in their order."""

from __future__ import annotations

import warnings
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from napari_boutonrelease.boutons import Optics, read_axon, read_positions
from napari_boutonrelease.errors import AnalysisWarning
from napari_boutonrelease.recording import (
    fill_dead,
    light_at_rest,
    measure_drift,
    measure_light,
    no_drift,
    resolve_timing,
)
from napari_boutonrelease.responses import (
    ASSUMED_SHAPE,
    Responses,
    SpontaneousReleases,
    detect_spontaneous,
    extract_traces,
    measure_baseline,
    measure_responses,
    plan_trial_windows,
    rest_s,
)

from .places import BLOCK_FRAMES, Places, find_places, given_places, guess_shape
from .progress import StepProgress
from .quantal_step import Quanta, measure_quanta
from .results import AnalysisResult
from .summary import cautions_of, estimates_table, summarise
from .tables import bouton_table, drift_table, pulse_table, response_table, spontaneous_table

if TYPE_CHECKING:
    from pathlib import Path

    from numpy.typing import NDArray

    from napari_boutonrelease.recording import Drift, Light, Movie, Protocol, Timing
    from napari_boutonrelease.response_shape import ResponseShape

    from .progress import Progress
    from .settings import Settings

_SHARES = {
    "light": 1.0,
    "drift": 2.0,
    "shape": 1.0,
    "places": 3.0,
    "again": 3.0,
    "traces": 1.0,
    "responses": 1.0,
    "spontaneous": 0.7,
    "quanta": 2.0,
}
_MOST_SHAFT = (
    0.6  # of the baseline: a bouton that is hardly brighter than its axon is doubtful, not infinitely responsive
)
_OTHER_SHAPE = 1.6  # a decay this many times longer or shorter than guessed is worth looking for boutons again


@dataclass(frozen=True, slots=True, kw_only=True)
class Measured:
    """Everything that the steps of one analysis found, before it is put into tables."""

    movie: Movie
    protocol: Protocol
    timing: Timing
    light: Light
    drift: Drift
    optics: Optics
    places: Places
    f: NDArray[np.float64]
    responses: Responses
    spontaneous: SpontaneousReleases
    quanta: Quanta
    settings: Settings


def run_analysis(
    movie: Movie,
    protocol: Protocol,
    *,
    settings: Settings,
    boutons: str | Path | None = None,
    axon: str | Path | None = None,
    progress: Progress | None = None,
) -> AnalysisResult:
    """Analyse one recording.

    Parameters
    ----------
    movie : Movie
        The recording.
    protocol : Protocol
        When the axon was stimulated.
    settings : Settings
        Every choice.
    boutons : path, optional
        Table of positions or label image, instead of finding the boutons.
    axon : path, optional
        Table of points along the axon.
    progress : callable, optional
        Called with (done, total).

    Returns
    -------
    AnalysisResult

    Raises
    ------
    InputError
        If the movie, the protocol or a file of boutons or axon cannot be used.
    """
    from .savefile import provenance_of

    measured = measure(movie, protocol, settings=settings, boutons=boutons, axon=axon, progress=progress)
    summary = summarise(measured)
    responses = measured.responses
    return AnalysisResult(
        name=movie.name,
        boutons=bouton_table(measured),
        pulses=pulse_table(measured),
        responses=response_table(measured),
        spontaneous=spontaneous_table(measured),
        drift=drift_table(measured),
        estimates=estimates_table(measured),
        summary=summary,
        provenance=provenance_of(measured, boutons=boutons, axon=axon),
        cautions=cautions_of(measured),
        settings=settings,
        time_s=measured.timing.frame_start_s,
        f=measured.f,
        f0=responses.baseline.f0,
        dff=responses.baseline.dff(measured.f),
        stimulus_s=measured.timing.stimulus_s,
        null_amplitude=responses.amplitudes.null_amplitude,
        mean_image=measured.drift.reference,
        evidence=measured.places.evidence,
        evidence_cut=measured.places.evidence_cut,
        footprints=measured.places.footprints,
        shape=responses.shape,
        shape_from=responses.shape_from,
    )


def measure(
    movie: Movie,
    protocol: Protocol,
    *,
    settings: Settings,
    boutons: str | Path | None,
    axon: str | Path | None,
    progress: Progress | None,
) -> Measured:
    """Run all numerical steps of one analysis."""
    steps = StepProgress(progress, shares=_SHARES)
    # Each step that draws random numbers has its own stream, so that changing one step does not change another.
    seeds = np.random.SeedSequence(settings.seed).spawn(3)
    # What can be wrong with the inputs is said before the long work begins.
    timing = resolve_timing(movie, protocol)
    pixel_um, image_shape = timing.pixel_size_um, (movie.shape[1], movie.shape[2])
    given = None if boutons is None else read_positions(boutons, pixel_size_um=pixel_um, image_shape=image_shape)
    path = None if axon is None else read_axon(axon, pixel_size_um=pixel_um)
    light = measure_light(
        movie, camera_offset=timing.camera_offset, block_frames=BLOCK_FRAMES, progress=steps.step("light")
    )
    movie = fill_dead(movie, dead=light.dead)
    if settings.recording.correct_motion:
        drift = measure_drift(
            movie,
            light=light,
            max_shift_px=settings.recording.max_shift_px,
            block_frames=BLOCK_FRAMES,
            progress=steps.step("drift"),
        )
    else:
        drift = no_drift(light=light)
    light = light_at_rest(movie, light=light, drift=drift)
    optics = _optics(light, drift)

    shape = protocol.reporter
    if given is not None:
        places = given_places(given, timing=timing, optics=optics, axon=path, settings=settings)
    else:
        guess = shape or guess_shape(movie, timing=timing, drift=drift, settings=settings, progress=steps.step("shape"))

        def find(course: ResponseShape, step: str) -> Places:
            return find_places(
                movie,
                timing=timing,
                drift=drift,
                optics=optics,
                shape=course,
                axon=path,
                settings=settings,
                rng=np.random.default_rng(seeds[0]),
                progress=steps.step(step),
            )

        places = find(guess or ASSUMED_SHAPE, "places")
    f = _traces(movie, places=places, timing=timing, drift=drift, settings=settings, progress=steps.step("traces"))
    responses = _responses(f, places=places, timing=timing, drift=drift, shape=shape, settings=settings)
    if given is None and shape is None and responses.shape_from == "recording":
        change = responses.shape.decay_s / (guess or ASSUMED_SHAPE).decay_s
        if not 1 / _OTHER_SHAPE < change < _OTHER_SHAPE:
            places = find(responses.shape, "again")
            f = _traces(
                movie, places=places, timing=timing, drift=drift, settings=settings, progress=steps.step("traces")
            )
            responses = _responses(f, places=places, timing=timing, drift=drift, shape=shape, settings=settings)
    steps.step("spontaneous")
    spontaneous = detect_spontaneous(
        f,
        baseline=responses.baseline,
        fit=responses.amplitudes,
        timing=timing,
        y_px=places.footprints.y_px,
        shape=responses.shape,
        used=drift.used,
        threshold_sd=settings.calls.threshold_sd,
        false_per_bouton=settings.responses.false_spontaneous,
    )
    quanta = measure_quanta(
        responses.amplitudes, settings=settings, rng=np.random.default_rng(seeds[1]), progress=steps.step("quanta")
    )
    return Measured(
        movie=movie,
        protocol=protocol,
        timing=timing,
        light=light,
        drift=drift,
        optics=optics,
        places=places,
        f=f,
        responses=responses,
        spontaneous=spontaneous,
        quanta=quanta,
        settings=settings,
    )


def _optics(light: Light, drift: Drift) -> Optics:
    used = drift.used
    if not used.any():
        warnings.warn(
            "No frame of the movie can be used: check the light and the focus.", AnalysisWarning, stacklevel=3
        )
        used = np.ones_like(used)
    mean = np.nan_to_num(drift.reference)
    return Optics(
        mean_image=mean,
        variance_image=light.variance_at(mean),
        saturated=light.saturated,
        dead=light.dead,
        dy_range_px=(float(drift.dy_px[used].min()), float(drift.dy_px[used].max())),
        dx_range_px=(float(drift.dx_px[used].min()), float(drift.dx_px[used].max())),
    )


def _traces(
    movie: Movie, *, places: Places, timing: Timing, drift: Drift, settings: Settings, progress: Progress | None
) -> NDArray[np.float64]:
    """Brightness of each bouton without background, neighbours and the bare axon under it.

    The axon's light is taken off as a constant share of the baseline: it bleaches as the bouton does.
    """
    f = extract_traces(movie, footprints=places.footprints, drift=drift, block_frames=BLOCK_FRAMES, progress=progress)
    rough = measure_baseline(
        f,
        timing=timing,
        windows=plan_trial_windows(
            timing=timing, tail_s=rest_s(ASSUMED_SHAPE), baseline_s=settings.responses.baseline_s
        ),
        used=drift.used,
        method="bleaching",
        percentile=settings.responses.percentile,
        running_s=settings.responses.percentile_s,
    )
    mean = rough.f0.mean(axis=1)
    with np.errstate(invalid="ignore", divide="ignore"):
        share = np.where(mean > 0, places.footprints.shaft_counts / mean, 0.0)
    share = np.clip(np.nan_to_num(share), 0.0, _MOST_SHAFT)
    return np.asarray(f - share[:, None] * rough.f0)


def _responses(
    f: NDArray[np.float64],
    *,
    places: Places,
    timing: Timing,
    drift: Drift,
    shape: ResponseShape | None,
    settings: Settings,
) -> Responses:
    chosen = settings.responses
    return measure_responses(
        f,
        timing=timing,
        y_px=places.footprints.y_px,
        used=drift.used,
        shape=shape,
        baseline_method=chosen.baseline,
        baseline_s=chosen.baseline_s,
        percentile=chosen.percentile,
        running_s=chosen.percentile_s,
        slope=chosen.slope,
    )
