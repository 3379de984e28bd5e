"""Differences and ratios of two estimates that were made independently, from their own intervals.

Each limit of the difference takes the distance from estimate to limit that matters on either side (the square-and-add
method of variance estimates recovery: Newcombe 1998 for proportions, Zou & Donner 2008 in general). So the skewed
interval of a probability near 0 or 1 stays skewed in the difference.
"""

from __future__ import annotations

import numpy as np

from ...errors import InputError
from .intervals import Estimate

_METHOD = "square and add"


def difference_of_estimates(second: Estimate, first: Estimate) -> Estimate:
    """Return `second` - `first` of two independent estimates.

    Parameters
    ----------
    second, first : Estimate
        Each with an interval of the same coverage, which the result has, too.

    Returns
    -------
    Estimate
        NaN where one of them is; a limit is infinite where one of theirs is.

    References
    ----------
    Newcombe 1998 Stat Med 17:873; Zou & Donner 2008 Stat Med 27:1693.

    Examples
    --------
    >>> from napari_boutonrelease.quanta import wilson_interval
    >>> one, other = (Estimate(value=k / 34, lo=float(wilson_interval(k, 34, confidence=0.95)[0]),
    ...     hi=float(wilson_interval(k, 34, confidence=0.95)[1]), method="Wilson") for k in (7, 1))
    >>> change = difference_of_estimates(one, other)
    >>> round(change.lo, 3), round(change.hi, 2)
    (0.019, 0.34)
    """
    value = second.value - first.value
    if not np.isfinite(value):
        return Estimate(value=np.nan, lo=np.nan, hi=np.nan, method="none: one of the two has no value")
    below = np.hypot(second.value - second.lo, first.hi - first.value)
    above = np.hypot(second.hi - second.value, first.value - first.lo)
    return Estimate(value=value, lo=float(value - below), hi=float(value + above), method=_METHOD)


def ratio_of_estimates(second: Estimate, first: Estimate) -> Estimate:
    """Return `second` / `first` of two independent positive estimates, by the difference of their logarithms.

    Parameters
    ----------
    second, first : Estimate
        Each with an interval of the same coverage. A lower limit of 0 or less is no limit.

    Returns
    -------
    Estimate
        NaN where a value is missing or not positive.

    Raises
    ------
    InputError
        If an interval does not hold its estimate.

    References
    ----------
    Zou & Donner 2008 Stat Med 27:1693.
    """
    return _exponential(difference_of_estimates(_logarithm(second), _logarithm(first)))


def _logarithm(estimate: Estimate) -> Estimate:
    if not estimate.value > 0:
        return Estimate(value=np.nan, lo=np.nan, hi=np.nan, method="none: not positive")
    if estimate.lo > estimate.value or estimate.hi < estimate.value:
        raise InputError(
            f"The interval {estimate.lo:g} to {estimate.hi:g} does not hold its estimate {estimate.value:g}."
        )
    lo = float(np.log(estimate.lo)) if estimate.lo > 0 else -np.inf
    return Estimate(value=float(np.log(estimate.value)), lo=lo, hi=float(np.log(estimate.hi)), method=estimate.method)


def _exponential(estimate: Estimate) -> Estimate:
    value, lo, hi = (float(np.exp(number)) for number in (estimate.value, estimate.lo, estimate.hi))
    return Estimate(value=value, lo=lo, hi=hi, method=estimate.method)
