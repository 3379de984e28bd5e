"""Intervals and tests for proportions: counted releases, their differences and ratios.

All functions take arrays and broadcast. A proportion of nothing (n = 0) has the interval (NaN, NaN).
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Literal

import numpy as np
from scipy.special import bdtr, betaincinv, chdtrc, ndtri

from ...errors import InputError

if TYPE_CHECKING:
    from numpy.typing import ArrayLike, NDArray

    Limits = tuple[NDArray[np.float64], NDArray[np.float64]]


@dataclass(frozen=True, slots=True, kw_only=True)
class Estimate:
    """A number, how far it can be trusted, and how that was found.

    Attributes
    ----------
    value, se : float
        The estimate and its standard error; NaN where there is none.
    lo, hi : float
        Interval; NaN where there is none, infinite where the data set no limit.
    method : str
        How the interval was made.
    """

    value: float
    se: float = float("nan")
    lo: float
    hi: float
    method: str


def wilson_interval(successes: ArrayLike, trials: ArrayLike, *, confidence: float) -> Limits:
    """Score interval of a proportion (Wilson 1927; Newcombe 1998).

    Parameters
    ----------
    successes, trials : array_like of int
        Releases and trials; 0 <= successes <= trials.
    confidence : float
        Coverage of the two-sided interval, between 0 and 1.

    Returns
    -------
    lo, hi : ndarray of float
        Exactly 0 at no success and exactly 1 at nothing but successes.

    Raises
    ------
    InputError
        If a count is impossible or `confidence` is not between 0 and 1.

    Examples
    --------
    >>> lo, hi = wilson_interval(15, 148, confidence=0.95)
    >>> round(float(lo), 4), round(float(hi), 4)
    (0.0624, 0.1605)
    """
    k, n = _counts(successes, trials)
    z = _normal_quantile(confidence)
    with np.errstate(invalid="ignore", divide="ignore"):
        share = k / n
        centre = share + z**2 / (2 * n)
        half = z * np.sqrt(share * (1 - share) / n + z**2 / (4 * n**2))
        lo = (centre - half) / (1 + z**2 / n)
        hi = (centre + half) / (1 + z**2 / n)
    return _exact_ends(lo, hi, k, n)


def clopper_pearson_interval(successes: ArrayLike, trials: ArrayLike, *, confidence: float) -> Limits:
    """Exact interval of a proportion (Clopper & Pearson 1934); never covers less than `confidence`.

    Parameters, returns and errors as in `wilson_interval`.

    Examples
    --------
    >>> lo, hi = clopper_pearson_interval(0, 20, confidence=0.95)
    >>> float(lo), round(float(hi), 4)
    (0.0, 0.1684)
    """
    k, n = _counts(successes, trials)
    tail = _tail(confidence)
    lo = betaincinv(np.maximum(k, 1), n - k + 1, tail)
    hi = betaincinv(k + 1, np.maximum(n - k, 1), 1 - tail)
    return _exact_ends(lo, hi, k, n)


def jeffreys_interval(successes: ArrayLike, trials: ArrayLike, *, confidence: float) -> Limits:
    """Equal-tailed interval under the Jeffreys prior, with ends 0 and 1 (Brown, Cai & DasGupta 2001).

    Parameters, returns and errors as in `wilson_interval`.

    Examples
    --------
    >>> lo, hi = jeffreys_interval(0, 20, confidence=0.95)
    >>> float(lo), round(float(hi), 4)
    (0.0, 0.1166)
    """
    k, n = _counts(successes, trials)
    tail = _tail(confidence)
    lo, hi = betaincinv(k + 0.5, n - k + 0.5, tail), betaincinv(k + 0.5, n - k + 0.5, 1 - tail)
    return _exact_ends(lo, hi, k, n)


def zero_success_upper_limit(trials: ArrayLike, *, confidence: float) -> NDArray[np.float64]:
    """Exact one-sided upper limit of a proportion that showed no success: 1 - (1 - confidence)^(1 / trials).

    Examples
    --------
    >>> round(float(zero_success_upper_limit(20, confidence=0.95)), 4)
    0.1391
    """
    _, n = _counts(0, trials)
    log_miss = np.log(2 * _tail(confidence))
    with np.errstate(divide="ignore"):
        limit = -np.expm1(log_miss / n)
    return np.where(n > 0, limit, np.nan)


def newcombe_difference_interval(
    successes_1: ArrayLike, trials_1: ArrayLike, successes_2: ArrayLike, trials_2: ArrayLike, *, confidence: float
) -> Limits:
    """Interval of p1 - p2 of two independent proportions from their score intervals (Newcombe 1998, method 10).

    Examples
    --------
    >>> lo, hi = newcombe_difference_interval(7, 34, 1, 34, confidence=0.95)
    >>> round(float(lo), 3), round(float(hi), 3)
    (0.019, 0.34)
    """
    (k1, n1), (k2, n2) = _counts(successes_1, trials_1), _counts(successes_2, trials_2)
    lo1, hi1 = wilson_interval(k1, n1, confidence=confidence)
    lo2, hi2 = wilson_interval(k2, n2, confidence=confidence)
    with np.errstate(invalid="ignore", divide="ignore"):
        p1, p2 = k1 / n1, k2 / n2
    difference = p1 - p2
    return difference - np.hypot(p1 - lo1, hi2 - p2), difference + np.hypot(hi1 - p1, p2 - lo2)


def ratio_interval(
    successes_1: ArrayLike,
    trials_1: ArrayLike,
    successes_2: ArrayLike,
    trials_2: ArrayLike,
    *,
    confidence: float,
    method: Literal["score", "log"],
) -> Limits:
    """Interval of p1 / p2 of two independent proportions.

    Parameters
    ----------
    successes_1, trials_1, successes_2, trials_2 : array_like of int
        Counts of the numerator's and the denominator's proportion.
    confidence : float
        Coverage of the two-sided interval.
    method : {"score", "log"}
        Score interval (Koopman 1984, with the variance correction N / (N - 1) of Miettinen & Nurminen 1985), which
        holds for few or no successes, or the normal interval of the logarithm (Katz et al. 1978), which is
        (NaN, NaN) without a success on either side.

    Returns
    -------
    lo, hi : ndarray of float
        hi is infinite where the second proportion may be zero.

    Examples
    --------
    >>> lo, hi = ratio_interval(7, 34, 1, 34, confidence=0.95, method="score")
    >>> round(float(lo), 2), round(float(hi), 2)
    (1.21, 43.03)
    """
    counts = np.broadcast_arrays(*_counts(successes_1, trials_1), *_counts(successes_2, trials_2))
    z = _normal_quantile(confidence)
    if method == "score":
        return _koopman_interval(*counts, z=z)
    k1, n1, k2, n2 = counts
    with np.errstate(invalid="ignore", divide="ignore"):
        centre = np.log(k1 / n1) - np.log(k2 / n2)
        half = z * np.sqrt(1 / k1 - 1 / n1 + 1 / k2 - 1 / n2)
        lo, hi = np.exp(centre - half), np.exp(centre + half)
    defined = (k1 > 0) & (k2 > 0)
    return np.where(defined, lo, np.nan), np.where(defined, hi, np.nan)


def mcnemar_test(
    only_first: int, only_second: int, *, method: Literal["exact", "chi2", "corrected"]
) -> tuple[float, float]:
    """Test whether two pulses of the same trials release equally often (McNemar 1947).

    Parameters
    ----------
    only_first, only_second : int
        Trials in which only the first, and only the second pulse released.
    method : {"exact", "chi2", "corrected"}
        Exact binomial, chi-square, or chi-square with continuity correction.

    Returns
    -------
    statistic, p_value : float
        The smaller count and its exact p, or chi-square and its p; p is 1 where no trial is discordant.

    Examples
    --------
    >>> statistic, p_value = mcnemar_test(121, 59, method="chi2")
    >>> round(statistic, 4), f"{p_value:.3g}"
    (21.3556, '3.82e-06')
    """
    discordant = only_first + only_second
    if min(only_first, only_second) < 0:
        raise InputError(f"Discordant trials must be 0 or more (given {only_first} and {only_second}).")
    if method == "exact":
        smaller = min(only_first, only_second)
        return float(smaller), min(1.0, 2.0 * float(bdtr(smaller, discordant, 0.5))) if discordant else 1.0
    if discordant == 0:
        return 0.0, 1.0
    gap = abs(only_first - only_second) - (1.0 if method == "corrected" else 0.0)
    chi2 = max(gap, 0.0) ** 2 / discordant
    return chi2, float(chdtrc(1, chi2))


def _koopman_interval(
    k1: NDArray[np.float64], n1: NDArray[np.float64], k2: NDArray[np.float64], n2: NDArray[np.float64], *, z: float
) -> Limits:
    """Ratios at which the score statistic equals z², by bisection on the logarithm of the ratio."""

    def score(log_ratio: NDArray[np.float64]) -> NDArray[np.float64]:
        ratio = np.exp(log_ratio)
        a, b, c = (n1 + n2) * ratio, n1 * ratio + k1 + n2 + k2 * ratio, k1 + k2
        p2 = 2 * c / (b + np.sqrt(np.maximum(b**2 - 4 * a * c, 0.0)))  # the smaller root, without cancellation
        p1 = np.minimum(ratio * p2, 1.0)
        spread1, spread2 = n1 * p1 * (1 - p1), n2 * p2 * (1 - p2)
        with np.errstate(divide="ignore", invalid="ignore"):
            parts = (k1 - n1 * p1) ** 2 / spread1, (k2 - n2 * p2) ** 2 / spread2
        total: NDArray[np.float64] = np.nan_to_num(parts[0], nan=0.0) + np.nan_to_num(parts[1], nan=0.0)
        return total * (1.0 - 1.0 / (n1 + n2))

    with np.errstate(divide="ignore", invalid="ignore"):
        centre = np.log(k1 / n1) - np.log(k2 / n2)
    start = np.clip(np.nan_to_num(centre, nan=0.0), -20.0, 20.0)
    ends = []
    for far in (-30.0, 30.0):
        inside, outside = start.copy(), np.full_like(start, far)
        for _ in range(80):
            middle = 0.5 * (inside + outside)
            within = score(middle) < z**2
            inside, outside = np.where(within, middle, inside), np.where(within, outside, middle)
        ends.append(np.exp(inside))
    known = (n1 > 0) & (n2 > 0)
    lo = np.where(k1 == 0, 0.0, ends[0])
    hi = np.where(k2 == 0, np.inf, ends[1])
    return np.where(known, lo, np.nan), np.where(known, hi, np.nan)


def _counts(successes: ArrayLike, trials: ArrayLike) -> Limits:
    k, n = np.broadcast_arrays(np.asarray(successes, dtype=np.float64), np.asarray(trials, dtype=np.float64))
    if not ((k >= 0) & (k <= n)).all():
        where = np.flatnonzero(~((k >= 0) & (k <= n)).ravel())[0]
        raise InputError(
            f"Successes must lie between 0 and the number of trials (given {k.flat[where]:g} of {n.flat[where]:g})."
        )
    return k, n


def _tail(confidence: float) -> float:
    if not 0.0 < confidence < 1.0:
        raise InputError(f"confidence must lie between 0 and 1, as 0.95 does (given {confidence:g}).")
    return 0.5 * (1.0 - confidence)


def _normal_quantile(confidence: float) -> float:
    return float(-ndtri(_tail(confidence)))


def _exact_ends(lo: ArrayLike, hi: ArrayLike, k: NDArray[np.float64], n: NDArray[np.float64]) -> Limits:
    """Put the ends of proportions 0 and 1 where they belong, and no interval where there was no trial."""
    lo, hi = np.where(k == 0, 0.0, lo), np.where(k == n, 1.0, hi)
    return np.where(n > 0, lo, np.nan), np.where(n > 0, hi, np.nan)
