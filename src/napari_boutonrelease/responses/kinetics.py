"""The time course of a response, estimated from the recording itself."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Literal

import numpy as np

from ..response_shape import ResponseShape
from .bouton_groups import groups_of_boutons, row_offset_s
from .noise import TimeCorrelation, estimate_time_correlation, robust_sd, white
from .response_design import build_design, pooled_residuals
from .shape_search import ShapeSearch
from .trial_blocks import TrialBlocks
from .windows import Windows, plan_trial_windows, rest_s

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from ..recording.timing import Timing
    from .dff import Baseline

__all__ = ["ASSUMED_SHAPE", "ShapeFit", "fit_response_shape"]

ASSUMED_SHAPE = ResponseShape(latency_s=0.001, rise_s=0.002, decay_s=0.06)
"""Stated where nothing responds and nothing better is known: a glutamate reporter, which decays over tens of ms."""

_CLEAR_Z = 6.0
"""A bouton responds clearly when its responses explain this many SD more than noise would."""
_MAX_BOUTONS = 24
"""The clearest boutons settle the shape; more cost time and add little."""
_MOST_DOUBT = 0.5
"""A decay with a larger relative standard error is not known."""
_MOST_FRAMES, _LEAST_TRIALS = 20_000, 20
"""The first trials, which are the brightest, settle the shape; more would only cost time."""


@dataclass(frozen=True, slots=True, kw_only=True)
class ShapeFit:
    """A response shape and how it was found.

    Attributes
    ----------
    shape : ResponseShape
        The time course.
    shape_from : {"recording", "assumed"}
        Estimated, or stated because nothing responds clearly.
    latency_se_s, rise_se_s, decay_se_s : float
        Standard errors, in s; NaN where assumed. They include the pull of the reference on latency and rise.
    boutons : (n,) ndarray of int
        Boutons whose responses were used, from 0.
    clear_z : (n_boutons,) ndarray
        How many SD more than noise the responses of each bouton explain.
    slow_p : float
        p-value of a second, slow decay (F-test); NaN where it could not be tested.
    correlation : TimeCorrelation
        Correlation of the noise in time.
    """

    shape: ResponseShape
    shape_from: Literal["recording", "assumed"]
    latency_se_s: float
    rise_se_s: float
    decay_se_s: float
    boutons: NDArray[np.intp]
    clear_z: NDArray[np.float64]
    slow_p: float
    correlation: TimeCorrelation


@dataclass(frozen=True, slots=True, kw_only=True)
class _Traces:
    """What the search works on: dF/F over its noise, the frames that hold a value, and when."""

    y: NDArray[np.float64]
    offset_s: NDArray[np.float64]
    used: NDArray[np.bool_]
    timing: Timing

    def take(self, boutons: NDArray[np.intp]) -> _Traces:
        """Keep some of the boutons."""
        return replace(self, y=self.y[boutons], offset_s=self.offset_s[boutons])

    def blocks(self, windows: Windows, correlation: TimeCorrelation) -> TrialBlocks:
        """Cut the traces into trials."""
        return TrialBlocks(self.y, offset_s=self.offset_s, windows=windows, timing=self.timing, correlation=correlation)


def fit_response_shape(
    f: NDArray[np.float64],
    *,
    baseline: Baseline,
    timing: Timing,
    y_px: NDArray[np.float64],
    used: NDArray[np.bool_],
    start: ResponseShape | None,
    slow_component: bool,
) -> ShapeFit:
    """Estimate latency, rise and decay of the response, pooled over boutons that respond clearly.

    Amplitudes and baselines are linear and solved for at every step, one amplitude for each stimulus, so that failures
    need not be told from releases: what noise a free amplitude takes up does not depend on the shape, and leaving no
    trial out keeps the search from preferring the shape that chose the trials. Frames too long to tell latency from
    rise leave both near the reference (`start` or `ASSUMED_SHAPE`).

    Parameters
    ----------
    f : (n_boutons, n_frames) ndarray
        Brightness above background, counts; NaN in frames without a value.
    baseline : Baseline
        F0. Boutons whose F0 is not usable are left out.
    timing : Timing
        Frames and stimuli.
    y_px : (n_boutons,) ndarray
        Rows of the boutons.
    used : (n_frames,) ndarray of bool
        Frames that may be used.
    start : ResponseShape or None
        Reference for latency and rise, another decay to start from, and the answer where nothing responds.
    slow_component : bool
        Test for a second, slow decay and keep it where F-test (p < 0.0001) and BIC agree.

    Returns
    -------
    ShapeFit
    """
    reference = ASSUMED_SHAPE if start is None else start
    y = np.where(used, baseline.dff(f), np.nan)
    noise = robust_sd(np.diff(y, axis=1)) / np.sqrt(2.0)
    known = np.flatnonzero(np.isfinite(noise) & (noise > 0))
    offsets = row_offset_s(y_px, timing=timing)
    traces = _Traces(y=y[known] / noise[known, None], offset_s=offsets[known], used=used, timing=timing)
    nothing = ShapeFit(
        shape=reference,
        shape_from="assumed",
        latency_se_s=np.nan,
        rise_se_s=np.nan,
        decay_se_s=np.nan,
        boutons=np.zeros(0, dtype=np.intp),
        clear_z=np.zeros(f.shape[0]),
        slow_p=np.nan,
        correlation=white(),
    )
    longest_s = _longest_trial_s(timing)
    if not known.size or longest_s <= 0:
        return nothing

    wide = _first_trials(plan_trial_windows(timing=timing, tail_s=longest_s, baseline_s=None))
    coarse = replace(traces, offset_s=_rounded(traces.offset_s, step=timing.frame_interval_s / 4))
    interval_s = timing.frame_interval_s
    shape = _rough_shape(coarse.blocks(wide, white()), interval_s=interval_s, reference=reference, longest_s=longest_s)
    windows, correlation, clear, boutons = wide, white(), np.zeros(known.size), np.zeros(0, dtype=np.intp)
    bounds_s = (interval_s, longest_s)
    for _ in range(3):
        windows = _first_trials(
            plan_trial_windows(timing=timing, tail_s=min(rest_s(shape), longest_s), baseline_s=None)
        )
        correlation = _noise_of(coarse, windows=windows, shape=shape)
        clear = _clarity(coarse.blocks(windows, correlation), shape)
        boutons = np.argsort(-clear, kind="stable")[:_MAX_BOUTONS]
        boutons = np.sort(boutons[clear[boutons] > _CLEAR_Z])
        if not boutons.size:
            break
        before = shape
        blocks = traces.take(boutons).blocks(windows, correlation)
        fit = ShapeSearch(blocks, interval_s=interval_s, reference=reference, bounds_s=bounds_s)
        shape = fit.single(shape)
        if abs(np.log(shape.decay_s / before.decay_s)) < 0.02:
            break
    clear_z = np.zeros(f.shape[0])
    clear_z[known] = clear
    if not boutons.size:
        return replace(nothing, clear_z=clear_z, correlation=correlation)
    slow_p = np.nan
    if slow_component:
        blocks = traces.take(boutons).blocks(wide, correlation)
        fit = ShapeSearch(blocks, interval_s=interval_s, reference=reference, bounds_s=bounds_s)
        shape, slow_p = fit.with_slow(shape)
    errors = fit.standard_errors(shape)
    if errors[2] > _MOST_DOUBT * shape.decay_s:  # a movie too short to see the decay
        return replace(nothing, clear_z=clear_z, correlation=correlation)
    return ShapeFit(
        shape=shape,
        shape_from="recording",
        latency_se_s=errors[0],
        rise_se_s=errors[1],
        decay_se_s=errors[2],
        boutons=known[boutons],
        clear_z=clear_z,
        slow_p=slow_p,
        correlation=correlation,
    )


def _clarity(blocks: TrialBlocks, shape: ResponseShape) -> NDArray[np.float64]:
    """How many SD more than noise would the responses of each bouton explain (Wilson & Hilferty 1931, PNAS 17:684)."""
    with_responses, without = blocks.misfit(shape), blocks.misfit(None)
    spare = np.maximum(blocks.n_values - blocks.n_linear, 1)
    chi_square = (without - with_responses) / np.where(with_responses > 0, with_responses / spare, np.inf)
    n_pulses = max(blocks.n_pulses, 1)
    small = 2.0 / (9.0 * n_pulses)
    return np.asarray((np.cbrt(chi_square / n_pulses) - (1 - small)) / np.sqrt(small))


def _first_trials(windows: Windows) -> Windows:
    """Empty the windows of all but the first trials."""
    order = np.argsort(windows.start, kind="stable")
    frames = np.cumsum((windows.stop - windows.start)[order])
    last = max(int(np.searchsorted(frames, _MOST_FRAMES, side="right")), _LEAST_TRIALS)
    stop = windows.stop.copy()
    stop[order[last:]] = windows.start[order[last:]]
    return replace(windows, stop=stop)


def _rough_shape(
    blocks: TrialBlocks, *, interval_s: float, reference: ResponseShape, longest_s: float
) -> ResponseShape:
    """Choose from a grid of decays and rises what explains most over all boutons."""
    decays = np.geomspace(2 * interval_s, max(longest_s, 4 * interval_s), 12)
    decays = np.append(decays, reference.decay_s)
    rises = np.unique([reference.rise_s, interval_s / 2, 2 * interval_s])
    candidates = [
        ResponseShape(latency_s=reference.latency_s, rise_s=float(rise), decay_s=float(decay))
        for decay in decays
        for rise in rises
        if rise < decay
    ]
    misfits = [float(np.sum(blocks.misfit(candidate))) for candidate in candidates]
    return candidates[int(np.argmin(misfits))] if candidates else reference


def _noise_of(traces: _Traces, *, windows: Windows, shape: ResponseShape) -> TimeCorrelation:
    """Correlation of the noise that the shape leaves."""
    groups = list(groups_of_boutons(traces.y, offset_s=traces.offset_s, used=traces.used))
    designs = [
        build_design(
            windows=windows,
            timing=traces.timing,
            shape=shape,
            offset_s=offset_s,
            usable=usable,
            slope=False,
            correlation=white(),
        )
        for _, offset_s, usable in groups
    ]
    residual, common = pooled_residuals(traces.y, designs=designs, members=[group for group, _, _ in groups])
    if common is None:
        return white()
    return estimate_time_correlation(
        residual, frame_in_run=common.frame_in_run, fitted=common.typical_block(), max_order=2
    )


def _longest_trial_s(timing: Timing) -> float:
    """Longest time from a trial's first pulse to the next trial or the end of the segment, in s."""
    first_s = np.fmin.reduce(timing.stimulus_s, axis=1)
    longest_s = 0.0
    for segment in np.unique(timing.segment):
        of_segment = np.sort(first_s[(timing.trial_segment == segment) & np.isfinite(first_s)])
        end_s = timing.frame_start_s[timing.segment == segment][-1] + timing.frame_interval_s
        longest_s = max(longest_s, float(np.max(np.diff(np.append(of_segment, end_s)), initial=0.0)))
    return longest_s


def _rounded(values: NDArray[np.float64], *, step: float) -> NDArray[np.float64]:
    return np.asarray(np.round(values / step) * step)
