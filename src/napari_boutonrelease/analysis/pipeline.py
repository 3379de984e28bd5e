"""The steps of an analysis, each computed again only when something it rests on has changed.

`Pipeline` remembers the last value of every step with a key: the settings and hand edits that the step looks at, and
the keys of the steps before it. Asked again with other settings, it computes the steps whose key differs and takes the
others as they are; of the traces, it reads only those of boutons whose weights have changed.
"""

from __future__ import annotations

import json
import warnings
from collections.abc import Callable, Hashable
from dataclasses import replace
from typing import TYPE_CHECKING, Any, TypeVar

import numpy as np

from ..boutons import read_axon, read_positions
from ..errors import AnalysisWarning, TooFewResponsesError
from ..recording import resolve_timing
from ..responses import ASSUMED_SHAPE, detect_spontaneous, measure_responses
from .axon_step import look_for_failed_stimuli, measure_axon, without_stimuli
from .hand_edits import HandEdits
from .linear_reporter import LinearTraces, linear_traces
from .measured import Measured, Traced
from .places import Places, lay_footprints
from .progress import StepProgress
from .quantal_step import count_releases, fit_release
from .recording_step import Recording, look_at_recording
from .response_maps import guess_shape, map_responses
from .sites import Sites, correct_by_hand, find_sites, given_sites, put_in_order, read_axon_px, spot_sigma_px
from .trace_step import TraceStore

if TYPE_CHECKING:
    from pathlib import Path

    from numpy.typing import NDArray
    from pydantic import BaseModel

    from ..boutons import ResponseStack
    from ..recording import Movie, Protocol
    from ..response_shape import ResponseShape
    from ..responses import AmplitudeFit, Responses
    from .progress import Progress
    from .quantal_step import ReleaseFits
    from .settings import Settings

__all__ = ["STEPS", "Measured", "Pipeline", "Traced"]

Value = TypeVar("Value")

STEPS = {
    # name: how long it takes, compared with the others
    "light": 1.0,
    "drift": 2.0,
    "shape": 1.0,
    "maps": 2.0,
    "sites": 1.0,
    "traces": 1.0,
    "responses": 1.0,
    "spontaneous": 0.7,
    "release": 2.0,
}
_UP_TO_TRACES = ("light", "drift", "shape", "maps", "sites", "traces", "responses")
_OTHER_SHAPE = 1.6  # a decay this many times longer or shorter than guessed is worth looking for boutons again


class Pipeline:
    """The analysis of one recording, step by step, with what is already known.

    Parameters
    ----------
    movie : Movie
        The recording.
    protocol : Protocol
        When the axon was stimulated.
    boutons : path, optional
        Table of positions or label image, instead of finding the boutons.
    axon : path or (k, 2) ndarray, optional
        Points along the axon: a table, or (y, x) in px.
    """

    def __init__(
        self,
        movie: Movie,
        protocol: Protocol,
        *,
        boutons: str | Path | None = None,
        axon: str | Path | NDArray[np.float64] | None = None,
    ) -> None:
        self.movie = movie
        self.protocol = protocol
        self.boutons = boutons
        self.axon = axon
        self._axon = axon
        self._known: dict[str, tuple[Hashable, Any]] = {}
        self._traces = TraceStore()

    def measure(
        self, settings: Settings, *, edits: HandEdits | None = None, progress: Progress | None = None
    ) -> Measured:
        """Run the steps that are not known yet.

        Parameters
        ----------
        settings : Settings
            Every choice.
        edits : HandEdits, optional
            Changes by hand.
        progress : callable, optional
            Called with (done, total). Raising from it ends the analysis; the steps done so far stay known.

        Returns
        -------
        Measured

        Raises
        ------
        InputError
            If the protocol does not fit the movie, or a file of boutons or axon cannot be used.
        """
        edits = edits or HandEdits()
        self.check_inputs()
        steps = StepProgress(progress, shares=STEPS)
        traced = self.trace(settings, edits=edits, steps=steps)
        recording, places = traced.recording, traced.places
        linear, responses = self._respond(traced.f, places, recording, settings, steps=steps)
        f = linear.f
        steps.step("spontaneous")
        spontaneous = self._step(
            "spontaneous",
            (self._key("responses"), settings.calls.threshold_sd, settings.responses.false_spontaneous),
            lambda: detect_spontaneous(
                f,
                baseline=responses.baseline,
                fit=responses.amplitudes,
                timing=recording.timing,
                y_px=places.footprints.y_px,
                shape=responses.shape,
                used=recording.drift.used,
                threshold_sd=settings.calls.threshold_sd,
                false_per_bouton=settings.responses.false_spontaneous,
            ),
        )
        amplitudes = _without(responses.amplitudes, edits.excluded)

        def fit(used: AmplitudeFit) -> ReleaseFits:
            return fit_release(
                used,
                saturated=np.array(["saturated" in flags for flags in places.footprints.flags], dtype=np.bool_),
                quanta=settings.quanta,
                pulse_pairs=settings.pairs,
                rng=np.random.default_rng([settings.seed, 1]),
                progress=steps.step("release"),
            )

        release = self._step(
            "release",
            (self._key("responses"), edits.excluded, _digest(settings.quanta), _digest(settings.pairs), settings.seed),
            lambda: fit(amplitudes),
        )
        failed = self._step(
            "failed stimuli",
            (self._key("release"), settings.calls.exclude_stimulus_failures, settings.calls.stimulus_failure_cut),
            lambda: look_for_failed_stimuli(amplitudes, release.axon, settings=settings.calls),
        )
        if failed.excluded:
            amplitudes = without_stimuli(amplitudes, failed.suspected)
            release = self._step("release without failed stimuli", self._key("failed stimuli"), lambda: fit(amplitudes))
        axon_statistics = self._step(
            "axon",
            (self._key("failed stimuli"), _digest(settings.axon)),
            lambda: measure_axon(
                amplitudes,
                release.axon,
                axon_um=places.axon_um,
                failed=failed,
                settings=settings.axon,
                rng=np.random.default_rng([settings.seed, 2]),
            ),
        )
        counts = self._step(
            "counts",
            (self._key("release"), _digest(settings.calls)),
            lambda: count_releases(amplitudes, release.axon, settings=settings.calls),
        )
        return Measured(
            protocol=self.protocol,
            settings=settings,
            edits=edits,
            recording=recording,
            places=places,
            f=f,
            above_ceiling=linear.n_above,
            responses=responses,
            amplitudes=amplitudes,
            spontaneous=spontaneous,
            release=release,
            failed=failed,
            axon_statistics=axon_statistics,
            counts=counts,
            axon=traced.axon,
        )

    def check_inputs(self) -> None:
        """Raise `InputError` if the protocol or a file of boutons or axon is wrong, before the long work begins."""
        timing = resolve_timing(self.movie, self.protocol)
        if self.boutons is not None:
            _, height, width = self.movie.shape
            read_positions(self.boutons, pixel_size_um=timing.pixel_size_um, image_shape=(height, width))
        if self.axon is not None and not isinstance(self.axon, np.ndarray):
            read_axon(self.axon, pixel_size_um=timing.pixel_size_um)

    def trace(
        self,
        settings: Settings,
        *,
        edits: HandEdits | None = None,
        progress: Progress | None = None,
        steps: StepProgress | None = None,
    ) -> Traced:
        """Run the steps as far as the traces: parameters and errors as of `measure`."""
        edits = edits or HandEdits()
        self._axon = self.axon  # another may be drawn meanwhile
        steps = steps or StepProgress(progress, shares={name: STEPS[name] for name in _UP_TO_TRACES})
        recording = self.look(settings, steps=steps)
        sites = self._find(settings, recording, steps=steps)
        places, f = self._trace(sites, recording, edits, settings, steps=steps)
        return Traced(settings=settings, edits=edits, recording=recording, places=places, f=f, axon=self._axon)

    @property
    def recording(self) -> Recording | None:
        """Light and movement, once they were measured."""
        known: Recording | None = self._known.get("recording", (None, None))[1]
        return known

    def sites(self, settings: Settings, *, edits: HandEdits) -> Sites | None:
        """Return where boutons were found last, corrected by hand; None before that. Nothing is measured for it."""
        recording, found = self.recording, self._known.get("found", (None, None))[1]
        if recording is None or found is None:
            return None
        axon = self.axon if isinstance(self.axon, np.ndarray) else read_axon_px(self.axon, recording=recording)
        return correct_by_hand(
            put_in_order(found, axon=axon),
            edits,
            axon=axon,
            spacing_px=settings.detection.spacing_um / recording.pixel_um,
        )

    def _axon_px(self, recording: Recording) -> NDArray[np.float64] | None:
        return self._axon if isinstance(self._axon, np.ndarray) else read_axon_px(self._axon, recording=recording)

    def look(self, settings: Settings, *, steps: StepProgress) -> Recording:
        """Measure light, noise and movement."""
        return self._step(
            "recording",
            (self.protocol, _digest(settings.recording)),
            lambda: look_at_recording(self.movie, self.protocol, settings=settings.recording, steps=steps),
        )

    def _find(self, settings: Settings, recording: Recording, *, steps: StepProgress) -> Sites:
        """Find the boutons, or take those given, and put them in order."""
        if self.boutons is not None:
            given = self.boutons
            key: Hashable = (self._key("recording"), str(given), _digest(settings.detection))
            self._step("found", key, lambda: given_sites(given, recording, settings=settings.detection))
            return self._order(recording)
        shape = self._shape_to_look_for(recording, settings, steps)
        if self.protocol.reporter is None:
            chosen = settings.responses
            key = (self._key("recording"), shape, _digest(settings.detection), _digest(chosen), settings.seed)
            better = self._step("better shape", key, lambda: self._better_shape(shape, recording, settings, steps))
            shape = better or shape
        return self._look_for(shape, recording, settings, steps=steps)

    def _look_for(
        self, shape: ResponseShape, recording: Recording, settings: Settings, *, steps: StepProgress
    ) -> Sites:
        detection = settings.detection
        stack = self._step(
            "maps",
            (self._key("recording"), shape),
            lambda: _maps(recording, shape, steps=steps, by_shape_too=detection.shape_candidates),
        )
        steps.step("sites")
        self._step(
            "found",
            (self._key("maps"), _digest(detection), settings.seed),
            lambda: find_sites(recording, stack, settings=detection, rng=np.random.default_rng([settings.seed, 0])),
        )
        return self._order(recording)

    def _order(self, recording: Recording) -> Sites:
        axon = self._axon_px(recording)
        where = None if axon is None else axon.tobytes()
        found: Sites = self._known["found"][1]
        return self._step("sites", (self._key("found"), where), lambda: put_in_order(found, axon=axon))

    def _better_shape(
        self, shape: ResponseShape, recording: Recording, settings: Settings, steps: StepProgress
    ) -> ResponseShape | None:
        """Return the true shape where the one looked for is far from it: boutons may have been missed then.

        Only found boutons are asked, so that changes by hand do not decide where boutons are found.
        """
        sites = self._look_for(shape, recording, settings, steps=steps)
        places, f = self._trace(sites, recording, HandEdits(), settings, steps=steps)
        _, responses = self._respond(f, places, recording, settings, steps=steps)
        if responses.shape_from != "recording":
            return None
        ratio = responses.shape.decay_s / shape.decay_s
        return None if 1 / _OTHER_SHAPE < ratio < _OTHER_SHAPE else responses.shape

    def _shape_to_look_for(self, recording: Recording, settings: Settings, steps: StepProgress) -> ResponseShape:
        if self.protocol.reporter is not None:
            return self.protocol.reporter
        sigma = spot_sigma_px(settings.detection, pixel_um=recording.pixel_um)
        guess = self._step(
            "shape",
            (self._key("recording"), sigma),
            lambda: guess_shape(recording, spot_sigma_px=sigma, progress=steps.step("shape")),
        )
        return guess or ASSUMED_SHAPE

    def _trace(
        self, sites: Sites, recording: Recording, edits: HandEdits, settings: Settings, *, steps: StepProgress
    ) -> tuple[Places, NDArray[np.float64]]:
        """Lay the footprints and read the traces."""
        corrected = correct_by_hand(
            sites,
            edits,
            axon=self._axon_px(recording),
            spacing_px=settings.detection.spacing_um / recording.pixel_um,
        )
        places = self._step(
            "places",
            (
                self._key("sites"),
                edits.placed,
                edits.cleared,
                tuple(corrected.bouton.tolist()),
                settings.responses.background_um,
                settings.detection.footprint,
            ),
            lambda: lay_footprints(corrected, recording, settings=settings),
        )
        f = self._step(
            "traces",
            (self._key("places"), settings.responses.baseline_s),
            lambda: self._traces.read(
                places.footprints,
                recording,
                recorded=repr(self._key("recording")),
                settings=settings.responses,
                progress=steps.step("traces"),
            ),
        )
        return places, f

    def _respond(
        self,
        f: NDArray[np.float64],
        places: Places,
        recording: Recording,
        settings: Settings,
        *,
        steps: StepProgress,
    ) -> tuple[LinearTraces, Responses]:
        """Fit the amplitudes; where the reporter saturates, once to know F0 and once more without saturation."""
        steps.step("responses")
        chosen, reporter = settings.responses, settings.reporter

        def measure(traces: NDArray[np.float64]) -> Responses:
            return measure_responses(
                traces,
                timing=recording.timing,
                y_px=places.footprints.y_px,
                used=recording.drift.used,
                shape=self.protocol.reporter,
                baseline_method=chosen.baseline,
                baseline_s=chosen.baseline_s,
                percentile=chosen.percentile,
                running_s=chosen.percentile_s,
                slope=chosen.slope,
            )

        def respond() -> tuple[LinearTraces, Responses]:
            shown = measure(f)
            linear = linear_traces(f, baseline=shown.baseline, reporter=reporter)
            return linear, shown if reporter.max_dff is None else measure(linear.f)

        return self._step("responses", (self._key("traces"), _digest(chosen), _digest(reporter)), respond)

    def _step(self, name: str, key: Hashable, compute: Callable[[], Value]) -> Value:
        known = self._known.get(name)
        if known is None or known[0] != key:
            known = (key, compute())
            self._known[name] = known
        value: Value = known[1]
        return value

    def _key(self, name: str) -> Hashable:
        return self._known[name][0]


def _maps(
    recording: Recording, shape: ResponseShape, *, steps: StepProgress, by_shape_too: bool
) -> ResponseStack | None:
    try:
        return map_responses(recording, shape, progress=steps.step("maps"))
    except TooFewResponsesError as error:
        if not by_shape_too:
            raise
        warnings.warn(f"{error} Boutons are looked for by their shape alone.", AnalysisWarning, stacklevel=2)
        return None


def _without(fit: AmplitudeFit, excluded: tuple[tuple[int, str], ...]) -> AmplitudeFit:
    """Leave trials out: their amplitudes are NaN."""
    trials = [trial - 1 for trial, _ in excluded if trial <= fit.amplitude.shape[1]]
    if not trials:
        return fit
    counts = np.ones(fit.amplitude.shape[1])
    counts[trials] = np.nan
    return replace(
        fit,
        amplitude=fit.amplitude * counts[None, :, None],
        amplitude_counts=fit.amplitude_counts * counts[None, :, None],
    )


def _digest(settings: BaseModel) -> str:
    return json.dumps(settings.model_dump(mode="json"), sort_keys=True)
