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

from ..one_bouton.vesicle_sizes import gamma_vesicles_slopes

if TYPE_CHECKING:
    from numpy.typing import NDArray

    Floats = NDArray[np.float64]
    Ints = NDArray[np.intp]
    Bools = NDArray[np.bool_]

_LEAST = 1e-300
_EDGE = 1e-7  # p_site stays this far from 0 and 1
_MAX_STEPS = 60
_TOLERANCE = 1e-3  # nats that one more step promises


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
    offset: Floats | None = None,
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
    offset : (B, K) ndarray, optional
        How far each tied parameter stays above its leader, 0 for leaders; 0 for all where left out.
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
    above = np.zeros_like(theta) if offset is None else offset
    theta = np.take_along_axis(theta, leader, axis=1) + above
    value, gradient, information = look_tied(cells, theta, leader, n_sites=n_sites)
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
        trial = np.take_along_axis(trial, leader[active], axis=1) + above[active]
        new_value, new_gradient, new_information = look_tied(cells, trial, leader[active], n_sites=n_sites)
        gained = new_value >= value[active]
        won, lost = active[gained], active[~gained]
        theta[won], value[won] = trial[gained], new_value[gained]
        gradient[won], information[won] = new_gradient[gained], new_information[gained]
        damping[won] = np.maximum(0.1 * damping[won], 1e-5)
        damping[lost] = np.maximum(10.0 * damping[lost], 0.1)
        active = active[damping[active] < 1e7]  # else no step is small enough to gain: arrived
    return Climbs(theta, value)


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


def look_tied(cells: Cells, theta: Floats, leader: Ints, *, n_sites: int) -> tuple[Floats, Floats, Floats]:
    """Return penalised log-likelihood, gradient and information by the leaders; those of the tied are 0."""
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
