"""Changes of release and of its amplitude over the trials."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    from numpy.typing import ArrayLike, NDArray

__all__ = ["Rundown", "amplitude_trend", "measure_rundown", "release_trend"]


@dataclass(frozen=True, slots=True, kw_only=True)
class Rundown:
    """Trends of each bouton over the trials.

    Attributes
    ----------
    release_log_odds : (n_boutons,) ndarray
        Change of the log odds of a call from the first trial to the last; NaN where undefined.
    release_p : (n_boutons,) ndarray
        p-value of that change (likelihood ratio).
    amplitude_change : (n_boutons,) ndarray
        Theil-Sen slope of the amplitude times the number of trials, dF/F.
    amplitude_p : (n_boutons,) ndarray
        p-value of a monotonic trend (Mann-Kendall).
    """

    release_log_odds: NDArray[np.float64]
    release_p: NDArray[np.float64]
    amplitude_change: NDArray[np.float64]
    amplitude_p: NDArray[np.float64]


def measure_rundown(amplitude: NDArray[np.float64], *, called: NDArray[np.float64]) -> Rundown:
    """Test every bouton's first pulse for a trend over the trials.

    Parameters
    ----------
    amplitude, called : (n_boutons, n_trials, n_pulses) ndarray
        Amplitudes, dF/F, and calls (1, 0); NaN where there is none.

    Returns
    -------
    Rundown
    """
    releases = [release_trend(series) for series in called[:, :, 0]]
    amplitudes = [amplitude_trend(series) for series in amplitude[:, :, 0]]
    log_odds, release_p = np.array(releases).reshape(-1, 2).T
    slope, amplitude_p = np.array(amplitudes).reshape(-1, 2).T
    return Rundown(
        release_log_odds=log_odds,
        release_p=release_p,
        amplitude_change=slope * amplitude.shape[1],
        amplitude_p=amplitude_p,
    )


def release_trend(called: ArrayLike) -> tuple[float, float]:
    """Logistic regression of calls on the trial number.

    Parameters
    ----------
    called : (n_trials,) array_like
        1 or 0; NaN is skipped.

    Returns
    -------
    log_odds, p_value : float
        Change of the log odds from the first trial to the last, and its likelihood-ratio p-value. Where all trials are
        alike there is no trend: 0 and 1. Where one trial divides calls from failures, the log odds are infinite.

    Examples
    --------
    >>> log_odds, p = release_trend([1, 1, 1, 1, 0, 1, 1, 0, 1, 0, 0, 1, 0, 0, 0, 0])
    >>> log_odds < 0, p < 0.01
    (True, True)
    """
    from scipy.special import chdtrc, expit, xlogy

    calls = np.asarray(called, dtype=np.float64)
    known = np.isfinite(calls)
    y, x = calls[known], np.linspace(-0.5, 0.5, calls.size)[known]
    share = float(np.mean(y)) if y.size else 0.0
    if y.size < 3 or share in (0.0, 1.0):
        return 0.0, 1.0
    null = float(y.size * (xlogy(share, share) + xlogy(1 - share, 1 - share)))
    with_call, without = x[y == 1], x[y == 0]
    if with_call.min() > without.max() or with_call.max() < without.min():
        return float(np.copysign(np.inf, with_call[0] - without[0])), float(chdtrc(1, -2 * null))
    design = np.column_stack([np.ones_like(x), x])
    beta = np.array([np.log(share / (1 - share)), 0.0])
    for _ in range(100):
        p = expit(design @ beta)
        weight = np.maximum(p * (1 - p), 1e-10)
        step = np.linalg.solve(design.T @ (weight[:, None] * design), design.T @ (y - p))
        beta = beta + np.clip(step, -3.0, 3.0)
        if np.max(np.abs(step)) < 1e-10:
            break
    p = expit(design @ beta)
    ratio = 2 * (float(np.sum(xlogy(y, p) + xlogy(1 - y, 1 - p))) - null)
    return float(beta[1]), float(chdtrc(1, max(ratio, 0.0)))


def amplitude_trend(amplitude: ArrayLike) -> tuple[float, float]:
    """Slope over the trials (Theil 1950, Sen 1968) and Mann-Kendall test of a monotonic trend, ties allowed for.

    Parameters
    ----------
    amplitude : (n_trials,) array_like
        NaN is skipped.

    Returns
    -------
    slope, p_value : float
        Median slope a trial, and the two-sided p-value (normal approximation with continuity correction); NaN and 1
        with fewer than 3 values.

    Examples
    --------
    >>> slope, p = amplitude_trend([23, 24, 29, 6, 29, 24, 24, 29, 23])
    >>> round(slope, 6), round(p, 6)
    (0.0, 0.826921)
    """
    from scipy.special import ndtr

    values = np.asarray(amplitude, dtype=np.float64)
    trial = np.flatnonzero(np.isfinite(values))
    y = values[trial]
    n = y.size
    if n < 3:
        return np.nan, 1.0
    first, second = np.triu_indices(n, k=1)
    rises = y[second] - y[first]
    slope = float(np.median(rises / (trial[second] - trial[first])))
    score = float(np.sum(np.sign(rises)))
    ties = np.unique(y, return_counts=True)[1].astype(np.float64)
    variance = (n * (n - 1) * (2 * n + 5) - float(np.sum(ties * (ties - 1) * (2 * ties + 5)))) / 18
    if variance <= 0:
        return slope, 1.0
    z = (score - np.sign(score)) / np.sqrt(variance)
    return slope, float(2 * ndtr(-abs(z)))
