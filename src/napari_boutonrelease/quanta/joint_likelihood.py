"""Likelihood of one bouton's amplitudes in several cells (recordings times pulses), its maxima and its profiles.

Parameters of a problem, in this order: log q of each recording, log q_cv, log noise scale of each recording, p_site of
each cell. What is not free to differ is tied: `leader` names, for each parameter, the first of its group. Many problems
(variants, starts, held parameters) of the same n_sites climb at once.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from scipy.special import gammaln

from .vesicle_sizes import gamma_vesicles_slopes

if TYPE_CHECKING:
    from numpy.typing import NDArray

    Floats = NDArray[np.float64]
    Ints = NDArray[np.intp]
    Bools = NDArray[np.bool_]

_LEAST = 1e-300
_EDGE = 1e-7  # p_site stays this far from 0 and 1
_MAX_STEPS = 60
_TOLERANCE = 1e-3  # nats that one more step promises
_PROFILE_STEPS = 8
_Z_TOLERANCE = 0.03  # of the signed root of the deviance, of which 95 % intervals span 1.96
_MAX_LOOKS = 14


@dataclass(frozen=True, slots=True, kw_only=True)
class Cells:
    """All finite amplitudes of one bouton, sorted by cell.

    Attributes
    ----------
    amplitude, sd : (N,) ndarray
        Amplitudes and the noise given for them.
    first : (C,) ndarray of int
        Where each cell starts.
    cell : (N,) ndarray of int
        Cell of each amplitude.
    recording, pulse : (C,) ndarray of int
        What the cell is: which of `recordings`, and which pulse of a trial.
    recordings : (R,) ndarray of int
        Recordings with amplitudes, as given.
    lower, upper : (K,) ndarray
        Bounds of the parameters.
    prior_mean, prior_precision : (K,), (K, K) ndarray
        Normal prior of the parameters.
    """

    amplitude: Floats
    sd: Floats
    first: Ints
    cell: Ints
    recording: Ints
    pulse: Ints
    recordings: Ints
    lower: Floats
    upper: Floats
    prior_mean: Floats
    prior_precision: Floats

    @property
    def n_recordings(self) -> int:
        """Recordings with amplitudes."""
        return len(self.recordings)

    @property
    def q(self) -> Ints:
        """Parameters log q, one a recording."""
        return np.arange(self.n_recordings)

    @property
    def q_cv(self) -> int:
        """Parameter log q_cv."""
        return self.n_recordings

    @property
    def noise(self) -> Ints:
        """Parameters log noise scale, one a recording."""
        return np.arange(self.n_recordings + 1, 2 * self.n_recordings + 1)

    @property
    def p_site(self) -> Ints:
        """Parameters p_site, one a cell."""
        return 2 * self.n_recordings + 1 + np.arange(len(self.first))

    def leader(self, *, p_differs: bool, q_differs: bool) -> Ints:
        """Return for each parameter the first one that it is tied to."""
        leader = np.arange(len(self.lower))
        if not q_differs:
            leader[self.q] = 0
        if not p_differs:
            first_of_pulse = {int(pulse): self.p_site[c] for c, pulse in reversed(list(enumerate(self.pulse)))}
            leader[self.p_site] = [first_of_pulse[int(pulse)] for pulse in self.pulse]
        return leader


@dataclass(frozen=True, slots=True)
class Climbs:
    """Maxima found: parameters (B, K) and penalised log-likelihood (B,)."""

    theta: Floats
    objective: Floats


def p_bounds() -> tuple[float, float]:
    """Return the least and largest p_site."""
    return _EDGE, 1.0 - _EDGE


def log_likelihood(cells: Cells, theta: Floats, *, n_sites: int) -> tuple[Floats, Floats]:
    """Log-likelihood plus log priors (B,) in nats of parameters (B, K), and its gradient (B, K)."""
    return _look(cells, theta, n_sites=n_sites)[:2]


def maximise(
    cells: Cells,
    start: Floats,
    leader: Ints,
    *,
    n_sites: int,
    held: Bools | None = None,
    max_steps: int = _MAX_STEPS,
) -> Climbs:
    """Climb from `start` (B, K) to a maximum of each problem.

    Steps use the outer product of the scores of single amplitudes for the curvature (Berndt et al. 1974), damped
    (Marquardt 1963) until they gain.

    Parameters
    ----------
    cells : Cells
        Amplitudes.
    start : (B, K) ndarray
        First parameters; those tied take their leader's value.
    leader : (B, K) ndarray of int
        Ties of each problem.
    n_sites : int
        Number of sites of all problems.
    held : (B, K) ndarray of bool, optional
        Parameters that do not move, and may stand beyond their bounds; none where left out.
    max_steps : int
        Looks at the likelihood, at most.
    """
    n_problems, n_parameters = start.shape
    free = leader == np.arange(n_parameters)
    if held is not None:
        free &= ~held
    lower, upper = np.tile(cells.lower, (n_problems, 1)), np.tile(cells.upper, (n_problems, 1))
    fixed = np.zeros_like(free) if held is None else held
    theta = np.where(fixed, start, np.clip(start, lower, upper))
    theta = np.take_along_axis(theta, leader, axis=1)
    value, gradient, information = _tied(cells, theta, leader, n_sites=n_sites)
    damping = np.full(n_problems, 1e-2)
    active = np.arange(n_problems)
    for _ in range(max_steps):
        step, promised = _step(
            theta[active],
            gradient[active],
            information[active],
            free[active],
            lower[active],
            upper[active],
            damping[active],
        )
        going = promised >= _TOLERANCE
        active, step = active[going], step[going]
        if not active.size:
            break
        trial = np.where(free[active], np.clip(theta[active] + step, lower[active], upper[active]), theta[active])
        trial = np.take_along_axis(trial, leader[active], axis=1)
        new_value, new_gradient, new_information = _tied(cells, trial, leader[active], n_sites=n_sites)
        gained = new_value >= value[active]
        won, lost = active[gained], active[~gained]
        theta[won], value[won] = trial[gained], new_value[gained]
        gradient[won], information[won] = new_gradient[gained], new_information[gained]
        damping[won] = np.maximum(0.1 * damping[won], 1e-5)
        damping[lost] = np.maximum(10.0 * damping[lost], 0.1)
        active = active[damping[active] < 1e7]  # else no step is small enough to gain: arrived
    return Climbs(theta, value)


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
    value, _, information = _tied(cells, best[None, :], leader[None, :], n_sites=n_sites)
    free = leader == np.arange(leader.size)
    square = information[0][np.ix_(free, free)]
    errors = np.zeros(leader.size)
    errors[free] = np.sqrt(np.diag(np.linalg.pinv(square, hermitian=True)).clip(1e-12))
    target = float(np.sqrt(2.0 * max(float(value[0]) - level, 0.0)))
    # p_site bends at its ends; its arcsine angle does not, and the root of the deviance is nearly linear in it
    is_p = parameter >= cells.p_site[0]
    low, high = _bend(cells.lower[parameter], is_p), _bend(cells.upper[parameter], is_p)
    centre = _bend(best[parameter], is_p)
    bend = np.where(is_p, 2.0 * np.sqrt(np.clip(best[parameter] * (1 - best[parameter]), 1e-3, None)), 1.0)
    step = np.clip(target * errors[parameter] / bend, 0.02, 0.5)
    bound = np.where(side > 0, high, low)
    inside, inside_root = centre.copy(), np.zeros(rows.size)
    outside, outside_root = np.full(rows.size, np.nan), np.full(rows.size, np.nan)
    theta = np.tile(best, (rows.size, 1))
    ends = bound.copy()
    at = centre + side * step
    active = rows[np.abs(bound - centre) > 0]
    for _ in range(_MAX_LOOKS if target > 0 else 0):
        at = np.clip(at, low, high)
        start = theta[active]
        start[np.arange(active.size), parameter[active]] = _unbend(at[active], is_p[active])
        found = maximise(cells, start, ties[active], n_sites=n_sites, held=held[active], max_steps=_PROFILE_STEPS)
        root = np.sqrt(2.0 * np.maximum(float(value[0]) - found.objective, 0.0))
        within = root <= target
        theta[active[within]] = found.theta[within]
        inside[active[within]], inside_root[active[within]] = at[active[within]], root[within]
        outside[active[~within]], outside_root[active[~within]] = at[active[~within]], root[~within]
        ends[active] = at[active]
        done = (np.abs(root - target) < _Z_TOLERANCE) | (within & (at[active] == bound[active]))
        active = active[~done]
        if not active.size:
            break
        with np.errstate(invalid="ignore", divide="ignore"):
            share = np.clip((target - inside_root) / (outside_root - inside_root), 0.08, 0.92)
            further = np.clip(target / np.maximum(inside_root, 1e-3) - 1.0, 0.1, 2.0) * np.abs(inside - centre)
        further = np.maximum(further, 0.3 * step)
        at = np.where(np.isnan(outside), inside + side * further, inside + share * (outside - inside))
    return np.where(target > 0, _unbend(ends, is_p), best[parameter])


def _bend(values: Floats, is_p: Bools) -> Floats:
    return np.where(is_p, np.arcsin(np.sqrt(np.clip(values, 0.0, 1.0))), values)


def _unbend(values: Floats, is_p: Bools) -> Floats:
    return np.where(is_p, np.sin(values) ** 2, values)


def _step(
    theta: Floats, gradient: Floats, information: Floats, free: Bools, lower: Floats, upper: Floats, damping: Floats
) -> tuple[Floats, Floats]:
    """Uphill step and the gain that it promises; what is held or pressed against a bound stays."""
    pressed = ((theta <= lower) & (gradient < 0)) | ((theta >= upper) & (gradient > 0))
    moves = free & ~pressed
    slope = np.where(moves, gradient, 0.0)
    curvature = np.where(moves[:, :, None] & moves[:, None, :], information, 0.0)
    axis = np.arange(theta.shape[1])
    diagonal = curvature[:, axis, axis]
    diagonal = np.where(moves, np.maximum(diagonal, 1e-6), 1.0)
    curvature[:, axis, axis] = diagonal * (1.0 + damping[:, None])
    step = np.linalg.solve(curvature, slope[:, :, None])[:, :, 0]
    promised = 0.5 * np.sum(step * slope, axis=1)
    longest = np.where(upper - lower > 0.99, 0.7, 0.3)
    step *= np.minimum(1.0, np.min(longest / np.maximum(np.abs(step), 1e-12), axis=1, keepdims=True))
    return step, promised


def _tied(cells: Cells, theta: Floats, leader: Ints, *, n_sites: int) -> tuple[Floats, Floats, Floats]:
    """Value, gradient and information by the leaders; those of the tied are 0."""
    value, gradient, information = _look(cells, theta, n_sites=n_sites)
    tie = (leader[:, :, None] == np.arange(theta.shape[1])).astype(np.float64)
    across = tie.transpose(0, 2, 1)
    return value, (across @ gradient[:, :, None])[:, :, 0], across @ information @ tie


def _look(cells: Cells, theta: Floats, *, n_sites: int) -> tuple[Floats, Floats, Floats]:
    """Penalised log-likelihood (B,), its gradient (B, K) and information (B, K, K)."""
    n_problems, n_parameters = theta.shape
    n_cells = len(cells.first)
    recording = cells.recording[cells.cell]
    q = np.exp(theta[:, cells.q])[:, recording]
    q_cv = np.exp(theta[:, [cells.q_cv]])
    noise = np.exp(theta[:, cells.noise])[:, recording] * cells.sd
    weights, slopes = _binomial(theta[:, cells.p_site], n_sites)  # (n + 1, B, C)
    m = np.arange(1, n_sites + 1, dtype=np.float64)[:, None, None]
    one = gamma_vesicles_slopes(cells.amplitude, vesicles=m, q=q, q_cv=q_cv, noise_sd=noise)
    z2 = (cells.amplitude / noise) ** 2
    none = -0.5 * z2 - np.log(noise) - 0.5 * np.log(2.0 * np.pi)
    peak = np.maximum(one[0].max(axis=0), none)
    density = np.exp(np.concatenate([none[None], one[0]]) - peak)
    joint = weights[:, :, cells.cell] * density
    total = np.maximum(joint.sum(axis=0), _LEAST)
    share = joint[1:] / total
    scores = np.empty((n_problems, 4, cells.amplitude.size))
    scores[:, 0] = (share * one[1]).sum(axis=0)
    scores[:, 1] = (share * one[2]).sum(axis=0)
    scores[:, 2] = (share * one[3]).sum(axis=0) + joint[0] / total * (z2 - 1.0)
    scores[:, 3] = (slopes[:, :, cells.cell] * density).sum(axis=0) / total
    value = (np.log(total) + peak).sum(axis=1)

    # own[c, i] is the parameter that score i of cell c belongs to
    own = np.stack(
        [
            cells.q[cells.recording],
            np.full(n_cells, cells.q_cv),
            cells.noise[cells.recording],
            cells.p_site,
        ],
        axis=1,
    )
    placed = (own[:, :, None] == np.arange(n_parameters)).astype(np.float64)  # (C, 4, K)
    outer = np.empty((n_problems, n_cells, 4, 4))
    for c, start in enumerate(cells.first):
        part = scores[:, :, start : (cells.first[c + 1] if c + 1 < n_cells else None)]
        outer[:, c] = part @ part.transpose(0, 2, 1)
    gradient = np.add.reduceat(scores, cells.first, axis=2).transpose(0, 2, 1).reshape(n_problems, -1) @ placed.reshape(
        -1, n_parameters
    )
    both = np.einsum("cik,cjl->cijkl", placed, placed).reshape(-1, n_parameters**2)
    information = (outer.reshape(n_problems, -1) @ both).reshape(n_problems, n_parameters, n_parameters)
    offset = theta - cells.prior_mean
    pull = offset @ cells.prior_precision
    value = value - 0.5 * np.sum(offset * pull, axis=1)
    return value, gradient - pull, information + cells.prior_precision


def _binomial(p: Floats, n: int) -> tuple[Floats, Floats]:
    """Probability of 0..n vesicles (n + 1, *p.shape), and its derivative by p."""

    def weights(sites: int) -> Floats:
        m = np.arange(sites + 1).reshape(-1, *[1] * p.ndim)
        choose = np.exp(gammaln(sites + 1.0) - gammaln(m + 1.0) - gammaln(sites - m + 1.0))
        return np.asarray(choose * p**m * (1.0 - p) ** (sites - m))

    fewer = weights(n - 1)
    zero = np.zeros((1, *p.shape))
    return weights(n), n * (np.concatenate([zero, fewer]) - np.concatenate([fewer, zero]))
