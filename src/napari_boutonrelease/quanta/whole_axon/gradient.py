"""A quantity of boutons against the distance along their axon."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from scipy.special import stdtrit

from ...checks import check_array
from ...errors import InputError
from ..statistics.intervals import Estimate

if TYPE_CHECKING:
    from numpy.typing import ArrayLike, NDArray

FEWEST = 4
"""Boutons below which no slope is given."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Gradient:
    """Change along the axon.

    Attributes
    ----------
    slope : Estimate
        Change per unit of distance, least squares with Student's t; NaN with `method` saying why.
    at_start : float
        The line at distance 0.
    rank_correlation, p : float
        Spearman's correlation and its two-sided permutation p.
    n_boutons : int
        Boutons with both numbers.
    """

    slope: Estimate
    at_start: float
    rank_correlation: float
    p: float
    n_boutons: int


def measure_gradient(
    values: ArrayLike, *, position: ArrayLike, confidence: float, n_permutations: int, rng: np.random.Generator
) -> Gradient:
    """Fit a line of a quantity against the distance along the axon, and correlate their ranks.

    Parameters
    ----------
    values, position : (n,) array_like of float
        Boutons with a NaN in either are left out.
    confidence : float
        Coverage of the slope's interval.
    n_permutations : int
        Random orders for the p.
    rng : numpy.random.Generator
        Source of the orders.

    Raises
    ------
    InputError
        If the arrays do not match.

    Examples
    --------
    >>> rng = np.random.default_rng(1)
    >>> found = measure_gradient(
    ...     [0.1, 0.2, 0.3, 0.4, 0.6], position=[0, 10, 20, 30, 40], confidence=0.95, n_permutations=999, rng=rng
    ... )
    >>> round(found.slope.value, 4), round(found.rank_correlation, 3)
    (0.012, 1.0)
    """
    y, x = check_array("values", values, n_dims=1), check_array("position", position, n_dims=1)
    if x.shape != y.shape:
        raise InputError(f"values {y.shape} and position {x.shape} must describe the same boutons.")
    known = np.isfinite(x) & np.isfinite(y)
    x, y = x[known], y[known]
    n = x.size
    if n < FEWEST:
        return _none(n, f"none: needs at least {FEWEST} boutons along the path (given {n})")
    if np.ptp(x) == 0:
        return _none(n, "none: all boutons lie at the same distance")
    from_mean = x - x.mean()
    spread = float(from_mean @ from_mean)
    slope = float(from_mean @ (y - y.mean())) / spread
    residual = y - y.mean() - slope * from_mean
    se = float(np.sqrt(residual @ residual / (n - 2) / spread))
    half = float(stdtrit(n - 2, 0.5 * (1.0 + confidence))) * se
    correlation, p = spearman(x, y, n_permutations=n_permutations, rng=rng)
    return Gradient(
        slope=Estimate(value=slope, se=se, lo=slope - half, hi=slope + half, method="least squares, Student's t"),
        at_start=float(y.mean() - slope * x.mean()),
        rank_correlation=correlation,
        p=p,
        n_boutons=n,
    )


def spearman(x: ArrayLike, y: ArrayLike, *, n_permutations: int, rng: np.random.Generator) -> tuple[float, float]:
    """Correlate ranks (Spearman 1904), ties shared, with the two-sided p of random orders.

    Returns
    -------
    correlation, p : float
        NaN where one of the two does not vary.
    """
    a, b = standard_ranks(np.asarray(x, dtype=np.float64)), standard_ranks(np.asarray(y, dtype=np.float64))
    if not (np.any(a) and np.any(b)):
        return float("nan"), float("nan")
    found = float(a @ b)
    random = rng.permuted(np.tile(b, (n_permutations, 1)), axis=1) @ a
    return found, float((1 + np.sum(np.abs(random) >= abs(found) - 1e-12)) / (1 + n_permutations))


def standard_ranks(values: NDArray[np.float64]) -> NDArray[np.float64]:
    """Return mid-ranks with mean 0 and sum of squares 1; zeros where nothing varies."""
    _, inverse, counts = np.unique(values, return_inverse=True, return_counts=True)
    rank = (np.cumsum(counts) - 0.5 * (counts - 1))[inverse.ravel()]
    rank = rank - rank.mean() if rank.size else rank
    length = float(np.sqrt(rank @ rank))
    return np.asarray(rank / length if length > 0 else np.zeros_like(rank))


def _none(n: int, method: str) -> Gradient:
    nan = float("nan")
    return Gradient(
        slope=Estimate(value=nan, lo=nan, hi=nan, method=method),
        at_start=nan,
        rank_correlation=nan,
        p=nan,
        n_boutons=n,
    )
