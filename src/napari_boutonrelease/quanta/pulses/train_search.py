"""Mean amplitudes of trains, and how far the Tsodyks-Markram model is from them for many parameters at once."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from scipy.special import expit, logit

from ..statistics.row_fits import best_of_rows, profile_rows

if TYPE_CHECKING:
    from numpy.typing import NDArray

    Floats = NDArray[np.float64]

_LEAST_U, _MOST_U = 0.01, 0.995
_SHORTEST, _LONGEST = 0.2, 10.0  # time constants looked for, in units of the shortest gap and the longest train


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

    def shapes(self, u: Floats, tau_rec_s: Floats, tau_facil_s: Floats) -> Floats:
        """Whitened mean release at scale 1, a row for each set of parameters."""
        shares = np.empty((u.size, self.gap_s.size + 1))
        now, left = u, np.ones(u.size)
        for j in range(shares.shape[1]):
            shares[:, j] = now * left
            if j < self.gap_s.size:
                left = 1.0 - (1.0 - left * (1.0 - now)) * np.exp(-self.gap_s[j] / tau_rec_s)
                now = u + now * (1.0 - u) * np.exp(-self.gap_s[j] / tau_facil_s)
        return np.asarray(shares @ (self.whitener @ self.blocks).T)


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
    times = [lower[k] + np.array([0.1, 0.3, 0.5, 0.7]) * (upper[k] - lower[k]) for k in (1, 2)]
    starts = np.stack(np.meshgrid(logit(np.array([0.08, 0.3, 0.7])), *times), axis=-1).reshape(-1, 3)
    shape, aim = _shape_and_aim(trains, starts)
    scale = np.maximum(shape @ aim / np.sum(shape**2, axis=1), np.exp(lower[3]))
    return best_of_rows(_residuals(trains), np.column_stack([starts, np.log(scale)]), lower=lower, upper=upper)


def profile_trains(trains: Sequence[TrainData], best: Floats, *, rise: float) -> Floats:
    """Find the ends, (4, 2), up to which each parameter can go before the deviance has risen by `rise`."""
    lower, upper = bounds(trains)
    shifts = np.array([[0.0, 1.5, -1.5, 0.0], [0.0, -1.5, 1.5, 0.0]])
    return profile_rows(_residuals(trains), best, rise=rise, lower=lower, upper=upper, shifts=shifts)


def _residuals(trains: Sequence[TrainData]) -> Callable[[Floats], Floats]:
    def residuals(theta: Floats) -> Floats:
        shape, aim = _shape_and_aim(trains, theta)
        return np.asarray(aim - np.exp(theta[:, 3:]) * shape)

    return residuals


def _shape_and_aim(trains: Sequence[TrainData], theta: Floats) -> tuple[Floats, Floats]:
    u, tau_rec, tau_facil = expit(theta[:, 0]), np.exp(theta[:, 1]), np.exp(theta[:, 2])
    shapes = [train.shapes(u, tau_rec, tau_facil) for train in trains]
    return np.concatenate(shapes, axis=1), np.concatenate([train.whitener @ train.mean for train in trains])
