"""How far a parameter of the joint fit, or the ratio of two vesicle sizes, can be moved: profile likelihoods."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from .joint_likelihood import look_tied, maximise

if TYPE_CHECKING:
    from collections.abc import Callable

    from numpy.typing import NDArray

    from .joint_likelihood import Cells

    Floats = NDArray[np.float64]
    Ints = NDArray[np.intp]
    Bools = NDArray[np.bool_]

_STEPS = 8  # of the other parameters, at each look
_Z_TOLERANCE = 0.03  # of the signed root of the deviance, of which 95 % intervals span 1.96
_MAX_LOOKS = 14


def profile_ends(
    cells: Cells, best: Floats, leader: Ints, *, n_sites: int, parameter: Ints, side: Floats, level: float
) -> Floats:
    """Find how far each parameter can be moved before the others cannot keep the log-likelihood above `level`.

    Parameters
    ----------
    cells : Cells
        Amplitudes.
    best : (K,) ndarray
        The maximum.
    leader : (K,) ndarray of int
        Ties.
    n_sites : int
        Number of sites.
    parameter, side : (B,) ndarray
        Leaders to move, and whether down (-1) or up (+1).
    level : float
        Penalised log-likelihood, at most that of the maximum.

    Returns
    -------
    (B,) ndarray
        Where the level is reached, or the parameter's bound.
    """
    rows = np.arange(len(parameter))
    ties = np.tile(leader, (rows.size, 1))
    held = np.zeros(ties.shape, dtype=np.bool_)
    held[rows, parameter] = True
    top, covariance = _around(cells, best, leader, n_sites=n_sites)
    errors = np.sqrt(np.diag(covariance))
    target = float(np.sqrt(2.0 * max(top - level, 0.0)))
    if target == 0:
        return best[parameter]
    # p_site bends at its ends; its arcsine angle does not, and the root of the deviance is nearly linear in it
    is_p = parameter >= cells.p_site[0]
    bend = np.where(is_p, 2.0 * np.sqrt(np.clip(best[parameter] * (1 - best[parameter]), 1e-3, None)), 1.0)
    theta = np.tile(best, (rows.size, 1))

    def look(active: Ints, at: Floats) -> Floats:
        start = theta[active]
        start[np.arange(active.size), parameter[active]] = _unbend(at, is_p[active])
        found = maximise(cells, start, ties[active], n_sites=n_sites, held=held[active], max_steps=_STEPS)
        root = np.sqrt(2.0 * np.maximum(top - found.objective, 0.0))
        theta[active[root <= target]] = found.theta[root <= target]
        return root

    ends = _crossings(
        look,
        centre=_bend(best[parameter], is_p),
        low=_bend(cells.lower[parameter], is_p),
        high=_bend(cells.upper[parameter], is_p),
        side=side,
        step=np.clip(target * errors[parameter] / bend, 0.02, 0.5),
        target=target,
    )
    return _unbend(ends, is_p)


def profile_difference(
    cells: Cells, best: Floats, leader: Ints, *, n_sites: int, parameters: tuple[int, int], level: float
) -> Floats:
    """Find how far the difference of two leaders can be moved, first minus second: of log q, the log of their ratio.

    Parameters
    ----------
    cells, best, leader, n_sites, level
        As of `profile_ends`.
    parameters : tuple of int
        The two leaders.

    Returns
    -------
    (2,) ndarray
        Lower and upper end.
    """
    one, other = parameters
    top, covariance = _around(cells, best, leader, n_sites=n_sites)
    error = float(np.sqrt(covariance[one, one] + covariance[other, other] - 2.0 * covariance[one, other]))
    target = float(np.sqrt(2.0 * max(top - level, 0.0)))
    centre = np.full(2, best[one] - best[other])
    if target == 0:
        return centre
    ties = np.tile(np.where(leader == one, other, leader), (2, 1))
    theta = np.tile(best, (2, 1))

    def look(active: Ints, at: Floats) -> Floats:
        offset = np.zeros((active.size, leader.size))
        offset[:, leader == one] = at[:, None]
        found = maximise(cells, theta[active], ties[active], n_sites=n_sites, offset=offset, max_steps=_STEPS)
        root = np.sqrt(2.0 * np.maximum(top - found.objective, 0.0))
        theta[active[root <= target]] = found.theta[root <= target]
        return root

    widest = cells.upper[one] - cells.lower[other]
    return _crossings(
        look,
        centre=centre,
        low=np.full(2, -widest),
        high=np.full(2, widest),
        side=np.array([-1.0, 1.0]),
        step=np.full(2, np.clip(target * error, 0.02, 0.5)),
        target=target,
    )


def _around(cells: Cells, best: Floats, leader: Ints, *, n_sites: int) -> tuple[float, Floats]:
    """Height of a maximum, and the covariance of the leaders that its curvature gives; 0 for what is tied."""
    value, _, information = look_tied(cells, best[None, :], leader[None, :], n_sites=n_sites)
    free = np.flatnonzero(leader == np.arange(leader.size))
    covariance = np.zeros((leader.size, leader.size))
    covariance[np.ix_(free, free)] = np.linalg.pinv(information[0][np.ix_(free, free)], hermitian=True)
    covariance[free, free] = covariance[free, free].clip(1e-12)
    return float(value[0]), covariance


def _crossings(
    look: Callable[[Ints, Floats], Floats],
    *,
    centre: Floats,
    low: Floats,
    high: Floats,
    side: Floats,
    step: Floats,
    target: float,
) -> Floats:
    """Find where the root of the deviance, 0 at the centre, reaches the target on one side; else the bound.

    `look` tells that root for some of the searches, at the places given.
    """
    rows = np.arange(centre.size)
    bound = np.where(side > 0, high, low)
    inside, inside_root = centre.copy(), np.zeros(rows.size)
    outside, outside_root = np.full(rows.size, np.nan), np.full(rows.size, np.nan)
    ends = bound.copy()
    at = centre + side * step
    active = rows[np.abs(bound - centre) > 0]
    for _ in range(_MAX_LOOKS):
        if not active.size:
            break
        at = np.clip(at, low, high)
        root = look(active, at[active])
        within = root <= target
        inside[active[within]], inside_root[active[within]] = at[active[within]], root[within]
        outside[active[~within]], outside_root[active[~within]] = at[active[~within]], root[~within]
        ends[active] = at[active]
        done = (np.abs(root - target) < _Z_TOLERANCE) | (within & (at[active] == bound[active]))
        active = active[~done]
        with np.errstate(invalid="ignore", divide="ignore"):
            share = np.clip((target - inside_root) / (outside_root - inside_root), 0.08, 0.92)
            further = np.clip(target / np.maximum(inside_root, 1e-3) - 1.0, 0.1, 2.0) * np.abs(inside - centre)
        further = np.maximum(further, 0.3 * step)
        at = np.where(np.isnan(outside), inside + side * further, inside + share * (outside - inside))
    return ends


def _bend(values: Floats, is_p: Bools) -> Floats:
    return np.where(is_p, np.arcsin(np.sqrt(np.clip(values, 0.0, 1.0))), values)


def _unbend(values: Floats, is_p: Bools) -> Floats:
    return np.where(is_p, np.sin(values) ** 2, values)
