"""Where the boutons are: found in the recording, or given by a file; in order, with their extraction weights."""

from __future__ import annotations

import warnings
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import numpy as np

from napari_boutonrelease.boutons import (
    Footprints,
    Optics,
    build_footprints,
    detect_boutons,
    detect_by_shape,
    distance_along,
    estimate_spot_sigma,
    footprints_from_labels,
    project_responses,
    scan_shapes,
)
from napari_boutonrelease.errors import AnalysisWarning, TooFewResponsesError
from napari_boutonrelease.response_shape import ResponseShape

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from napari_boutonrelease.boutons import Detection, GivenBoutons
    from napari_boutonrelease.recording import Drift, Movie, Timing

    from .progress import Progress
    from .settings import DetectionSettings, Settings

BLOCK_FRAMES = 64
_FWHM_TO_SIGMA = 1.0 / 2.354820
_MAP_BYTES = 500e6
_UNKNOWN_PIXEL_UM = 0.16  # a common sampling; used for sizes of search only where the pixel size is unknown
_BACKGROUND_IN_SIGMAS = 8.0
_CANDIDATE_RATIO = 2.0
_RISE_OF_DECAY = 0.04


@dataclass(frozen=True, slots=True, kw_only=True)
class Places:
    """The boutons of one recording.

    Attributes
    ----------
    bouton : (n,) ndarray of int
        Ids: as in a given file, else from 1 along the axon, or top to bottom.
    found_by : tuple of str
        `responses`, `shape`, `both` or `file`.
    axon_um, axon_offset_um : (n,) ndarray
        Distance along the axon's path and from it; NaN without a path or where the pixel size is unknown.
    footprints : Footprints
        Weights of each, in the same order; the label image holds the ids.
    evidence : (y, x) ndarray
        Evidence of release at every pixel (nats).
    evidence_cut : float
        Evidence that a maximum needed; NaN where positions were given.
    expected_false : float
        False ones expected among those found by responses; NaN where positions were given.
    """

    bouton: NDArray[np.int64]
    found_by: tuple[str, ...]
    axon_um: NDArray[np.float64]
    axon_offset_um: NDArray[np.float64]
    footprints: Footprints
    evidence: NDArray[np.float64]
    evidence_cut: float
    expected_false: float


def spot_sigma_px(settings: DetectionSettings, *, pixel_size_um: float | None) -> float:
    """Return the Gaussian sigma of a bouton's image, in px."""
    return settings.bouton_um * _FWHM_TO_SIGMA / (pixel_size_um or _UNKNOWN_PIXEL_UM)


def guess_shape(
    movie: Movie, *, timing: Timing, drift: Drift, settings: Settings, progress: Progress | None
) -> ResponseShape | None:
    """Guess the reporter's time course from which of several shows most clearly in the mean response.

    Returns
    -------
    ResponseShape or None
        None where nothing responds clearly under any of them.
    """
    room_s = _room_s(timing)
    decay = 1.5 * timing.frame_interval_s
    candidates: list[ResponseShape] = []
    while decay <= room_s / 2 or not candidates:
        candidates.append(
            ResponseShape(latency_s=0.0, rise_s=max(_RISE_OF_DECAY * decay, 1e-4), decay_s=decay, slow_fraction=0.0)
        )
        decay *= _CANDIDATE_RATIO
    pre_s, post_s = map_window_s(timing, candidates[len(candidates) // 2])
    scores = scan_shapes(
        movie,
        timing=timing,
        drift=drift,
        candidates=candidates,
        pre_s=pre_s,
        post_s=post_s,
        spot_sigma_px=spot_sigma_px(settings.detection, pixel_size_um=timing.pixel_size_um),
        block_frames=BLOCK_FRAMES,
        progress=progress,
    )
    return candidates[int(np.argmax(scores))] if np.max(scores) > 0 else None


def map_window_s(timing: Timing, shape: ResponseShape) -> tuple[float, float]:
    """Return the time before the first and after the last pulse that response maps use, in s.

    Long enough for the offset and the response; short enough to fit, for the null maps, into stimulus-free time.
    """
    after = shape.latency_s + 3.0 * shape.rise_s + 3.0 * shape.decay_s
    before = 2.0 * shape.decay_s
    least = 3.0 * timing.frame_interval_s
    free = _room_s(timing) - 5.0 * shape.decay_s
    shrink = min(1.0, max(free / (before + after), 0.4))
    return max(before * shrink, least), max(after * shrink, least)


def _room_s(timing: Timing) -> float:
    """Time from a trial's last pulse to the next trial or the end of its file, typically, in s."""
    first = np.nanmin(timing.stimulus_s, axis=1)
    last = np.nanmax(timing.stimulus_s, axis=1)
    ends = np.array([timing.frame_start_s[timing.segment == k][-1] for k in timing.trial_segment])
    following = np.minimum(np.append(first[1:], np.inf), ends + timing.frame_interval_s)
    gaps = following - last
    return float(max(np.median(gaps[gaps > 0]) if np.any(gaps > 0) else 0.0, 4.0 * timing.frame_interval_s))


def find_places(
    movie: Movie,
    *,
    timing: Timing,
    drift: Drift,
    optics: Optics,
    shape: ResponseShape,
    axon: NDArray[np.float64] | None,
    settings: Settings,
    rng: np.random.Generator,
    progress: Progress | None,
) -> Places:
    """Find the boutons by their responses and by their shape, and compute their weights."""
    pixel_um = timing.pixel_size_um or _UNKNOWN_PIXEL_UM
    found = _detect(
        movie,
        timing=timing,
        drift=drift,
        optics=optics,
        shape=shape,
        settings=settings,
        rng=rng,
        progress=progress,
    )
    sigma = found.spot_sigma_px
    if sigma == spot_sigma_px(settings.detection, pixel_size_um=timing.pixel_size_um):
        # No response was clear enough to measure the width.
        sigma = _seen_sigma_px(found.y_px, found.x_px, optics=optics, expected_px=sigma)
    footprints = build_footprints(
        y_px=found.y_px,
        x_px=found.x_px,
        optics=optics,
        spot_sigma_px=sigma,
        background_radius_px=_background_px(settings, pixel_um, sigma),
        mode=settings.detection.footprint,
        response_image=None,
        response_variance=None,
    )
    return _ordered(
        footprints,
        found_by=found.found_by,
        ids=None,
        axon=axon,
        timing=timing,
        detection=found,
        image=optics.mean_image,
    )


def _detect(
    movie: Movie,
    *,
    timing: Timing,
    drift: Drift,
    optics: Optics,
    shape: ResponseShape,
    settings: Settings,
    rng: np.random.Generator,
    progress: Progress | None,
) -> Detection:
    """Find boutons by response and shape, or by shape alone where the responses are too few."""
    pre_s, post_s = map_window_s(timing, shape)
    sigma_px = spot_sigma_px(settings.detection, pixel_size_um=timing.pixel_size_um)
    spacing_px = settings.detection.spacing_um / (timing.pixel_size_um or _UNKNOWN_PIXEL_UM)
    # A pixel that clips bright responses still tells where they are, though not how large.
    exclude = ~(optics.always_inside() & ~optics.on_sample(optics.dead))
    try:
        stack = project_responses(
            movie,
            timing=timing,
            drift=drift,
            shape=shape,
            pre_s=pre_s,
            post_s=post_s,
            memory_bytes=_MAP_BYTES,
            block_frames=BLOCK_FRAMES,
            progress=progress,
        )
    except TooFewResponsesError as error:
        if not settings.detection.shape_candidates:
            raise
        warnings.warn(f"{error} Boutons are looked for by their shape alone.", AnalysisWarning, stacklevel=2)
        return detect_by_shape(optics.mean_image, spot_sigma_px=sigma_px, spacing_px=spacing_px, exclude=exclude)
    return detect_boutons(
        stack,
        spot_sigma_px=sigma_px,
        spacing_px=spacing_px,
        false_discovery=settings.detection.false_discovery,
        shape_candidates=settings.detection.shape_candidates,
        exclude=exclude,
        rng=rng,
        progress=None,
    )


def given_places(
    given: GivenBoutons,
    *,
    timing: Timing,
    optics: Optics,
    axon: NDArray[np.float64] | None,
    settings: Settings,
) -> Places:
    """Take the boutons of a table of positions or a label image, and compute their weights."""
    sigma = spot_sigma_px(settings.detection, pixel_size_um=timing.pixel_size_um)
    radius = _background_px(settings, timing.pixel_size_um or _UNKNOWN_PIXEL_UM, sigma)
    if given.label is not None:
        footprints = footprints_from_labels(
            given.label, optics=optics, spot_sigma_px=sigma, background_radius_px=radius
        )
    else:
        footprints = build_footprints(
            y_px=given.y_px,
            x_px=given.x_px,
            optics=optics,
            spot_sigma_px=_seen_sigma_px(given.y_px, given.x_px, optics=optics, expected_px=sigma),
            background_radius_px=radius,
            mode=settings.detection.footprint,
            response_image=None,
            response_variance=None,
        )
    found_by = ("file",) * len(given.bouton)
    return _ordered(
        footprints,
        found_by=found_by,
        ids=given.bouton,
        axon=axon,
        timing=timing,
        detection=None,
        image=optics.mean_image,
    )


def _seen_sigma_px(
    y_px: NDArray[np.float64], x_px: NDArray[np.float64], *, optics: Optics, expected_px: float
) -> float:
    """Measure the width of boutons in the mean image, in px."""
    return estimate_spot_sigma(
        optics.mean_image, y_px=y_px, x_px=x_px, start_sigma_px=expected_px, usable=optics.usable()
    )


def _background_px(settings: Settings, pixel_um: float, sigma_px: float) -> float:
    return max(settings.responses.background_um / pixel_um, _BACKGROUND_IN_SIGMAS * sigma_px)


def _ordered(
    footprints: Footprints,
    *,
    found_by: tuple[str, ...],
    ids: NDArray[np.int64] | None,
    axon: NDArray[np.float64] | None,
    timing: Timing,
    detection: Detection | None,
    image: NDArray[np.float64],
) -> Places:
    n = len(footprints.y_px)
    along, aside = np.full(n, np.nan), np.full(n, np.nan)
    if axon is not None:
        along, aside = distance_along(axon, y_px=footprints.y_px, x_px=footprints.x_px)
    if ids is not None:
        order = np.argsort(ids, kind="stable")
    elif axon is not None:
        order = np.argsort(along, kind="stable")
    else:
        order = np.lexsort((footprints.x_px, footprints.y_px))
    names = np.arange(1, n + 1) if ids is None else ids[order]
    scale = timing.pixel_size_um or np.nan
    return Places(
        bouton=names.astype(np.int64),
        found_by=tuple(found_by[i] for i in order),
        axon_um=along[order] * scale,
        axon_offset_um=aside[order] * scale,
        footprints=_reordered(footprints, order, names),
        evidence=np.zeros(image.shape) if detection is None else detection.evidence.astype(np.float64),
        evidence_cut=float("nan") if detection is None else detection.cut,
        expected_false=float("nan") if detection is None else detection.expected_false,
    )


def _reordered(footprints: Footprints, order: NDArray[np.intp], names: NDArray[np.int64]) -> Footprints:
    label = np.zeros(len(order) + 1, dtype=np.int32)
    label[order + 1] = names
    return replace(
        footprints,
        y_px=footprints.y_px[order],
        x_px=footprints.x_px[order],
        y0=footprints.y0[order],
        x0=footprints.x0[order],
        weights=tuple(footprints.weights[i] for i in order),
        naive_weights=tuple(footprints.naive_weights[i] for i in order),
        profiles=tuple(footprints.profiles[i] for i in order),
        label=label[footprints.label],
        footprint_px=footprints.footprint_px[order],
        shaft_counts=footprints.shaft_counts[order],
        flags=tuple(footprints.flags[i] for i in order),
    )
