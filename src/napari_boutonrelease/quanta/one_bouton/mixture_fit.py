"""Maximum of many release likelihoods at once: batched Newton steps with exact derivatives.

Each problem has its own amplitudes and its own number of sites. Parameters, in this order: logit p_site (log of the
mean number for Poisson release), log q, log q_cv, log noise_sd. Null amplitudes enter through their count and sum of
squares, which is all that Normal(0, noise_sd²) uses of them.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import numpy as np
from scipy.special import gammaln

if TYPE_CHECKING:
    from numpy.typing import NDArray

    Floats = NDArray[np.float64]

RELEASE, SIZE, VARIATION, NOISE = range(4)
N_PARAMETERS = 4
_LOG_2PI = float(np.log(2.0 * np.pi))


@dataclass(frozen=True, slots=True, kw_only=True)
class LogPrior:
    """What is known of a positive parameter beforehand: its logarithm is Normal(log(centre), log_sd²).

    Attributes
    ----------
    centre : float
        Greater than 0.
    log_sd : float
        0 fixes the parameter at `centre`; infinite leaves it free.
    """

    centre: float
    log_sd: float


@dataclass(frozen=True, slots=True)
class Problems:
    """B fits of one family.

    Attributes
    ----------
    amplitudes, relative_noise : (B, T) ndarray
        Amplitudes, and their noise SD over the common noise_sd; amplitudes of `missing` trials are 0.
    missing : (B, T) ndarray of bool
        Trials that say nothing.
    n_sites : (B,) ndarray
        Sites; infinite for Poisson release.
    null_count, null_squares : (B,) ndarray
        Number of null amplitudes, and the sum of their squares (each over its relative noise).
    prior_mean, prior_precision : (B, 4) ndarray
        Normal prior of each parameter; precision 0 means none.
    free : (B, 4) ndarray of bool
        Parameters that move.
    lower, upper : (B, 4) ndarray
        Bounds.
    m_max : int
        Largest number of vesicles.
    """

    amplitudes: Floats
    relative_noise: Floats
    missing: NDArray[np.bool_]
    n_sites: Floats
    null_count: Floats
    null_squares: Floats
    prior_mean: Floats
    prior_precision: Floats
    free: NDArray[np.bool_]
    lower: Floats
    upper: Floats
    m_max: int

    def take(self, index: NDArray[np.intp] | NDArray[np.bool_]) -> Problems:
        """Return the problems at `index`, repeated or reordered as it says."""
        arrays = {name: getattr(self, name)[index] for name in self.__slots__ if name != "m_max"}
        return Problems(**arrays, m_max=self.m_max)

    def holding(self, parameter: NDArray[np.intp]) -> Problems:
        """Return the same problems with one parameter of each held fixed."""
        free = self.free.copy()
        free[np.arange(free.shape[0]), parameter] = False
        return replace(self, free=free)


@dataclass(frozen=True, slots=True)
class Maxima:
    """Result of `maximise`: parameters (B, 4), objective and log likelihood (B,), and whether each converged."""

    parameters: Floats
    objective: Floats
    converged: NDArray[np.bool_]


def maximise(problems: Problems, start: Floats, *, max_steps: int, tolerance: float) -> Maxima:
    """Climb from `start` (B, 4) to the nearest maximum of each problem's penalised log likelihood.

    Newton steps on a Hessian made negative definite by damping (Levenberg 1944), accepted only where they gain.
    A problem is done when a step promises less than `tolerance` nats.
    """
    theta = np.clip(start, problems.lower, problems.upper)
    value, gradient, hessian = derivatives(problems, theta)
    damping = np.full(len(theta), 1e-3)
    converged = np.zeros(len(theta), dtype=bool)
    active = np.arange(len(theta))
    for _ in range(max_steps):
        part = problems.take(active)
        step, promised = _damped_step(part, theta[active], gradient[active], hessian[active], damping[active])
        arrived = promised < tolerance
        converged[active[arrived]] = True
        active, step = active[~arrived], step[~arrived]
        if not active.size:
            break
        part = part.take(~arrived)
        trial = np.clip(theta[active] + step, part.lower, part.upper)
        new_value, new_gradient, new_hessian = derivatives(part, trial)
        gained = new_value >= value[active]
        won, lost = active[gained], active[~gained]
        theta[won], value[won] = trial[gained], new_value[gained]
        gradient[won], hessian[won] = new_gradient[gained], new_hessian[gained]
        damping[won] = np.maximum(damping[won] * 0.2, 1e-6)
        damping[lost] *= 10.0
        # a step too small to gain anything in floating point has arrived as well
        stuck = lost[damping[lost] > 1e8]
        converged[stuck] = True
        active = np.setdiff1d(active, stuck, assume_unique=True)
        if not active.size:
            break
    return Maxima(parameters=theta, objective=value, converged=converged)


def _damped_step(
    problems: Problems, theta: Floats, gradient: Floats, hessian: Floats, damping: Floats
) -> tuple[Floats, Floats]:
    """Uphill step and the gain that the quadratic promises; parameters held or pressed against a bound stay."""
    pressed = ((theta <= problems.lower) & (gradient < 0)) | ((theta >= problems.upper) & (gradient > 0))
    moves = problems.free & ~pressed
    slope = np.where(moves, gradient, 0.0)
    both = moves[:, :, None] & moves[:, None, :]
    curvature = np.where(both, -hessian, 0.0)
    axis = np.arange(N_PARAMETERS)
    curvature[:, axis, axis] = np.where(moves, curvature[:, axis, axis], 1.0)
    roots, vectors = np.linalg.eigh(curvature)
    scale = np.abs(roots).max(axis=1, keepdims=True)
    firm = np.maximum(np.abs(roots), 1e-9 * scale) + damping[:, None] * np.maximum(scale, 1.0)
    along = np.einsum("bij,bi->bj", vectors, slope)
    step = np.einsum("bij,bj->bi", vectors, along / firm)
    longest = np.abs(step).max(axis=1, keepdims=True)
    step *= np.minimum(1.0, 1.5 / np.maximum(longest, 1e-300))  # at most a factor of 4.5 in any parameter
    promised = 0.5 * np.sum(along**2 / np.maximum(np.abs(roots), 1e-9 * scale), axis=1)
    return step, promised


def log_likelihood(problems: Problems, theta: Floats) -> Floats:
    """Log likelihood of each problem without its priors, in nats, (B,)."""
    joint, _, _, _ = _joint(problems, theta)
    peak = joint.max(axis=1)
    score = peak + np.log(np.exp(joint - peak[:, None]).sum(axis=1))
    total: Floats = np.where(problems.missing, 0.0, score).sum(axis=1)
    return total + _null_score(problems, theta)


def derivatives(problems: Problems, theta: Floats) -> tuple[Floats, Floats, Floats]:
    """Penalised log likelihood (B,), its gradient (B, 4) and its Hessian (B, 4, 4)."""
    joint, deviation, variance, quantal = _joint(problems, theta)
    peak = joint.max(axis=1, keepdims=True)
    share = np.exp(joint - peak)
    total = share.sum(axis=1)
    score = np.where(problems.missing, 0.0, peak[:, 0] + np.log(total)).sum(axis=1)
    share /= total[:, None]
    share *= ~problems.missing[:, None]

    m = np.arange(problems.m_max + 1, dtype=np.float64)
    expected, spread = _release_moments(problems.n_sites, theta[:, RELEASE])
    mean = (m * np.exp(theta[:, SIZE])[:, None])[:, :, None]
    grown = 2.0 * quantal  # derivative of the variance by log q and by log q_cv, (B, M, 1)
    noise = 2.0 * (np.exp(theta[:, NOISE])[:, None] * problems.relative_noise)[:, None] ** 2  # by log noise_sd
    precision = 1.0 / variance
    by_mean = deviation * precision
    by_variance = 0.5 * (by_mean**2 - precision)
    mean_mean, mean_variance = -precision, -by_mean * precision
    variance_variance = (0.5 * precision - by_mean**2) * precision

    first = np.empty((N_PARAMETERS, *joint.shape))
    first[RELEASE] = (m[None] - expected[:, None])[:, :, None]
    first[VARIATION] = by_variance * grown
    first[SIZE] = by_mean * mean + first[VARIATION]
    first[NOISE] = by_variance * noise

    # weighted by the share of each component: sum over components and trials of r (f'' + f' f'), minus g g' a trial
    weighted = share * first
    per_trial = weighted.sum(axis=2)  # (4, B, T)
    gradient = per_trial.sum(axis=2).T
    n_problems = len(theta)
    hessian = np.empty((n_problems, N_PARAMETERS, N_PARAMETERS))
    curved = variance_variance * grown**2 + 2.0 * first[VARIATION]
    mixed = mean_variance * mean * grown
    second = {
        (SIZE, SIZE): mean_mean * mean**2 + 2.0 * mixed + by_mean * mean + curved,
        (SIZE, VARIATION): mixed + curved,
        (SIZE, NOISE): mean_variance * mean * noise + variance_variance * grown * noise,
        (VARIATION, VARIATION): curved,
        (VARIATION, NOISE): variance_variance * grown * noise,
        (NOISE, NOISE): variance_variance * noise**2 + 2.0 * first[NOISE],
    }
    for i in range(N_PARAMETERS):
        for j in range(i, N_PARAMETERS):
            entry = np.einsum("bmt,bmt->b", weighted[i], first[j])
            entry -= np.einsum("bt,bt->b", per_trial[i], per_trial[j])
            if (i, j) in second:
                entry += np.einsum("bmt,bmt->b", share, second[i, j])
            hessian[:, i, j] = hessian[:, j, i] = entry
    hessian[:, RELEASE, RELEASE] -= spread * (~problems.missing).sum(axis=1)

    residual = problems.null_squares * np.exp(-2.0 * theta[:, NOISE])
    gradient[:, NOISE] += residual - problems.null_count
    hessian[:, NOISE, NOISE] -= 2.0 * residual
    offset = theta - problems.prior_mean
    value = score + _null_score(problems, theta) - 0.5 * (problems.prior_precision * offset**2).sum(axis=1)
    gradient = gradient - problems.prior_precision * offset
    axis = np.arange(N_PARAMETERS)
    hessian[:, axis, axis] -= problems.prior_precision
    return value, gradient, hessian


def release_log_weights(n_sites: Floats, release: Floats, *, m_max: int) -> Floats:
    """Log probability of m = 0..m_max vesicles, (B, M), from logit p_site, or log mean where n_sites is infinite."""
    m = np.arange(m_max + 1, dtype=np.float64)
    poisson = np.isinf(n_sites)
    n = np.where(poisson, m_max, n_sites)[:, None]
    left = np.maximum(n - m, 0.0)
    ways = gammaln(n + 1.0) - gammaln(m + 1.0) - gammaln(left + 1.0)
    log_p, log_not = -np.logaddexp(0.0, -release)[:, None], -np.logaddexp(0.0, release)[:, None]
    binomial = np.where(m > n, -np.inf, ways + m * log_p + left * log_not)
    rare = m * release[:, None] - np.exp(np.minimum(release, 20.0))[:, None] - gammaln(m + 1.0)
    return np.where(poisson[:, None], rare, binomial)


def _release_moments(n_sites: Floats, release: Floats) -> tuple[Floats, Floats]:
    """Mean and variance of the number of vesicles, (B,) each."""
    rare = np.exp(np.minimum(release, 20.0))
    p = 1.0 / (1.0 + np.exp(-release))
    poisson = np.isinf(n_sites)
    n = np.where(poisson, 0.0, n_sites)
    return np.where(poisson, rare, n * p), np.where(poisson, rare, n * p * (1.0 - p))


def _joint(problems: Problems, theta: Floats) -> tuple[Floats, Floats, Floats, Floats]:
    """Log joint density (B, M, T), deviation from the mean, variance, and quantal part of the variance (B, M, 1)."""
    m = np.arange(problems.m_max + 1, dtype=np.float64)[None, :, None]
    q = np.exp(theta[:, SIZE])[:, None, None]
    quantal = m * (q * np.exp(theta[:, VARIATION])[:, None, None]) ** 2
    noise = (np.exp(theta[:, NOISE])[:, None] * problems.relative_noise)[:, None] ** 2
    variance = noise + quantal
    deviation = problems.amplitudes[:, None] - m * q
    weights = release_log_weights(problems.n_sites, theta[:, RELEASE], m_max=problems.m_max)[:, :, None]
    joint = weights - 0.5 * (_LOG_2PI + np.log(variance) + deviation**2 / variance)
    return joint, deviation, variance, quantal


def _null_score(problems: Problems, theta: Floats) -> Floats:
    log_noise = theta[:, NOISE]
    spread: Floats = problems.null_count * (0.5 * _LOG_2PI + log_noise)
    return -spread - 0.5 * problems.null_squares * np.exp(-2.0 * log_noise)
