"""Ratio of two means of the same trials: without bias, and with the set of ratios that the data allow."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from scipy.special import erfcx, ndtr, stdtrit

from ...errors import InputError

if TYPE_CHECKING:
    from numpy.typing import ArrayLike, NDArray

    Floats = NDArray[np.float64]


@dataclass(frozen=True, slots=True, kw_only=True)
class FiellerInterval:
    """Ratios that a paired t-test does not reject (Fieller 1954).

    Attributes
    ----------
    ratio : float
        Ratio of the means.
    lo, hi : float
        Ends of the interval where it is bounded, else -inf and inf.
    g : float
        Squared ratio of the denominator's critical distance to its mean; the set is bounded where g < 1.
    excluded : tuple of float or None
        Where g >= 1: the only ratios that are rejected lie between these two; None where no ratio is rejected, or
        where the interval is bounded.
    """

    ratio: float
    lo: float
    hi: float
    g: float
    excluded: tuple[float, float] | None

    @property
    def bounded(self) -> bool:
        """Whether the denominator is told apart from zero."""
        return self.g < 1.0


def fieller_interval(numerator: ArrayLike, denominator: ArrayLike, *, confidence: float) -> FiellerInterval:
    """Find all ratios of means that a paired t-test on ``numerator - ratio * denominator`` does not reject.

    Parameters
    ----------
    numerator, denominator : (T,) array_like of float
        Paired values; pairs with a NaN are skipped.
    confidence : float
        Coverage.

    Raises
    ------
    InputError
        If the arrays do not match or hold fewer than two pairs.

    Examples
    --------
    >>> interval = fieller_interval([2.1, 1.9, 2.0], [1.0, 1.1, 0.9], confidence=0.95)
    >>> round(interval.ratio, 2), interval.bounded
    (2.0, True)
    """
    above, below = complete_pairs(numerator, denominator)
    n = above.size
    if n < 2:
        raise InputError(f"A ratio of means needs at least two complete pairs (given {n}).")
    (var_above, cov), (_, var_below) = np.cov(above, below) / n
    mean_above, mean_below = float(above.mean()), float(below.mean())
    t2 = float(stdtrit(n - 1, 0.5 * (1.0 + confidence))) ** 2
    ratio = mean_above / mean_below if mean_below != 0 else np.nan
    g = t2 * var_below / mean_below**2 if mean_below != 0 else np.inf
    # (mean_above - r mean_below)² = t² (var_above - 2 r cov + r² var_below), a quadratic in r
    a, b, c = mean_below**2 - t2 * var_below, mean_above * mean_below - t2 * cov, mean_above**2 - t2 * var_above
    root = b**2 - a * c
    if a > 0:
        half = float(np.sqrt(max(root, 0.0)))
        return FiellerInterval(ratio=ratio, lo=(b - half) / a, hi=(b + half) / a, g=float(g), excluded=None)
    excluded = None
    if root > 0 and a < 0:
        half = float(np.sqrt(root))
        excluded = ((b + half) / a, (b - half) / a)
    return FiellerInterval(ratio=ratio, lo=-np.inf, hi=np.inf, g=float(g), excluded=excluded)


def unbiased_ratio(numerator: ArrayLike, denominator: ArrayLike) -> float:
    """Estimate the ratio of two positive means from paired values, without the bias of the ratio of sample means.

    The ratio of sample means is too large on average, by about the squared CV of the denominator's mean. The inverse
    of a positive mean has an unbiased estimate, Mills' ratio of (mean / SE) over SE (Voinov 1985, for normal means);
    with b the regression of numerator on denominator, (numerator - b denominator) is uncorrelated with it, so that
    b + (numerator - b denominator) / denominator becomes unbiased too.

    Parameters
    ----------
    numerator, denominator : (T,) array_like of float
        Paired values; pairs with a NaN are skipped.

    Returns
    -------
    float
        NaN with fewer than two pairs.

    Notes
    -----
    Measured at 60 trials and one vesicle of 4.5 noise SDs: mean bias 0.3 % or less from p_release 0.3 on (plain ratio:
    6 % at 0.3, 3 % at 0.5, 0.6 % at 0.9) and 1 % at 0.2 (plain: 10 to 13 %). Below, leaving out boutons whose first
    response is within noise of zero biases any estimate of those that remain downward: by 20 % at 0.1.

    Examples
    --------
    >>> first, second = [1.0, 0.0, 1.0, 1.0], [2.0, 1.0, 1.0, 2.0]
    >>> round(unbiased_ratio(second, first), 3), round(sum(second) / sum(first), 3)
    (1.885, 2.0)
    """
    above, below = complete_pairs(numerator, denominator)
    n = above.size
    if n < 2:
        return float("nan")
    covariance = np.cov(above, below) / n
    mean_above, mean_below, se = float(above.mean()), float(below.mean()), float(np.sqrt(covariance[1, 1]))
    if se == 0:
        return mean_above / mean_below if mean_below != 0 else float("nan")
    slope = float(covariance[0, 1] / covariance[1, 1])
    inverse = float(np.sqrt(0.5 * np.pi) * erfcx(mean_below / (np.sqrt(2.0) * se))) / se
    return slope + (mean_above - slope * mean_below) * inverse


def bootstrap_ratio_interval(
    numerator: ArrayLike, denominator: ArrayLike, *, confidence: float, n_bootstrap: int, rng: np.random.Generator
) -> tuple[float, float]:
    """Resample pairs for the interval of a ratio of means (percentiles; Efron & Tibshirani 1993).

    The percentiles lie a little further out than (1 ± confidence) / 2, as Student's t and the divisor n of a
    resample's variance ask for (Hesterberg 2015).

    Parameters
    ----------
    numerator, denominator : (T,) array_like of float
        Paired values; pairs with a NaN are skipped.
    confidence : float
        Coverage.
    n_bootstrap : int
        Resamplings.
    rng : numpy.random.Generator
        Source of the resamplings.

    Returns
    -------
    lo, hi : float
        A resample whose denominator is not positive counts as an infinite ratio, so that hi is infinite where there
        are many of them. (NaN, NaN) with fewer than two pairs.

    Notes
    -----
    Measured at 40, 60 and 80 trials, p_release 0.1 to 0.9, one vesicle 3 or 4.5 noise SDs: these limits cover in 93.9
    to 97.4 %. At 4.5 noise SDs plain percentiles covered in 93.3 to 96.8 %, bias-corrected accelerated ones in
    93.5 to 97.8 %, Student's t of the logarithm in 89.4 to 97.1 %, and Fieller's in 94.4 to 97.8 %, often unbounded at
    p_release 0.1.

    Examples
    --------
    >>> lo, hi = bootstrap_ratio_interval([2.1, 1.9, 2.0] * 9, [1.0, 1.1, 0.9] * 9, confidence=0.95,
    ...     n_bootstrap=2000, rng=np.random.default_rng(1))
    >>> 1.9 < lo < 2.0 < hi < 2.1
    True
    """
    above, below = complete_pairs(numerator, denominator)
    n = above.size
    if n < 2:
        return float("nan"), float("nan")
    picks = rng.integers(0, n, (n_bootstrap, n))
    means_above, means_below = above[picks].mean(axis=1), below[picks].mean(axis=1)
    positive = means_below > 0
    ratios = np.where(positive, means_above / np.where(positive, means_below, 1.0), np.inf)
    wide = float(np.sqrt(n / (n - 1.0)) * stdtrit(n - 1, 0.5 * (1.0 + confidence)))
    tail = float(ndtr(-wide))
    ranked = np.sort(ratios)
    last = n_bootstrap - 1
    return float(ranked[int(tail * last)]), float(ranked[last - int(tail * last)])


def complete_pairs(first: ArrayLike, second: ArrayLike) -> tuple[Floats, Floats]:
    """Return the pairs of which both values are finite.

    Raises
    ------
    InputError
        If the arrays are not one-dimensional and of equal length.
    """
    one, two = np.asarray(first, dtype=np.float64), np.asarray(second, dtype=np.float64)
    if one.ndim != 1 or one.shape != two.shape:
        raise InputError(f"Both pulses need one value a trial (given arrays of shape {one.shape} and {two.shape}).")
    both = np.isfinite(one) & np.isfinite(two)
    return one[both], two[both]
