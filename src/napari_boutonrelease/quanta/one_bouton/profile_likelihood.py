"""Where a parameter can go before the rest of the model can no longer make up for it."""

from __future__ import annotations

from dataclasses import replace
from typing import TYPE_CHECKING

import numpy as np

from .mixture_fit import Problems, derivatives, maximise

if TYPE_CHECKING:
    from numpy.typing import NDArray

    Floats = NDArray[np.float64]

_MAX_EVALUATIONS = 30
_INNER_STEPS = 15
_Z_TOLERANCE = 0.01  # in units of the signed root of the deviance, of which 95 % intervals span 1.96


def profile_ends(
    problems: Problems, maxima: Floats, *, level: Floats, parameter: NDArray[np.intp], side: Floats
) -> tuple[Floats, NDArray[np.bool_]]:
    """Find where the profile likelihood of one parameter falls to a level.

    Parameters
    ----------
    problems : Problems
        B problems.
    maxima : (B, 4) ndarray
        Their maxima.
    level : (B,) ndarray
        Penalised log likelihood at the end of the interval; at most that of the maximum.
    parameter, side : (B,) ndarray
        Which parameter to move, and whether down (-1) or up (+1).

    Returns
    -------
    ends : (B,) ndarray
        Value of the parameter where the others, maximised again, reach `level`.
    open_ended : (B,) ndarray of bool
        True where the level was not reached before the parameter's bound, which `ends` then holds.
    """
    rows = np.arange(len(maxima))
    best, _, hessian = derivatives(problems, maxima)
    centre = maxima[rows, parameter]
    bound = np.where(side > 0, problems.upper[rows, parameter], problems.lower[rows, parameter])
    # the root of the deviance is close to linear in the parameter, so that a few secant steps find its crossing
    target = np.sqrt(2.0 * np.maximum(best - level, 0.0))
    step = np.clip(target * _standard_errors(hessian, problems, parameter), 0.05, 2.0)
    inside, inside_root = centre.copy(), np.zeros_like(centre)
    outside, outside_root = np.full_like(centre, np.nan), np.full_like(centre, np.nan)
    theta = maxima.copy()
    ends, open_ended = centre.copy(), np.zeros(len(rows), dtype=bool)
    active = rows[target > 0]
    at = centre + side * step
    held = problems.holding(parameter)
    for _ in range(_MAX_EVALUATIONS):
        at = np.where(side > 0, np.minimum(at, bound), np.maximum(at, bound))
        start = theta[active]
        start[np.arange(active.size), parameter[active]] = at[active]
        part = _pinned(held.take(active), parameter[active], at[active])
        found = maximise(part, start, max_steps=_INNER_STEPS, tolerance=1e-3)
        root = np.sqrt(2.0 * np.maximum(best[active] - found.objective, 0.0))
        ends[active] = at[active]
        within = root <= target[active]
        theta[active[within]] = found.parameters[within]
        inside[active[within]], inside_root[active[within]] = at[active[within]], root[within]
        outside[active[~within]], outside_root[active[~within]] = at[active[~within]], root[~within]
        reached = np.abs(root - target[active]) < _Z_TOLERANCE
        stopped = within & (at[active] == bound[active]) & ~reached
        open_ended[active[stopped]] = True
        active = active[~(reached | stopped)]
        if not active.size:
            break
        at = _next(inside, inside_root, outside, outside_root, target, step, side)
        step = step * 2.0
    return ends, open_ended


def _next(
    inside: Floats,
    inside_root: Floats,
    outside: Floats,
    outside_root: Floats,
    target: Floats,
    step: Floats,
    side: Floats,
) -> Floats:
    """Where to look next: further out while nothing lies outside, else the secant, kept off both ends."""
    with np.errstate(invalid="ignore", divide="ignore"):
        share = (target - inside_root) / (outside_root - inside_root)
    secant = inside + np.clip(share, 0.1, 0.9) * (outside - inside)
    return np.where(np.isnan(outside), inside + side * step, secant)


def _pinned(problems: Problems, parameter: NDArray[np.intp], at: Floats) -> Problems:
    """Let the held parameter stand beyond its bounds, as far as rounding goes."""
    rows = np.arange(len(at))
    lower, upper = problems.lower.copy(), problems.upper.copy()
    lower[rows, parameter] = at
    upper[rows, parameter] = at
    return replace(problems, lower=lower, upper=upper)


def _standard_errors(hessian: Floats, problems: Problems, parameter: NDArray[np.intp]) -> Floats:
    """Return one standard error a problem, the other parameters left free; large where the data say nothing."""
    both = problems.free[:, :, None] & problems.free[:, None, :]
    curvature = np.where(both, -hessian, np.eye(hessian.shape[1]))
    roots, vectors = np.linalg.eigh(curvature)
    rows = np.arange(len(hessian))
    variance: Floats = (vectors[rows, parameter] ** 2 / np.maximum(np.abs(roots), 1e-6)).sum(axis=1)
    return np.sqrt(variance)
