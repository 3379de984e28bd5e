"""The time course of a response, estimated from the recording itself."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Literal

import numpy as np

from ..response_shape import ResponseShape
from .noise import TimeCorrelation, estimate_time_correlation, robust_sd, white
from .response_design import build_design, groups_of_boutons, row_offset_s
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
_LATENCY_PRIOR_S = 0.002
_LOG_RISE_PRIOR = 1.0
"""How far (SD) latency and rise may stray from the reference where the frames are too long to tell them apart."""
_LEAST_RISE_FRAMES = 0.02
_SLOW_P = 1e-4
_MAX_STEPS = 40
_WORTH_SEARCHING = 8.0
"""Fall of the misfit, in variances of the noise, below which a slow decay is not even looked for."""
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
        fit = _Search(blocks, interval_s=interval_s, reference=reference, bounds_s=bounds_s)
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
        fit = _Search(blocks, interval_s=interval_s, reference=reference, bounds_s=bounds_s)
        shape, slow_p = fit.with_slow(shape)
    errors = fit.standard_errors(shape)
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


class _Search:
    """Nonlinear search of the shape; the misfit is the sum of squares that no amplitude can take away."""

    def __init__(
        self, blocks: TrialBlocks, *, interval_s: float, reference: ResponseShape, bounds_s: tuple[float, float]
    ) -> None:
        self._blocks, self._interval_s, self._reference, self._bounds_s = blocks, interval_s, reference, bounds_s
        self._n_values = float(np.sum(blocks.n_values))
        self._spare = max(self._n_values - blocks.n_boutons * blocks.n_linear - 3, 1.0)

    def misfit(self, shape: ResponseShape) -> float:
        """Sum of squared whitened residuals."""
        return float(np.sum(self._blocks.misfit(shape)))

    def single(self, start: ResponseShape) -> ResponseShape:
        """Best shape with one decay."""
        parameters = self._minimise(self._to_parameters(start))
        return self._of_parameters(parameters)

    def with_slow(self, single: ResponseShape) -> tuple[ResponseShape, float]:
        """Find the shape, with a slow decay if it is needed, and the p-value of the slow decay."""
        from scipy.special import fdtrc

        alone = self.single(single)
        worst = self.misfit(alone)
        low_s, high_s = self._bounds_s
        slow = [alone.decay_s * factor for factor in (4.0, 10.0, 25.0) if alone.decay_s * factor < 2 * high_s]
        gains = [self._slow_gain(alone, slow_s, variance=worst / self._spare) for slow_s in slow]
        best, best_misfit, gain = alone, worst, max(gains, default=0.0)
        if gain > _WORTH_SEARCHING:
            for slow_s in slow:
                start = replace(alone, decay_s=max(low_s, 0.8 * alone.decay_s), slow_fraction=0.2, slow_decay_s=slow_s)
                shape = self._of_parameters(self._minimise(self._to_parameters(start)))
                misfit = self.misfit(shape)
                if misfit < best_misfit and shape.slow_decay_s > 2 * shape.decay_s:
                    best, best_misfit = shape, misfit
            gain = (worst - best_misfit) / (best_misfit / self._spare)
        p_value = float(fdtrc(2, self._spare, max(gain, 0.0) / 2))
        by_bic = self._n_values * np.log(worst / best_misfit) > 2 * np.log(self._n_values)
        needed = p_value < _SLOW_P and by_bic and best.slow_fraction > 0.02
        return (best if needed else alone), p_value

    def _slow_gain(self, alone: ResponseShape, slow_s: float, *, variance: float) -> float:
        """Foresee how far the misfit, over the variance, falls with a slow decay (Rao's score test)."""
        parameters = self._to_parameters(alone)
        steps = np.append(self._steps(parameters.size), 1e-3)
        moved = [self._of_parameters(parameters + step) for step in np.diag(steps[:-1])]
        moved.append(replace(alone, slow_fraction=1e-3, slow_decay_s=slow_s))
        curvature, descent = self._blocks.normal_equations(alone, moved, steps)
        known = np.linalg.pinv(curvature[:3, :3], hermitian=True)
        spread = curvature[3, 3] - curvature[3, :3] @ known @ curvature[:3, 3]
        rise = descent[3] - curvature[3, :3] @ known @ descent[:3]
        return float(rise**2 / spread / variance) if rise > 0 and spread > 1e-9 * curvature[3, 3] else 0.0

    def standard_errors(self, shape: ResponseShape) -> tuple[float, float, float]:
        """Give standard errors of latency, rise and decay, in s, from the curvature of the misfit."""
        curvature, _ = self._system(self._to_parameters(shape), variance=self.misfit(shape) / self._spare)
        variance = np.diag(np.linalg.pinv(curvature, hermitian=True))
        errors = np.sqrt(np.where(variance > 0, variance, np.nan))
        return float(errors[0]), float(errors[1] * shape.rise_s), float(errors[2] * shape.decay_s)

    def _pull(self, parameters: NDArray[np.float64]) -> NDArray[np.float64]:
        """Latency and rise minus the reference, in SD of their priors; 0 for the other parameters."""
        pull = np.zeros(parameters.size)
        pull[0] = (parameters[0] - self._reference.latency_s) / _LATENCY_PRIOR_S
        pull[1] = (parameters[1] - np.log(self._reference.rise_s)) / _LOG_RISE_PRIOR
        return pull

    def _penalised(self, parameters: NDArray[np.float64], *, variance: float) -> float:
        """Misfit over the variance of the noise, with the weak pull of the reference."""
        return self.misfit(self._of_parameters(parameters)) / variance + float(np.sum(self._pull(parameters) ** 2))

    def _steps(self, n: int) -> NDArray[np.float64]:
        return np.array([1e-3 * self._interval_s, 1e-3, 1e-3, 1e-3, 1e-3])[:n]

    def _system(
        self, parameters: NDArray[np.float64], *, variance: float
    ) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        steps = self._steps(parameters.size)
        moved = [self._of_parameters(parameters + step) for step in np.diag(steps)]
        curvature, descent = self._blocks.normal_equations(self._of_parameters(parameters), moved, steps)
        looseness = np.array([_LATENCY_PRIOR_S, _LOG_RISE_PRIOR, np.inf, np.inf, np.inf])[: parameters.size]
        curvature = curvature / variance + np.diag(looseness**-2)
        return curvature, descent / variance - self._pull(parameters) / looseness

    def _minimise(self, start: NDArray[np.float64]) -> NDArray[np.float64]:
        """Gauss-Newton steps within bounds, damped where one fails (Levenberg 1944, Marquardt 1963)."""
        low_s, high_s = self._bounds_s
        low = np.array([0.0, np.log(_LEAST_RISE_FRAMES * self._interval_s), np.log(low_s), -5.0, np.log(low_s)])[
            : start.size
        ]
        high = np.array([high_s / 2, np.log(high_s), np.log(high_s * 2), 3.0, np.log(high_s * 4)])[: start.size]
        here = np.clip(start, low, high)
        variance = self.misfit(self._of_parameters(here)) / self._spare
        best, damping = self._penalised(here, variance=variance), 1e-3
        for _ in range(_MAX_STEPS):
            curvature, descent = self._system(here, variance=variance)
            free = ~(((here <= low) & (descent < 0)) | ((here >= high) & (descent > 0)))
            gain = 0.0
            while free.any() and damping < 1e8:
                inner = curvature[np.ix_(free, free)]
                step = np.zeros(here.size)
                step[free] = np.linalg.lstsq(inner + damping * np.diag(np.diag(inner)), descent[free], rcond=None)[0]
                there = np.clip(here + np.clip(step, -1.0, 1.0), low, high)
                value = self._penalised(there, variance=variance)
                if value <= best:
                    gain, here, best, damping = best - value, there, value, max(damping / 10, 1e-9)
                    break
                damping *= 10
            if gain < 1e-3:
                break
        return here

    @staticmethod
    def _to_parameters(shape: ResponseShape) -> NDArray[np.float64]:
        parameters = [shape.latency_s, np.log(shape.rise_s), np.log(shape.decay_s)]
        if shape.slow_fraction:
            fraction = min(shape.slow_fraction, 0.95)
            parameters += [np.log(fraction / (1 - fraction)), np.log(shape.slow_decay_s)]
        return np.array(parameters)

    @staticmethod
    def _of_parameters(parameters: NDArray[np.float64]) -> ResponseShape:
        slow = {}
        if parameters.size > 3:
            slow = {
                "slow_fraction": float(1 / (1 + np.exp(-parameters[3]))),
                "slow_decay_s": float(np.exp(parameters[4])),
            }
        return ResponseShape(
            latency_s=max(float(parameters[0]), 0.0),
            rise_s=float(np.exp(parameters[1])),
            decay_s=float(np.exp(parameters[2])),
            **slow,
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
    group, offset_s, usable = max(
        groups_of_boutons(traces.y, offset_s=traces.offset_s, used=traces.used), key=lambda entry: entry[0].size
    )
    design = build_design(
        windows=windows,
        timing=traces.timing,
        shape=shape,
        offset_s=offset_s,
        usable=usable,
        slope=False,
        correlation=white(),
    )
    values = traces.y[np.ix_(group, design.frame)].T
    if not values.size:
        return white()
    return estimate_time_correlation(
        design.residual(values, design.solve(values)),
        frame_in_run=design.frame_in_run,
        fitted=design.typical_block(),
        max_order=2,
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
