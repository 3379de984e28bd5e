"""Releases without a stimulus: a matched filter over the time that the stimuli leave."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from .bouton_groups import row_offset_s
from .noise import TimeCorrelation, robust_sd
from .response_design import evoked_responses
from .windows import rest_frames, rest_s

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from ..recording.timing import Timing
    from ..response_shape import ResponseShape
    from .amplitudes import AmplitudeFit
    from .dff import Baseline

__all__ = ["SpontaneousReleases", "detect_spontaneous"]

_PHASES = (0.0, 0.25, 0.5, 0.75)
_BEFORE_DECAYS, _AFTER_DECAYS = 3.0, 4.0
_REFRACTORY_DECAYS = 2.0
_LEAST_INFORMATION = 0.6
"""Share of a full template's information that missing frames must leave."""


@dataclass(frozen=True, slots=True, kw_only=True)
class SpontaneousReleases:
    """Releases found outside the stimuli, in order of bouton and time.

    Attributes
    ----------
    bouton : (n,) ndarray of int
        Bouton of each, from 0.
    time_s, amplitude, amplitude_se, score : (n,) ndarray
        When it was released (s), its size and the error of that (dF/F), and size over error. The largest of many
        positions was chosen, so that small ones are a little too large.
    threshold : float
        Score that a release must exceed.
    observed_s : (n_boutons,) ndarray
        Time in which a release would have been noticed.
    count, count_down : (n_boutons,) ndarray of int
        Releases, and downward events that pass the same threshold: the measure of what noise does.
    false_expected : (n_boutons,) ndarray
        Releases that noise is expected to feign: the larger of what normal noise does and the mean of `count_down`.
    per_min : (n_boutons,) ndarray
        Rate with that taken off, at least 0; NaN where nothing was observed.
    """

    bouton: NDArray[np.intp]
    time_s: NDArray[np.float64]
    amplitude: NDArray[np.float64]
    amplitude_se: NDArray[np.float64]
    score: NDArray[np.float64]
    threshold: float
    observed_s: NDArray[np.float64]
    count: NDArray[np.intp]
    count_down: NDArray[np.intp]
    false_expected: NDArray[np.float64]
    per_min: NDArray[np.float64]


def detect_spontaneous(
    f: NDArray[np.float64],
    *,
    baseline: Baseline,
    fit: AmplitudeFit,
    timing: Timing,
    y_px: NDArray[np.float64],
    shape: ResponseShape,
    used: NDArray[np.bool_],
    threshold_sd: float,
    false_per_bouton: float,
) -> SpontaneousReleases:
    """Find responses that no stimulus explains.

    The evoked responses are subtracted; then, four times a frame, the response and a constant are fitted to a stretch
    of trace (Clements & Bekkers 1997, with noise correlated in time whitened). Thousands of positions are looked at, so
    that the threshold of single calls would let noise through; it is raised until normal noise passes it
    `false_per_bouton` times a bouton (Rice 1945, Bell Syst Tech J 24:46), and what noise really does is counted on
    downward events.

    Parameters
    ----------
    f : (n_boutons, n_frames) ndarray
        Brightness above background, counts; NaN in frames without a value.
    baseline : Baseline
        F0.
    fit : AmplitudeFit
        Evoked amplitudes and noise of the same traces.
    timing : Timing
        Frames and stimuli.
    y_px : (n_boutons,) ndarray
        Rows of the boutons.
    shape : ResponseShape
        Time course of a response.
    used : (n_frames,) ndarray of bool
        Frames that may be used.
    threshold_sd : float
        Lowest threshold, in SD of the amplitude.
    false_per_bouton : float
        Noise events accepted for each bouton in the whole recording.

    Returns
    -------
    SpontaneousReleases
    """
    interval_s = timing.frame_interval_s
    y = baseline.dff(f) - evoked_responses(fit.amplitude, timing=timing, y_px=y_px, shape=shape)
    unit = _frame_sd(fit, n_frames=f.shape[1])
    y /= unit
    y[:, ~used] = np.nan
    template = _templates(shape, timing=timing)
    allowed = _onsets(timing=timing, used=used, shape=shape, length=template.shape[1])
    steps = _angles(template, correlation=fit.correlation)
    n_positions = int(np.count_nonzero(allowed))
    threshold = max(threshold_sd, _threshold(n_positions * steps, false_per_bouton))
    before = _frames_before(shape, interval_s)
    refractory = max(1, int(np.ceil(_REFRACTORY_DECAYS * shape.decay_s / interval_s))) * len(_PHASES)
    offset_s = row_offset_s(y_px, timing=timing)
    found: list[NDArray[np.float64]] = []
    n_boutons = f.shape[0]
    count, count_down, observed_s = np.zeros(n_boutons, np.intp), np.zeros(n_boutons, np.intp), np.zeros(n_boutons)

    def scan(series: NDArray[np.float64]) -> tuple[NDArray[np.float64], NDArray[np.float64], NDArray[np.float64]]:
        amplitude, error = _scan(series, template=template, segment=timing.segment, correlation=fit.correlation)
        score = np.where(allowed[: amplitude.shape[0], None], amplitude / error, np.nan)
        spread = float(robust_sd(score.ravel(), centre=0.0))
        return amplitude, error * spread, score / spread if spread > 0 else np.full_like(score, np.nan)

    for bouton in range(n_boutons):
        amplitude, error, score = scan(y[bouton])
        observed_s[bouton] = np.count_nonzero(np.isfinite(score[:, 0])) * interval_s
        at = np.sort(_peaks(score.ravel(), threshold, refractory))
        frame, phase = np.divmod(at, len(_PHASES))
        start_s = timing.frame_start_s[frame + before] + np.take(_PHASES, phase) * interval_s
        count[bouton] = at.size
        size, se = amplitude[frame, phase], error[frame, phase]
        scale = unit[bouton, frame + before]
        row = (np.full(at.size, bouton), start_s + offset_s[bouton], size * scale, se * scale, score[frame, phase])
        found.append(np.column_stack(row))
        # A release in the stretch before a position looks like a downward event there: count those without it.
        events = [
            height * shape.frame_average(timing.frame_start_s - s, exposure_s=timing.exposure_s)
            for height, s in zip(size, start_s, strict=True)
        ]
        down = scan(y[bouton] - np.sum(events, axis=0))[2] if events else score
        count_down[bouton] = _peaks(-down.ravel(), threshold, refractory).size
    table = np.concatenate(found) if found else np.zeros((0, 5))
    false_expected = _false_expected(
        count_down, observed_s=observed_s, by_theory=observed_s / interval_s * steps, at=threshold
    )
    minutes = np.where(observed_s > 0, observed_s, np.nan) / 60
    return SpontaneousReleases(
        bouton=table[:, 0].astype(np.intp),
        time_s=table[:, 1],
        amplitude=table[:, 2],
        amplitude_se=table[:, 3],
        score=table[:, 4],
        threshold=threshold,
        observed_s=observed_s,
        count=count,
        count_down=count_down,
        false_expected=false_expected,
        per_min=np.maximum(count - false_expected, 0.0) / minutes,
    )


def _frame_sd(fit: AmplitudeFit, *, n_frames: int) -> NDArray[np.float64]:
    """SD of each frame, from that of the trial to which it is nearest, (n_boutons, n_frames)."""
    order = np.argsort(fit.windows.start, kind="stable")
    trial = order[np.clip(np.searchsorted(fit.windows.start[order], np.arange(n_frames), side="right") - 1, 0, None)]
    return fit.frame_sd[:, trial]


def _frames_before(shape: ResponseShape, interval_s: float) -> int:
    return max(3, int(np.ceil(_BEFORE_DECAYS * shape.decay_s / interval_s)))


def _templates(shape: ResponseShape, *, timing: Timing) -> NDArray[np.float64]:
    """Responses that start at each phase of the frame after the baseline, (n_phases, n_frames)."""
    interval_s = timing.frame_interval_s
    before = _frames_before(shape, interval_s)
    after = max(3, int(np.ceil((shape.latency_s + shape.rise_s + _AFTER_DECAYS * shape.decay_s) / interval_s)))
    since_s = (np.arange(before + after) - before) * interval_s
    return np.stack(
        [shape.frame_average(since_s - phase * interval_s, exposure_s=timing.exposure_s) for phase in _PHASES]
    )


def _onsets(*, timing: Timing, used: NDArray[np.bool_], shape: ResponseShape, length: int) -> NDArray[np.bool_]:
    """First frames of stretches whose response would start and decay by 1/e in time without stimuli, (n_positions,)."""
    n_frames = used.size
    interval_s = timing.frame_interval_s
    before = _frames_before(shape, interval_s)
    core = max(2, int(np.ceil((shape.latency_s + shape.rise_s + shape.decay_s) / interval_s)))
    rest = rest_frames(timing=timing, used=np.ones(n_frames, dtype=bool), tail_s=rest_s(shape))
    blocked = np.concatenate([[0], np.cumsum(~rest)])
    first = np.arange(max(n_frames - length + 1, 0))
    free = blocked[np.minimum(first + before + core, n_frames)] == blocked[first + before]
    together = timing.segment[first] == timing.segment[first + length - 1]
    return np.asarray(free & together)


def _scan(
    y: NDArray[np.float64], *, template: NDArray[np.float64], segment: NDArray[np.int64], correlation: TimeCorrelation
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Least-squares amplitude at every position and phase, and its error for unit noise, (n_positions, n_phases)."""
    length = template.shape[1]
    if y.size < length:
        return np.zeros((0, len(template))), np.zeros((0, len(template)))
    known = np.isfinite(y)
    values = np.where(known, y, 0.0)
    design, constant = _whitened(template, correlation=correlation)
    if correlation.order:
        frame = np.arange(y.size)
        broken = ~known
        broken[1:] |= np.diff(segment) != 0
        values = (
            correlation.whitening(np.maximum(frame - np.maximum.accumulate(np.where(broken, frame, 0)), 0)) @ values
        )
        values = np.where(known, values, 0.0)
    mask = known.astype(np.float64)

    def slide(series: NDArray[np.float64], kernels: NDArray[np.float64]) -> NDArray[np.float64]:
        return np.lib.stride_tricks.sliding_window_view(series, length) @ kernels.T

    hy, hh, h1 = slide(values, design), slide(mask, design**2), slide(mask, design * constant)
    ones = np.ones((1, length))
    y1, n = slide(values, ones * constant), slide(mask, ones * constant**2)
    n = np.maximum(n, 1e-12)
    information = hh - h1**2 / n
    full = np.sum(design**2, axis=1) - np.sum(design * constant, axis=1) ** 2 / (length * constant**2)
    enough = information > _LEAST_INFORMATION * full
    safe = np.where(enough, information, 1.0)
    return np.where(enough, (hy - h1 * y1 / n) / safe, np.nan), np.where(enough, 1.0 / np.sqrt(safe), np.nan)


def _whitened(template: NDArray[np.float64], *, correlation: TimeCorrelation) -> tuple[NDArray[np.float64], float]:
    """Templates, and the height of a constant, after the whitening of a long run."""
    order, left = correlation.order, float(np.sqrt(correlation.innovation[-1]))
    weights = correlation.prediction[-1]
    design = template.copy()
    for lag in range(1, order + 1):
        design[:, lag:] -= weights[lag - 1] * template[:, :-lag]
    return design / left, float(1.0 - np.sum(weights)) / left


def _angles(template: NDArray[np.float64], *, correlation: TimeCorrelation) -> float:
    """Mean number of upward crossings of zero in one frame, from the correlation of neighbouring positions."""
    design, _ = _whitened(template, correlation=correlation)
    design = design - np.mean(design, axis=1, keepdims=True)
    design /= np.linalg.norm(design, axis=1, keepdims=True)
    later = np.concatenate([design[1:], np.roll(design[:1], 1, axis=1)])
    return float(np.sum(np.arccos(np.clip(np.sum(design * later, axis=1), -1.0, 1.0)))) / (2 * np.pi)


def _threshold(crossings: float, false_per_bouton: float) -> float:
    """Level that `crossings` crossings of zero turn into `false_per_bouton` of."""
    return float(np.sqrt(2 * np.log(max(crossings / false_per_bouton, 1.0))))


def _peaks(score: NDArray[np.float64], threshold: float, refractory: int) -> NDArray[np.intp]:
    """Positions above the threshold, highest first, each silencing its surroundings."""
    above = np.flatnonzero(score > threshold)  # NaN is not
    taken: list[int] = []
    for position in above[np.argsort(-score[above], kind="stable")]:
        if all(abs(position - other) > refractory for other in taken):
            taken.append(int(position))
    return np.array(taken, dtype=np.intp)


def _false_expected(
    count_down: NDArray[np.intp], *, observed_s: NDArray[np.float64], by_theory: NDArray[np.float64], at: float
) -> NDArray[np.float64]:
    total_s = float(np.sum(observed_s))
    pooled = observed_s * (float(np.sum(count_down)) / total_s if total_s > 0 else 0.0)
    return np.asarray(np.maximum(pooled, by_theory * np.exp(-0.5 * at**2)))
