"""Classical estimates of vesicles per stimulus, as cross-checks of the mixture: failures, direct, 1/CV², moments."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from ...checks import check_not_negative, check_positive
from ...errors import InputError
from ..statistics.intervals import Estimate, _normal_quantile, wilson_interval

if TYPE_CHECKING:
    from numpy.typing import ArrayLike, NDArray


def poisson_failures(n_failures: int, n_trials: int, *, confidence: float) -> Estimate:
    """Mean number of vesicles from failures under Poisson release: m = -ln(failures / trials).

    Parameters
    ----------
    n_failures, n_trials : int
        Failures and trials (del Castillo & Katz 1954).
    confidence : float
        Coverage of the interval, which is the Wilson interval of the failures, transformed.

    Returns
    -------
    Estimate
        SE is sqrt((exp(m) - 1) / trials). Without a failure the value is infinite and only `lo` is finite.

    Examples
    --------
    >>> estimate = poisson_failures(18, 198, confidence=0.95)
    >>> round(estimate.value, 4), round(estimate.se, 4)
    (2.3979, 0.2247)
    """
    if n_trials == 0:
        return _unknown("no trial")
    lo, hi = wilson_interval(n_failures, n_trials, confidence=confidence)
    with np.errstate(divide="ignore"):
        m, m_lo, m_hi = (abs(float(-np.log(share))) for share in (np.float64(n_failures) / n_trials, hi, lo))
    se = float(np.sqrt(np.expm1(m) / n_trials)) if np.isfinite(m) else np.nan
    return Estimate(value=m, se=se, lo=m_lo, hi=m_hi, method="Wilson of failures")


def binomial_failures(n_failures: int, n_trials: int, *, n_sites: int, confidence: float) -> Estimate:
    """Release probability of each of `n_sites` sites from failures: p_site = 1 - (failures / trials)^(1 / n_sites).

    Examples
    --------
    >>> round(binomial_failures(8, 100, n_sites=5, confidence=0.95).value, 3)
    0.397
    """
    if n_sites < 1:
        raise InputError(f"n_sites must be at least 1 (given {n_sites}).")
    if n_trials == 0:
        return _unknown("no trial")
    share = n_failures / n_trials
    lo, hi = (float(limit) for limit in wilson_interval(n_failures, n_trials, confidence=confidence))
    p, p_lo, p_hi = (1.0 - f ** (1.0 / n_sites) for f in (share, hi, lo))
    # d p / d f = f^(1/n - 1) / n
    se = np.sqrt(share * (1 - share) / n_trials) * share ** (1.0 / n_sites - 1.0) / n_sites if share > 0 else np.nan
    return Estimate(value=p, se=float(se), lo=p_lo, hi=p_hi, method="Wilson of failures")


def direct_vesicles(amplitudes: ArrayLike, *, q: float, q_se: float, confidence: float) -> Estimate:
    """Mean number of vesicles as mean amplitude over the response to one vesicle.

    Parameters
    ----------
    amplitudes : (T,) array_like of float
        Amplitudes, failures included; NaN is skipped.
    q, q_se : float
        Mean response to one vesicle and its standard error, in the same unit.
    confidence : float
        Coverage of the interval (normal, delta method).

    Examples
    --------
    >>> round(direct_vesicles([0.0, 0.1, 0.2, 0.1], q=0.1, q_se=0.0, confidence=0.95).value, 3)
    1.0
    """
    check_positive("q", q)
    check_not_negative("q_se", q_se)
    usable = _finite(amplitudes)
    if usable.size < 2:
        return _unknown("fewer than two amplitudes")
    m = float(usable.mean()) / q
    se = float(np.sqrt(usable.var(ddof=1) / usable.size / q**2 + (m * q_se / q) ** 2))
    half = _normal_quantile(confidence) * se
    return Estimate(value=m, se=se, lo=m - half, hi=m + half, method="delta")


def vesicles_from_cv(amplitudes: ArrayLike, *, noise_sd: float, q_cv: float, confidence: float) -> Estimate:
    """Mean number of vesicles from the variation of amplitudes, m = (1 + q_cv²) / CV² (Poisson release).

    Parameters
    ----------
    amplitudes : (T,) array_like of float
        Amplitudes, failures included; NaN is skipped.
    noise_sd : float
        SD of the recording's noise, whose variance is taken out of that of the amplitudes.
    q_cv : float
        Coefficient of variation of the response to one vesicle; 0 gives plain 1/CV².
    confidence : float
        Coverage of the interval: normal on the logarithm, by the delta method with the amplitudes' own third and
        fourth moments.

    Returns
    -------
    Estimate
        NaN where the amplitudes vary no more than the noise, or their mean is not positive. Under binomial release
        the value estimates m (1 + q_cv²) / (1 + q_cv² - p_site) instead.

    Examples
    --------
    >>> round(vesicles_from_cv([0.0, 0.1, 0.2, 0.1], noise_sd=0.0, q_cv=0.0, confidence=0.95).value, 3)
    1.5
    """
    check_not_negative("noise_sd", noise_sd)
    check_not_negative("q_cv", q_cv)
    usable = _finite(amplitudes)
    if usable.size < 3:
        return _unknown("fewer than three amplitudes")
    mean, release_variance = float(usable.mean()), float(usable.var(ddof=1)) - noise_sd**2
    if mean <= 0 or release_variance <= 0:
        return _unknown("amplitudes vary no more than noise" if mean > 0 else "mean amplitude not above zero")
    m = (1.0 + q_cv**2) * mean**2 / release_variance
    third = float(np.mean((usable - mean) ** 3))
    log_variance = (
        4.0 * usable.var(ddof=1) / (usable.size * mean**2)
        + variance_of_variance(usable) / release_variance**2
        - 4.0 * third / (usable.size * mean * release_variance)
    )
    log_se = float(np.sqrt(max(log_variance, 0.0)))
    with np.errstate(over="ignore"):  # an interval may have no end
        spread = float(np.exp(_normal_quantile(confidence) * log_se))
    return Estimate(value=m, se=m * log_se, lo=m / spread, hi=m * spread, method="delta on the logarithm")


def variance_of_variance(values: ArrayLike) -> float:
    """Estimate the sampling variance of a sample variance: s⁴ (2 / (n - 1) + K / n), K the excess kurtosis.

    Exact for the true variance and kurtosis; here both are estimated from `values` (NaN skipped).

    Examples
    --------
    >>> round(variance_of_variance([1.0, 2.0, 3.0, 4.0]), 3)
    0.907
    """
    usable = _finite(values)
    if usable.size < 2:
        return float("nan")
    spread = float(usable.var())
    kurtosis = float(np.mean((usable - usable.mean()) ** 4)) / spread**2 - 3.0 if spread > 0 else 0.0
    return variance_of_variance_from_kurtosis(float(usable.var(ddof=1)), kurtosis, n=usable.size)


def variance_of_variance_from_kurtosis(variance: float, excess_kurtosis: float, *, n: int) -> float:
    """Return the sampling variance of the variance of `n` values: variance² (2 / (n - 1) + excess_kurtosis / n).

    Examples
    --------
    >>> round(variance_of_variance_from_kurtosis(0.3 * 0.7, 1 / 0.21 - 6, n=3), 4)  # a coin with 0.3, thrice
    0.0259
    """
    return variance**2 * (2.0 / (n - 1) + excess_kurtosis / n)


def binomial_moments(mean_vesicles: float, variance_vesicles: float) -> tuple[float, float]:
    """Sites and their probability from mean and variance of vesicle counts: p = 1 - variance / mean, n = mean / p.

    n is negative, and p too, where the counts vary more than a Poisson: no binomial describes them. Moments are
    unstable at small p (Olkin, Petkau & Zidek 1981).

    Examples
    --------
    >>> n_sites, p_site = binomial_moments(2.0, 1.2)
    >>> round(n_sites, 6), round(p_site, 6)
    (5.0, 0.4)
    """
    if mean_vesicles <= 0:
        return float("nan"), float("nan")
    p_site = 1.0 - variance_vesicles / mean_vesicles
    return (mean_vesicles / p_site if p_site != 0 else float("inf")), p_site


def _finite(values: ArrayLike) -> NDArray[np.float64]:
    array = np.asarray(values, dtype=np.float64)
    return array[np.isfinite(array)]


def _unknown(why: str) -> Estimate:
    return Estimate(value=np.nan, lo=np.nan, hi=np.nan, method=f"none: {why}")
