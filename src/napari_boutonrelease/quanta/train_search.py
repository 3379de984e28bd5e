"""Search for the parameters of many train models at once: every row is a start, or a point of a profile."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from scipy.special import expit, logit

if TYPE_CHECKING:
    from numpy.typing import NDArray

    Floats = NDArray[np.float64]

_LEAST_U, _MOST_U = 0.01, 0.995
_SHORTEST, _LONGEST = 0.2, 10.0  # time constants looked for, in units of the shortest gap and the longest train
_STEPS = 40
_GRID = 24  # points of a profile to either side
_SCALE = 3  # index of the parameter that enters linearly


@dataclass(frozen=True, slots=True, kw_only=True)
class TrainData:
    """Mean amplitudes of the trains of one kind.

    Attributes
    ----------
    gap_s : (n_pulses - 1,) ndarray
        Time from each pulse to the next, in s.
    blocks : (n_means, n_pulses) ndarray
        What each mean averages over: rows add up to 1.
    mean : (n_means,) ndarray
        Mean amplitudes.
    whitener : (n_means, n_means) ndarray
        Turns deviations of `mean` into independent ones of unit variance.
    n_trials : int
        Trials.
    """

    gap_s: Floats
    blocks: Floats
    mean: Floats
    whitener: Floats
    n_trials: int

    @property
    def freedom(self) -> int:
        """Trials beyond the means that they have to tell apart."""
        return self.n_trials - self.mean.size


def bounds(trains: Sequence[TrainData]) -> tuple[Floats, Floats]:
    """Range of the parameters searched: logit u, log tau_rec, log tau_facil, log scale."""
    shortest = np.log(_SHORTEST * min(float(train.gap_s.min()) for train in trains))
    longest = np.log(_LONGEST * max(float(train.gap_s.sum()) for train in trains))
    largest = np.log(max(float(np.abs(train.mean).max()) for train in trains))
    lower = np.array([logit(_LEAST_U), shortest, shortest, largest - 3.0])
    return lower, np.array([logit(_MOST_U), longest, longest, largest - float(np.log(_LEAST_U)) + 1.0])


def natural(parameters: Floats) -> Floats:
    """Turn searched parameters into u, tau_rec (s), tau_facil (s) and scale."""
    return np.concatenate([expit(parameters[..., :1]), np.exp(parameters[..., 1:])], axis=-1)


def fit_trains(trains: Sequence[TrainData]) -> tuple[Floats, float]:
    """Return the best searched parameters and their deviance."""
    lower, upper = bounds(trains)
    inner = [lower[k] + np.array([0.1, 0.3, 0.5, 0.7]) * (upper[k] - lower[k]) for k in (1, 2)]
    starts = np.stack(np.meshgrid(logit(np.array([0.08, 0.3, 0.7])), *inner), axis=-1).reshape(-1, 3)
    found, deviance = _search(trains, np.column_stack([starts, np.zeros(len(starts))]), held=np.full(len(starts), -1))
    best = int(np.argmin(deviance))
    return found[best], float(deviance[best])


def profile_train(trains: Sequence[TrainData], best: Floats, *, allowed: float) -> Floats:
    """Find where the profile of each parameter reaches a deviance.

    Returns
    -------
    (4, 2) ndarray
        Ends of the searched parameters; infinite where the deviance stays below `allowed` up to the bound.
    """
    lower, upper = bounds(trains)
    away = np.linspace(0.0, 1.0, _GRID + 1)[1:] ** 1.5  # denser near the best
    lines = [
        (parameter, bound, best[parameter] + away * (bound[parameter] - best[parameter]))
        for parameter in range(4)
        for bound in (lower, upper)
    ]
    held = np.repeat([parameter for parameter, _, _ in lines], _GRID)
    at = np.concatenate([values for _, _, values in lines])
    rows = np.arange(at.size)
    starts = [np.tile(best, (at.size, 1)) for _ in range(3)]
    for start, shift in zip(starts[1:], (-1.5, 1.5), strict=True):
        start[:, 1:3] += shift * np.array([1.0, -1.0])
    for start in starts:
        start[rows, held] = at
    deviance = np.min(
        _search(trains, np.concatenate(starts), held=np.tile(held, len(starts)))[1].reshape(len(starts), -1), axis=0
    )
    least = float(_search(trains, best[None, :], held=np.array([-1]))[1][0])
    ends = np.empty((4, 2))
    for line, (parameter, _, values) in enumerate(lines):
        mine = deviance[line * _GRID : (line + 1) * _GRID]
        root = np.sqrt(np.maximum(np.concatenate([[0.0], mine - least]), 0.0))
        ends[parameter, line % 2] = _crossing(
            np.concatenate([[best[parameter]], values]), root, np.sqrt(max(allowed - least, 0.0)), line % 2
        )
    return ends


def _crossing(values: Floats, root: Floats, wanted: float, side: int) -> float:
    """First place where the root of the deviance exceeds what is wanted, by linear interpolation."""
    beyond = np.flatnonzero(root > wanted)
    if not beyond.size or values[0] == values[-1]:
        return np.inf if side else -np.inf
    at = int(beyond[0])
    share = (wanted - root[at - 1]) / (root[at] - root[at - 1])
    return float(values[at - 1] + share * (values[at] - values[at - 1]))


def _search(trains: Sequence[TrainData], start: Floats, *, held: NDArray[np.int_]) -> tuple[Floats, Floats]:
    """Minimise the deviance from every row of `start` (Levenberg-Marquardt), one parameter of a row held where asked.

    The scale enters linearly: unless it is held, it is solved for, not searched (Golub & Pereyra 1973).
    """
    lower, upper = bounds(trains)
    theta = np.clip(start, lower, upper)
    rows = np.arange(len(theta))
    theta[rows[held >= 0], held[held >= 0]] = start[rows[held >= 0], held[held >= 0]]
    free = np.ones((len(theta), 3), dtype=bool)
    of_three = (held >= 0) & (held != _SCALE)
    free[rows[of_three], held[of_three]] = False
    fixed_scale = held == _SCALE
    residual = _residuals(trains, theta, fixed_scale)
    deviance = np.sum(residual**2, axis=1)
    damping = np.full(len(theta), 1e-2)
    active = rows
    for _ in range(_STEPS):
        now = theta[active]
        slopes = np.zeros((active.size, residual.shape[1], 3))
        for k in range(3):
            step = np.where(now[:, k] + 1e-5 > upper[k], -1e-5, 1e-5)
            moved = now.copy()
            moved[:, k] += step
            slopes[:, :, k] = (_residuals(trains, moved, fixed_scale[active]) - residual[active]) / step[:, None]
        downhill = np.einsum("bjk,bj->bk", slopes, residual[active])
        still = ~free[active]
        still |= (now[:, :3] <= lower[:3] + 1e-9) & (downhill > 0)
        still |= (now[:, :3] >= upper[:3] - 1e-9) & (downhill < 0)
        curvature = np.einsum("bjk,bjl->bkl", slopes, slopes)
        curvature[still[:, :, None] | still[:, None, :]] = 0.0
        diagonal = np.maximum(np.einsum("bkk->bk", curvature), 1e-6)
        curvature += np.einsum("bk,kl->bkl", np.where(still, 1.0, damping[active, None] * diagonal), np.eye(3))
        change = -np.linalg.solve(curvature, np.where(still, 0.0, downhill)[:, :, None])[:, :, 0]
        trial = now.copy()
        clipped = np.clip(now[:, :3] + np.clip(change, -2.0, 2.0), lower[:3], upper[:3])
        trial[:, :3] = np.where(still, now[:, :3], clipped)
        tried = _residuals(trains, trial, fixed_scale[active])
        reached = np.sum(tried**2, axis=1)
        gain = deviance[active] - reached
        better = gain >= 0
        theta[active[better]], residual[active[better]] = trial[better], tried[better]
        deviance[active[better]] = reached[better]
        damping[active] = np.where(better, damping[active] / 5.0, damping[active] * 6.0)
        active = active[~((better & (gain < 1e-6 * (1.0 + reached))) | (damping[active] > 1e8))]
        if not active.size:
            break
    solved = _solved_scale(trains, theta)
    theta[~fixed_scale, _SCALE] = np.log(np.maximum(solved[~fixed_scale], np.exp(lower[_SCALE] - 5.0)))
    return theta, deviance


def _shapes(train: TrainData, theta: Floats) -> Floats:
    """Whitened mean release of every row at scale 1."""
    u0, tau_rec, tau_facil = expit(theta[:, 0]), np.exp(theta[:, 1]), np.exp(theta[:, 2])
    shares = np.empty((len(theta), train.gap_s.size + 1))
    u, x = u0, np.ones(len(theta))
    for j in range(shares.shape[1]):
        shares[:, j] = u * x
        if j < train.gap_s.size:
            x = 1.0 - (1.0 - x * (1.0 - u)) * np.exp(-train.gap_s[j] / tau_rec)
            u = u0 + u * (1.0 - u0) * np.exp(-train.gap_s[j] / tau_facil)
    return np.asarray(shares @ (train.whitener @ train.blocks).T)


def _solved_scale(trains: Sequence[TrainData], theta: Floats) -> Floats:
    above, below = np.zeros(len(theta)), np.zeros(len(theta))
    for train in trains:
        shape = _shapes(train, theta)
        above += shape @ (train.whitener @ train.mean)
        below += np.sum(shape**2, axis=1)
    return np.maximum(above / below, 0.0)


def _residuals(trains: Sequence[TrainData], theta: Floats, fixed_scale: NDArray[np.bool_]) -> Floats:
    shapes = [_shapes(train, theta) for train in trains]
    aims = [train.whitener @ train.mean for train in trains]
    shape, aim = np.concatenate(shapes, axis=1), np.concatenate(aims)
    solved = np.maximum(shape @ aim / np.sum(shape**2, axis=1), 0.0)
    scale = np.where(fixed_scale, np.exp(theta[:, _SCALE]), solved)
    return np.asarray(aim - scale[:, None] * shape)
