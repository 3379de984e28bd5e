"""Least squares from many starts at once, and profiles of the result: every row is one problem of few parameters."""

from __future__ import annotations

from collections.abc import Callable
from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    from numpy.typing import NDArray

    Floats = NDArray[np.float64]
    Residuals = Callable[[Floats], Floats]

_STEPS = 60
_LONGEST_STEP = 2.0
_TOLERANCE = 1e-6
_DIFFERENCE = 1e-5
_GRID = 24  # points of a profile to either side


def minimise_rows(
    residuals: Residuals, start: Floats, *, lower: Floats, upper: Floats, held: NDArray[np.int_] | None = None
) -> tuple[Floats, Floats]:
    """Minimise the sum of squares from every row of `start` within bounds (Levenberg 1944; Marquardt 1963).

    Parameters
    ----------
    residuals : callable
        Takes (B, p) parameters and returns (B, k) residuals.
    start : (B, p) ndarray
        Where to begin; parameters of the order of one.
    lower, upper : (p,) ndarray
        Bounds.
    held : (B,) ndarray of int, optional
        A parameter of each row that stays as it is; -1 for none.

    Returns
    -------
    parameters : (B, p) ndarray
    deviance : (B,) ndarray
        Sum of squares.
    """
    n_rows, n_parameters = start.shape
    fixed = np.zeros((n_rows, n_parameters), dtype=bool)
    if held is not None:
        fixed[np.flatnonzero(held >= 0), held[held >= 0]] = True
    theta = np.where(fixed, start, np.clip(start, lower, upper))
    residual = residuals(theta)
    deviance = np.sum(residual**2, axis=1)
    damping = np.full(n_rows, 1e-2)
    active = np.arange(n_rows)
    for _ in range(_STEPS):
        now = theta[active]
        slopes = np.empty((active.size, residual.shape[1], n_parameters))
        for k in range(n_parameters):
            step = np.where(now[:, k] + _DIFFERENCE > upper[k], -_DIFFERENCE, _DIFFERENCE)
            moved = now.copy()
            moved[:, k] += step
            slopes[:, :, k] = (residuals(moved) - residual[active]) / step[:, None]
        downhill = np.einsum("bjk,bj->bk", slopes, residual[active])
        still = fixed[active] | ((now <= lower + 1e-9) & (downhill > 0)) | ((now >= upper - 1e-9) & (downhill < 0))
        curvature = np.einsum("bjk,bjl->bkl", slopes, slopes)
        curvature[still[:, :, None] | still[:, None, :]] = 0.0
        steepness = np.maximum(np.einsum("bkk->bk", curvature), 1e-6)
        curvature += np.einsum(
            "bk,kl->bkl", np.where(still, 1.0, damping[active, None] * steepness), np.eye(n_parameters)
        )
        change = -np.linalg.solve(curvature, np.where(still, 0.0, downhill)[:, :, None])[:, :, 0]
        ahead = np.clip(now + np.clip(change, -_LONGEST_STEP, _LONGEST_STEP), lower, upper)
        trial = np.where(still, now, ahead)
        tried = residuals(trial)
        reached = np.sum(tried**2, axis=1)
        gain = deviance[active] - reached
        better = gain >= 0
        theta[active[better]], residual[active[better]] = trial[better], tried[better]
        deviance[active[better]] = reached[better]
        damping[active] = np.where(better, damping[active] / 5.0, damping[active] * 6.0)
        active = active[~((better & (gain < _TOLERANCE * (1.0 + reached))) | (damping[active] > 1e8))]
        if not active.size:
            break
    return theta, deviance


def best_of_rows(residuals: Residuals, start: Floats, *, lower: Floats, upper: Floats) -> tuple[Floats, float]:
    """Return the best of all starts: its parameters and its deviance."""
    found, deviance = minimise_rows(residuals, start, lower=lower, upper=upper)
    best = int(np.argmin(deviance))
    return found[best], float(deviance[best])


def profile_rows(
    residuals: Residuals, best: Floats, *, rise: float, lower: Floats, upper: Floats, shifts: Floats
) -> Floats:
    """Find where the deviance, minimised over the other parameters, has risen by `rise` above the best.

    Parameters
    ----------
    residuals, lower, upper
        As in `minimise_rows`.
    best : (p,) ndarray
        The minimum.
    rise : float
        Deviance above the minimum.
    shifts : (s, p) ndarray
        Each point of a profile is sought from the best and from these places beside it.

    Returns
    -------
    (p, 2) ndarray
        Ends; infinite where the deviance does not rise so far before the bound.
    """
    n_parameters = best.size
    away = np.linspace(0.0, 1.0, _GRID + 1)[1:] ** 1.5  # denser near the best
    paths = best[:, None, None] + (np.stack([lower, upper], axis=1) - best[:, None])[:, :, None] * away
    held = np.repeat(np.arange(n_parameters), 2 * _GRID)
    starts = []
    for shift in (np.zeros(n_parameters), *shifts):
        start = np.tile(best + shift, (held.size, 1))
        start[np.arange(held.size), held] = paths.ravel()
        starts.append(start)
    _, deviance = minimise_rows(
        residuals, np.concatenate(starts), lower=lower, upper=upper, held=np.tile(held, len(starts))
    )
    lowest = deviance.reshape(len(starts), n_parameters, 2, _GRID).min(axis=0)
    least = float(np.sum(residuals(best[None, :]) ** 2))
    ends = np.empty((n_parameters, 2))
    for k in range(n_parameters):
        for side in (0, 1):
            root = np.sqrt(np.maximum(np.concatenate([[least], lowest[k, side]]) - least, 0.0))
            path = np.concatenate([[best[k]], paths[k, side]])
            ends[k, side] = _crossing(path, root, np.sqrt(rise), (-np.inf, np.inf)[side])
    return ends


def _crossing(path: Floats, root: Floats, wanted: float, never: float) -> float:
    """First place on a path where the root of the deviance, close to linear in it, exceeds what is wanted."""
    beyond = np.flatnonzero(root > wanted)
    if not beyond.size or path[0] == path[-1]:
        return never
    at = int(beyond[0])
    share = (wanted - root[at - 1]) / (root[at] - root[at - 1])
    return float(path[at - 1] + share * (path[at] - path[at - 1]))
