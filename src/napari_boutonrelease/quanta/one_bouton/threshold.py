"""What a call threshold costs: false calls, misses, and release probability corrected for both."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
from scipy.special import ndtr, stdtr

from ...checks import check_fraction, check_positive
from ...errors import InputError
from ..statistics.intervals import Estimate, _normal_quantile, wilson_interval

if TYPE_CHECKING:
    from numpy.typing import ArrayLike, NDArray


def false_call_rate(threshold_sd: ArrayLike, *, n_baseline: int | None) -> NDArray[np.float64]:
    """Chance that noise alone passes the threshold.

    Parameters
    ----------
    threshold_sd : array_like of float
        Threshold, in SD of the noise.
    n_baseline : int or None
        Samples from which mean and SD of the noise were estimated: one new sample then follows Student's t with
        n - 1 degrees of freedom, scaled by sqrt(1 + 1/n). None where the SD is known.

    Examples
    --------
    >>> float(false_call_rate(3.0, n_baseline=None).round(5)), float(false_call_rate(3.0, n_baseline=10).round(5))
    (0.00135, 0.00938)
    """
    threshold = np.asarray(threshold_sd, dtype=np.float64)
    if n_baseline is None:
        return np.asarray(ndtr(-threshold))
    if n_baseline < 2:
        raise InputError(f"n_baseline must be at least 2 samples to hold an SD (given {n_baseline}).")
    return np.asarray(stdtr(n_baseline - 1, -threshold / np.sqrt(1.0 + 1.0 / n_baseline)))


def peak_false_call_rate(threshold_sd: ArrayLike, *, n_samples: int) -> NDArray[np.float64]:
    """Chance that the largest of `n_samples` independent noise samples passes the threshold.

    Examples
    --------
    >>> float(peak_false_call_rate(2.0, n_samples=5).round(4))
    0.1087
    """
    return np.asarray(-np.expm1(n_samples * np.log1p(-false_call_rate(threshold_sd, n_baseline=None))))


def expected_false_calls(n_failures: ArrayLike, *, threshold_sd: ArrayLike) -> NDArray[np.float64]:
    """Count the calls to expect from noise in `n_failures` trials that released nothing.

    Examples
    --------
    >>> float(expected_false_calls(80, threshold_sd=2.5).round(2))
    0.5
    """
    return np.asarray(n_failures, dtype=np.float64) * false_call_rate(threshold_sd, n_baseline=None)


def detection_power(amplitude_sd: ArrayLike, *, threshold_sd: ArrayLike) -> NDArray[np.float64]:
    """Chance that a response of `amplitude_sd` noise SDs passes the threshold.

    Examples
    --------
    >>> float(detection_power(3.0, threshold_sd=2.0).round(4))
    0.8413
    """
    return np.asarray(ndtr(np.asarray(amplitude_sd, dtype=np.float64) - np.asarray(threshold_sd, dtype=np.float64)))


def rogan_gladen(
    n_called: int,
    n_trials: int,
    *,
    sensitivity: float,
    specificity: float,
    n_sensitivity: float,
    n_specificity: float,
    confidence: float,
) -> tuple[Estimate, bool]:
    """Release probability from counted calls, corrected for false calls and misses (Rogan & Gladen 1978).

    Parameters
    ----------
    n_called, n_trials : int
        Calls and trials.
    sensitivity, specificity : float
        Share of releases that are called, and of failures that are not. Must add up to more than 1.
    n_sensitivity, n_specificity : float
        Cases from which either was estimated; infinite where it is known.
    confidence : float
        Coverage of the interval.

    Returns
    -------
    estimate : Estimate
        (p_called + specificity - 1) / (sensitivity + specificity - 1), kept within [0, 1]. The interval is the
        corrected Wilson interval where both rates are known, else normal by the delta method.
    clipped : bool
        Whether the formula fell outside [0, 1].

    Raises
    ------
    InputError
        If a rate is out of range or a call says nothing about release.

    Examples
    --------
    >>> estimate, clipped = rogan_gladen(60, 200, sensitivity=0.9, specificity=0.95, n_sensitivity=float("inf"),
    ...     n_specificity=float("inf"), confidence=0.95)
    >>> round(estimate.value, 4), round(estimate.se, 4), clipped
    (0.2941, 0.0381, False)
    """
    check_fraction("sensitivity", sensitivity)
    check_fraction("specificity", specificity)
    gain = sensitivity + specificity - 1.0
    if gain <= 0:
        raise InputError(
            f"sensitivity and specificity must add up to more than 1 (given {sensitivity:g} + {specificity:g}); "
            "choose another threshold."
        )
    if n_trials == 0:
        return Estimate(value=np.nan, lo=np.nan, hi=np.nan, method="none: no trial"), False
    called = n_called / n_trials
    raw = (called + specificity - 1.0) / gain
    variance = called * (1 - called) / n_trials
    variance += raw**2 * sensitivity * (1 - sensitivity) / n_sensitivity
    variance += (1 - raw) ** 2 * specificity * (1 - specificity) / n_specificity
    se = float(np.sqrt(variance)) / gain
    if np.isinf(n_sensitivity) and np.isinf(n_specificity):
        method = "Wilson, corrected"
        limits = wilson_interval(n_called, n_trials, confidence=confidence)
        lo, hi = ((float(limit) + specificity - 1.0) / gain for limit in limits)
    else:
        method = "delta"
        half = _normal_quantile(confidence) * se
        lo, hi = raw - half, raw + half
    value, lo, hi = (min(max(number, 0.0), 1.0) for number in (raw, lo, hi))
    # a rounding error short of 0 or 1 is no clip
    clipped = raw < -1e-12 or raw > 1.0 + 1e-12
    return Estimate(value=value, se=se, lo=lo, hi=hi, method=method), clipped


def balanced_threshold(weights: ArrayLike, *, q: float, q_cv: float, noise_sd: float) -> float:
    """Threshold at which a mixture is expected to give as many misses as false calls.

    Parameters
    ----------
    weights : (M,) array_like of float
        Probability of 0, 1, ... vesicles.
    q, q_cv : float
        Mean response to one vesicle and its coefficient of variation.
    noise_sd : float
        SD of the noise, in the unit of q.

    Returns
    -------
    float
        Threshold in the unit of q, at least 0; NaN where the mixture never releases.

    Examples
    --------
    >>> round(balanced_threshold([0.5, 0.5], q=1.0, q_cv=0.0, noise_sd=0.25), 6)
    0.5
    """
    check_positive("q", q)
    check_positive("noise_sd", noise_sd)
    shares = np.asarray(weights, dtype=np.float64)
    m = np.arange(1, shares.size)
    spread = np.sqrt(noise_sd**2 + m * (q * q_cv) ** 2)
    if not (shares[1:] > 0).any():
        return float("nan")

    def excess_of_misses(threshold: float) -> float:
        misses = float(shares[1:] @ ndtr((threshold - m * q) / spread))
        return misses - float(shares[0] * ndtr(-threshold / noise_sd))

    low, high = 0.0, float(q * shares.size + 10.0 * spread.max())
    for _ in range(100):
        middle = 0.5 * (low + high)
        low, high = (low, middle) if excess_of_misses(middle) > 0 else (middle, high)
    return 0.5 * (low + high)
