"""Are neighbours along an axon alike? Moran's I on the chain of boutons."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Literal

import numpy as np

from ...checks import check_array
from ...errors import InputError

if TYPE_CHECKING:
    from numpy.typing import ArrayLike, NDArray

    Weighting = Literal["binary", "row"]

FEWEST = 4
"""Boutons below which no order can be told from chance."""


@dataclass(frozen=True, slots=True, kw_only=True)
class MoransI:
    """Likeness of neighbours.

    Attributes
    ----------
    value : float
        Moran's I; NaN where there is none.
    expected : float
        Its mean if the order is random, -1 / (n - 1).
    sd_normal : float
        Its SD if the values are independent and normal (Cliff & Ord 1981).
    z : float
        (value - expected) / sd_normal.
    p : float
        Two-sided permutation p: how often random orders deviate as much.
    n_boutons : int
        Boutons with a value.
    weighting : str
        `binary`: each pair of neighbours counts once in either direction; `row`: the neighbours of each bouton share a
        weight of 1.
    reason : str
        Why there is no value; empty where there is.
    """

    value: float
    expected: float
    sd_normal: float
    z: float
    p: float
    n_boutons: int
    weighting: str
    reason: str


def measure_morans_i(
    values: ArrayLike,
    *,
    position: ArrayLike,
    weighting: Weighting,
    n_permutations: int,
    rng: np.random.Generator,
) -> MoransI:
    """Measure Moran's I along a path, where the neighbours of a bouton are the one before and the one after it.

    Parameters
    ----------
    values, position : (n,) array_like of float
        What to compare, and the distance along the path; boutons with a NaN in either are left out, and those on
        either side of them become neighbours.
    weighting : {"binary", "row"}
        Weight of neighbours.
    n_permutations : int
        Random orders for the p.
    rng : numpy.random.Generator
        Source of the orders.

    Raises
    ------
    InputError
        If the arrays do not match or the weighting is unknown.

    References
    ----------
    Moran 1950 Biometrika 37:17; Cliff & Ord 1981 Spatial Processes.

    Examples
    --------
    >>> rng = np.random.default_rng(1)
    >>> measure_morans_i([1, 2, 3, 4, 5], position=range(5), weighting="binary", n_permutations=99, rng=rng).value
    0.5
    """
    x, where = check_array("values", values, n_dims=1), check_array("position", position, n_dims=1)
    if x.shape != where.shape:
        raise InputError(f"values {x.shape} and position {where.shape} must describe the same boutons.")
    if weighting not in ("binary", "row"):
        raise InputError(f"weighting must be 'binary' or 'row' (given {weighting!r}).")
    known = np.isfinite(x) & np.isfinite(where)
    x = x[known][np.argsort(where[known], kind="stable")]
    n = x.size
    if n < FEWEST:
        return _none(n, weighting, f"Moran's I needs at least {FEWEST} boutons along the path (given {n})")
    if np.ptp(x) == 0:
        return _none(n, weighting, "all boutons have the same value")
    step = _weights(n, weighting)
    value = float(_statistic(x[None], step)[0])
    random = _statistic(rng.permuted(np.tile(x, (n_permutations, 1)), axis=1), step)
    expected = -1.0 / (n - 1)
    sd = np.sqrt(_normal_variance(n, weighting))
    far = np.abs(random - expected) >= abs(value - expected) - 1e-12
    return MoransI(
        value=value,
        expected=expected,
        sd_normal=float(sd),
        z=float((value - expected) / sd),
        p=float((1 + far.sum()) / (1 + n_permutations)),
        n_boutons=n,
        weighting=weighting,
        reason="",
    )


def _none(n: int, weighting: str, reason: str) -> MoransI:
    nan = float("nan")
    return MoransI(
        value=nan, expected=nan, sd_normal=nan, z=nan, p=nan, n_boutons=n, weighting=weighting, reason=reason
    )


def _weights(n: int, weighting: Weighting) -> NDArray[np.float64]:
    """Weight of the step between each bouton and the next, both directions together."""
    weights = np.full(n - 1, 2.0)
    if weighting == "row":
        neighbours = np.full(n, 2.0)
        neighbours[[0, -1]] = 1.0
        weights = 1.0 / neighbours[:-1] + 1.0 / neighbours[1:]
    return weights


def _statistic(rows: NDArray[np.float64], weights: NDArray[np.float64]) -> NDArray[np.float64]:
    z = rows - rows.mean(axis=1, keepdims=True)
    together = np.sum(weights * z[:, :-1] * z[:, 1:], axis=1) / weights.sum()
    return np.asarray(together / np.mean(z**2, axis=1))


def _normal_variance(n: int, weighting: Weighting) -> float:
    """Variance under normality, from the matrix of weights (Cliff & Ord 1981)."""
    matrix = np.eye(n, k=1) + np.eye(n, k=-1)
    if weighting == "row":
        matrix /= matrix.sum(axis=1, keepdims=True)
    s0 = matrix.sum()
    s1 = 0.5 * np.sum((matrix + matrix.T) ** 2)
    s2 = np.sum((matrix.sum(axis=0) + matrix.sum(axis=1)) ** 2)
    square = (n**2 * s1 - n * s2 + 3.0 * s0**2) / ((n**2 - 1.0) * s0**2)
    return float(square - 1.0 / (n - 1.0) ** 2)
