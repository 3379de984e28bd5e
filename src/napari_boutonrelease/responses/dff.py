"""Baseline brightness F0: a smooth bleaching curve by default, so that dividing by it adds no noise."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Literal

import numpy as np

from .noise import robust_sd

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from ..recording.timing import Timing
    from .windows import Windows

__all__ = ["Baseline", "measure_baseline"]

BaselineMethod = Literal["bleaching", "trial", "percentile"]

_CURVES = ("constant", "exponential", "two exponentials")
_LEAST_SE = 3.0
"""F0 must exceed this many standard errors of itself to be divided by."""
_REFINEMENTS = 14
"""Moves of the rates after the grid: enough to bring their steps below one percent."""
_TREND_Z = 4.0
"""Residuals of an exponential that follow each other this clearly (in SD) call for the smooth curve."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Baseline:
    """Baseline brightness of every bouton in every frame.

    Attributes
    ----------
    f0 : (n_boutons, n_frames) ndarray
        Counts above background, finite everywhere unless a bouton has no usable frame at all.
    f0_se : (n_boutons,) ndarray
        Typical standard error of `f0`, counts.
    usable : (n_boutons,) ndarray of bool
        F0 is above zero throughout and more than 3 standard errors of it: dF/F may be reported.
    curve : tuple of str
        A bouton each: `constant`, `exponential`, `two exponentials`, `smooth`, `trial` or `percentile`.
    """

    f0: NDArray[np.float64]
    f0_se: NDArray[np.float64]
    usable: NDArray[np.bool_]
    curve: tuple[str, ...]

    def dff(self, f: NDArray[np.float64]) -> NDArray[np.float64]:
        """(F - F0) / F0, NaN for boutons whose F0 is not usable and in frames without a value."""
        divisor = np.where(self.usable[:, None], self.f0, np.nan)
        return np.asarray((f - divisor) / divisor)


def measure_baseline(
    f: NDArray[np.float64],
    *,
    timing: Timing,
    windows: Windows,
    used: NDArray[np.bool_],
    method: BaselineMethod,
    percentile: float,
    running_s: float,
) -> Baseline:
    """Estimate F0 of every bouton.

    Parameters
    ----------
    f : (n_boutons, n_frames) ndarray
        Brightness above background, counts; NaN in frames without a value.
    timing : Timing
        Times of the frames.
    windows : Windows
        Windows of the trials; the frames before their first pulses carry the baseline.
    used : (n_frames,) ndarray of bool
        Frames that may be used.
    method : {"bleaching", "trial", "percentile"}
        One smooth curve through the baselines of all trials; the mean before each trial, with its noise; or a running
        percentile, raised by the known depth of that percentile in normal noise.
    percentile : float
        Which percentile, in (0, 100).
    running_s : float
        Length of the stretch of which the percentile is taken, in s.

    Returns
    -------
    Baseline
    """
    values = np.where(used, f, np.nan)
    means, n_frames, time_s = _window_means(values, timing=timing, windows=windows)
    counted = n_frames > 0
    if method == "percentile" or not counted.any():
        f0, f0_se = _running_percentile(values, timing=timing, percentile=percentile, running_s=running_s)
        curve = ("percentile",) * f.shape[0]
    elif method == "trial":
        f0, f0_se = _per_trial(means, n_frames=n_frames, values=values, windows=windows)
        curve = ("trial",) * f.shape[0]
    else:
        f0, f0_se, curve = _bleaching(means, n_frames=n_frames, time_s=time_s, frame_s=timing.frame_start_s)
    lowest = np.min(f0, axis=1, initial=np.inf)
    usable = (lowest > 0) & (np.median(f0, axis=1) > _LEAST_SE * f0_se)
    return Baseline(f0=f0, f0_se=f0_se, usable=usable, curve=curve)


def _window_means(
    values: NDArray[np.float64], *, timing: Timing, windows: Windows
) -> tuple[NDArray[np.float64], NDArray[np.float64], NDArray[np.float64]]:
    """Mean and number of baseline frames of each window, (n_boutons, n_windows), and their mean time, (n_windows,)."""
    finite = np.isfinite(values)
    sums = np.cumsum(np.where(finite, values, 0.0), axis=1)
    counts = np.cumsum(finite, axis=1)
    sums, counts = (np.concatenate([np.zeros((values.shape[0], 1)), total], axis=1) for total in (sums, counts))
    n = counts[:, windows.baseline_stop] - counts[:, windows.start]
    total = sums[:, windows.baseline_stop] - sums[:, windows.start]
    middle = np.clip((windows.start + windows.baseline_stop - 1) // 2, 0, timing.frame_start_s.size - 1)
    return np.where(n > 0, total / np.maximum(n, 1), np.nan), n, timing.frame_start_s[middle]


def _bleaching(
    means: NDArray[np.float64],
    *,
    n_frames: NDArray[np.float64],
    time_s: NDArray[np.float64],
    frame_s: NDArray[np.float64],
) -> tuple[NDArray[np.float64], NDArray[np.float64], tuple[str, ...]]:
    """Fit the simplest sum of non-negative exponentials (AICc), or a robust smooth where its residuals show a trend."""
    duration = max(float(np.ptp(frame_s)), 1e-12)
    at, everywhere = (time_s - frame_s[0]) / duration, (frame_s - frame_s[0]) / duration
    weights = np.where(np.isfinite(means), n_frames, 0.0)
    filled = np.nan_to_num(means)
    robust = np.ones_like(weights)
    for _ in range(3):
        number, rates, linear = _best_exponentials(filled, weights=weights * robust, at=at)
        residual = (filled - _evaluate(at, rates, linear)) * np.sqrt(weights)
        residual[weights == 0] = np.nan
        scale = robust_sd(residual)[:, None]
        robust = _huber(residual, scale)
    f0 = _evaluate(everywhere, rates, linear)
    n = np.sum(weights > 0, axis=1)
    parameters = np.array([1, 3, 5])[number]
    names = [_CURVES[i] for i in number]
    for bouton in np.flatnonzero(_trend(residual) > _TREND_Z):
        known = weights[bouton] > 0
        curve, spent = _local_lines(at[known], filled[bouton, known], weights[bouton, known])
        f0[bouton] = np.interp(everywhere, at[known], curve)
        residual[bouton, known] = (filled[bouton, known] - curve) * np.sqrt(weights[bouton, known])
        parameters[bouton] = spent
        names[bouton] = "smooth"
    # With fewer than 3 windows their scatter says nothing, and the error stays unknown.
    frame_sd = np.where(n > 2, robust_sd(residual), 0.0)
    f0_se = frame_sd * np.sqrt(parameters / np.maximum(np.sum(weights, axis=1), 1.0))
    f0[n == 0] = np.nan
    return f0, np.where(n > 0, f0_se, np.nan), tuple(names)


def _best_exponentials(
    y: NDArray[np.float64], *, weights: NDArray[np.float64], at: NDArray[np.float64]
) -> tuple[NDArray[np.intp], NDArray[np.float64], NDArray[np.float64]]:
    """Fit non-negative sums of 0, 1 and 2 exponentials to all boutons at once; AICc chooses.

    Returns
    -------
    number : (n_boutons,) ndarray of int
        Exponential terms: 0, 1 or 2.
    rates, linear : (n_boutons, 2), (n_boutons, 3) ndarray
        Rates (1/duration), and the offset with the terms' heights; 0 where a term is absent.
    """
    n = np.sum(weights > 0, axis=1)
    floor = 1e-20 * np.maximum(np.sum(weights * y**2, axis=1), 1e-300)
    rates, linear = np.zeros((y.shape[0], 2)), np.zeros((y.shape[0], 3))
    number = np.zeros(y.shape[0], dtype=np.intp)
    best = np.full(y.shape[0], np.inf)
    single = np.geomspace(0.2, 60.0, 24)
    pairs = np.array([(slow, fast) for slow in single[::2] for fast in single[1::2] if fast > 3 * slow])
    for terms, candidates in enumerate((np.zeros((1, 0)), single[:, None], pairs)):
        found, solution, left = _search(y, weights=weights, at=at, candidates=candidates)
        criterion = _aicc(left + floor, n, 2 * terms + 2)
        better = criterion < best if terms else np.full(best.shape, True)
        best[better], number[better] = criterion[better], terms
        rates[better, :terms] = found[better]
        linear[better, : terms + 1] = solution[better]
    return number, rates, linear


def _search(
    y: NDArray[np.float64], *, weights: NDArray[np.float64], at: NDArray[np.float64], candidates: NDArray[np.float64]
) -> tuple[NDArray[np.float64], NDArray[np.float64], NDArray[np.float64]]:
    """Try the candidate rates, then ever smaller moves around each bouton's best; what is negative does not count.

    Returns rates (n_boutons, n_terms), linear parameters (n_boutons, n_terms + 1) and weighted residual sums; the sums
    are infinite where no candidate is non-negative.
    """
    n_boutons, n_terms = y.shape[0], candidates.shape[1]
    rates, linear = np.zeros((n_boutons, n_terms)), np.zeros((n_boutons, n_terms + 1))
    left = np.full(n_boutons, np.inf)

    def attempt(trial: NDArray[np.float64]) -> NDArray[np.bool_]:
        solution, residual_sum = _linear_fit(y, weights=weights, at=at, rates=trial)
        better: NDArray[np.bool_] = (residual_sum < left) & (np.all(solution >= 0, axis=1) | (n_terms == 0))
        rates[better], linear[better], left[better] = trial[better], solution[better], residual_sum[better]
        return better

    for candidate in candidates:
        attempt(np.broadcast_to(candidate, rates.shape))
    if not n_terms:
        return rates, linear, left
    moves = np.stack(np.meshgrid(*[[-1.0, 0.0, 1.0]] * n_terms), axis=-1).reshape(-1, n_terms)
    step = np.full(n_boutons, 0.15)
    for _ in range(_REFINEMENTS):
        centre, moved = rates.copy(), np.zeros(n_boutons, dtype=bool)
        for move in moves:
            moved |= attempt(centre * np.exp(step[:, None] * move))
        step[~moved] /= 2.0
    return rates, linear, left


def _linear_fit(
    y: NDArray[np.float64], *, weights: NDArray[np.float64], at: NDArray[np.float64], rates: NDArray[np.float64]
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Offset and heights for given rates, (n_boutons, n_terms + 1), and weighted residual sums."""
    total = np.maximum(np.sum(weights, axis=1), 1e-300)
    mean = np.sum(weights * y, axis=1) / total  # taken out first, lest rounding drowns small residuals
    basis = np.concatenate([np.ones((y.shape[0], 1, at.size)), np.exp(-rates[:, :, None] * at)], axis=1)
    weighted = basis * weights[:, None, :]
    normal = weighted @ basis.transpose(0, 2, 1) + 1e-12 * total[:, None, None] * np.eye(basis.shape[1])
    centred = y - mean[:, None]
    solution = np.linalg.solve(normal, weighted @ centred[:, :, None])[:, :, 0]
    left = np.sum(weights * (centred - np.einsum("bi,bin->bn", solution, basis)) ** 2, axis=1)
    solution[:, 0] += mean
    return solution, left


def _aicc(residual_sum: NDArray[np.float64], n: NDArray[np.intp], k: int) -> NDArray[np.float64]:
    spare = n - k - 1
    correction = np.where(spare > 0, 2 * k * (k + 1) / np.maximum(spare, 1), np.inf if k > 2 else 0.0)
    return np.asarray(n * np.log(residual_sum / np.maximum(n, 1)) + 2 * k + correction)


def _evaluate(at: NDArray[np.float64], rates: NDArray[np.float64], linear: NDArray[np.float64]) -> NDArray[np.float64]:
    course = np.exp(-rates[:, :, None] * at)
    return np.asarray(linear[:, :1] + np.einsum("bi,bin->bn", linear[:, 1:], course))


def _huber(residual: NDArray[np.float64], scale: NDArray[np.float64]) -> NDArray[np.float64]:
    far = np.abs(residual) / np.where(scale > 0, scale, np.inf)
    return np.where(far > 2.0, 2.0 / np.maximum(far, 2.0), 1.0)


def _trend(residual: NDArray[np.float64]) -> NDArray[np.float64]:
    """How clearly neighbouring residuals resemble each other, in SD (von Neumann J, 1941, Ann Math Stat 12:367)."""
    result = np.zeros(residual.shape[0])
    for bouton, series in enumerate(residual):
        r = series[np.isfinite(series)]
        energy = np.sum(r**2)
        if r.size > 7 and energy > 0:
            result[bouton] = (1 - 0.5 * np.sum(np.diff(r) ** 2) / energy) * np.sqrt((r.size**2 - 1) / (r.size - 2))
    return result


def _local_lines(
    at: NDArray[np.float64], y: NDArray[np.float64], weights: NDArray[np.float64]
) -> tuple[NDArray[np.float64], float]:
    """Locally weighted lines with robust weights (Cleveland WS, 1979, J Am Stat Assoc 74:829).

    Returns the curve at the points and the number of parameters that it is worth (the trace of the smoother).
    """
    n_near = min(at.size, max(7, at.size // 4))
    distance = np.abs(at[:, None] - at[None, :])
    span = np.sort(distance, axis=1)[:, n_near - 1 : n_near] * 1.0001 + 1e-12
    kernel = np.clip(1 - np.clip(distance / span, 0, 1) ** 3, 0, 1) ** 3
    robust = np.ones_like(y)
    for _ in range(4):
        local = kernel * (weights * robust)
        away = at[None, :] - at[:, None]
        s0, s1, s2 = np.sum(local, axis=1), np.sum(local * away, axis=1), np.sum(local * away**2, axis=1)
        spread = s0 * s2 - s1**2
        flat = spread <= 1e-12 * s0 * s2
        rows = local * (s2[:, None] - s1[:, None] * away) / np.where(flat, 1.0, spread)[:, None]
        rows[flat] = local[flat] / s0[flat, None]
        curve = rows @ y
        residual = (y - curve) * np.sqrt(weights)
        robust = _huber(residual, robust_sd(residual)[None])
    return curve, float(np.trace(rows))


def _per_trial(
    means: NDArray[np.float64], *, n_frames: NDArray[np.float64], values: NDArray[np.float64], windows: Windows
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Mean before each trial, held until the window of the next trial begins."""
    order = np.argsort(windows.start, kind="stable")
    trial = order[np.clip(np.searchsorted(windows.start[order], np.arange(values.shape[1]), side="right") - 1, 0, None)]
    f0 = means[:, trial]
    typical = np.array([np.median(m[np.isfinite(m)]) if np.isfinite(m).any() else np.nan for m in means])
    f0 = np.where(np.isfinite(f0), f0, typical[:, None])
    frames = np.median(np.maximum(n_frames, 1), axis=1)
    return f0, _frame_sd(values) / np.sqrt(frames)


def _running_percentile(
    values: NDArray[np.float64], *, timing: Timing, percentile: float, running_s: float
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Percentile of overlapping stretches, raised by its depth in normal noise, joined by straight lines."""
    from scipy.special import ndtri

    n_frames = values.shape[1]
    length = int(np.clip(round(running_s / timing.frame_interval_s), 5, n_frames))
    starts = np.unique(np.linspace(0, n_frames - length, max(1, 2 * -(-n_frames // length) - 1)).astype(np.intp))
    frame_sd = _frame_sd(values)
    f0 = np.full(values.shape, np.nan)
    for bouton, series in enumerate(values):
        centres, levels = [], []
        for start in starts:
            stretch = series[start : start + length]
            stretch = stretch[np.isfinite(stretch)]
            if stretch.size:
                centres.append(start + 0.5 * (length - 1))
                levels.append(np.percentile(stretch, percentile))
        if levels:
            f0[bouton] = np.interp(np.arange(n_frames), centres, levels) - ndtri(percentile / 100) * frame_sd[bouton]
    share = percentile / 100
    density = np.exp(-0.5 * ndtri(share) ** 2) / np.sqrt(2 * np.pi)
    return f0, frame_sd * np.sqrt(share * (1 - share) / length) / density


def _frame_sd(values: NDArray[np.float64]) -> NDArray[np.float64]:
    """SD of the noise of single frames, from differences between neighbours, which responses hardly touch."""
    return np.asarray(robust_sd(np.diff(values, axis=1)) / np.sqrt(2))
