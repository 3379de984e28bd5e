"""Likelihood of release amplitudes: m vesicles, each of size q, seen through Gaussian noise.

a | m ~ Normal(m q, noise_sd² + m (q q_cv)²), with m binomial (Boyd & Martin 1956) or Poisson (del Castillo & Katz
1954). Null amplitudes are the case m = 0. A missing amplitude (NaN) says nothing: its log density is 0 for every m.
"""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
from scipy.special import gammaln, xlog1py, xlogy

from ...checks import check_fraction, check_not_negative, check_positive
from ...errors import InputError

if TYPE_CHECKING:
    from numpy.typing import ArrayLike, NDArray

_LOG_2PI = float(np.log(2.0 * np.pi))


def component_logpdf(
    amplitudes: ArrayLike, *, noise_sd: ArrayLike, q: ArrayLike, q_cv: ArrayLike, m_max: int
) -> NDArray[np.float64]:
    """Log density of each amplitude for every number of vesicles from 0 to `m_max`.

    Parameters
    ----------
    amplitudes : (..., T) array_like of float
        Amplitudes; NaN marks one that could not be measured.
    noise_sd : array_like of float
        SD of the additive noise, one for all or one per amplitude; same unit as the amplitudes.
    q, q_cv : array_like of float
        Mean response to one vesicle, and its coefficient of variation. All three broadcast against `amplitudes`, so
        that ``q[:, None]`` scores the same amplitudes under many q at once.
    m_max : int
        Largest number of vesicles.

    Returns
    -------
    (m_max + 1, ..., T) ndarray of float
        log Normal(a; m q, noise_sd² + m (q q_cv)²), in nats; 0 where the amplitude is NaN.

    Examples
    --------
    >>> component_logpdf([0.0, 0.1], noise_sd=0.02, q=0.1, q_cv=0.0, m_max=1).round(3)
    array([[ 2.993, -9.507],
           [-9.507,  2.993]])
    """
    observed, noise, size, cv = np.broadcast_arrays(
        *(np.asarray(values, dtype=np.float64) for values in (amplitudes, noise_sd, q, q_cv))
    )
    m = np.arange(m_max + 1, dtype=np.float64).reshape((-1,) + (1,) * observed.ndim)
    variance = noise**2 + m * (size * cv) ** 2
    score = -0.5 * (_LOG_2PI + np.log(variance) + (observed - m * size) ** 2 / variance)
    return np.where(np.isnan(observed), 0.0, score)


def binomial_log_weights(p_site: ArrayLike, *, n_sites: ArrayLike, m_max: int) -> NDArray[np.float64]:
    """Log probability of 0 to `m_max` vesicles from `n_sites` sites that each release with `p_site`.

    Parameters
    ----------
    p_site : array_like of float
        Release probability of a site, in [0, 1].
    n_sites : array_like of int
        Number of sites; broadcasts against `p_site`.
    m_max : int
        Largest number of vesicles.

    Returns
    -------
    (m_max + 1, ...) ndarray of float
        log Binom(m; n_sites, p_site); -inf where m exceeds n_sites.

    Examples
    --------
    >>> np.exp(binomial_log_weights(0.4, n_sites=2, m_max=2)).round(2)
    array([0.36, 0.48, 0.16])
    """
    p, n = np.broadcast_arrays(np.asarray(p_site, dtype=np.float64), np.asarray(n_sites, dtype=np.float64))
    m = np.arange(m_max + 1, dtype=np.float64).reshape((-1,) + (1,) * p.ndim)
    failures = np.maximum(n - m, 0.0)
    log_ways = gammaln(n + 1.0) - gammaln(m + 1.0) - gammaln(failures + 1.0)
    return np.where(m > n, -np.inf, log_ways + xlogy(m, p) + xlog1py(failures, -p))


def poisson_log_weights(mean: ArrayLike, *, m_max: int) -> NDArray[np.float64]:
    """Log probability of 0 to `m_max` vesicles where their mean number is `mean`.

    What lies beyond `m_max` is left out, not lumped; `poisson_m_max` says how far to go.

    Examples
    --------
    >>> np.exp(poisson_log_weights(1.0, m_max=2)).round(4)
    array([0.3679, 0.3679, 0.1839])
    """
    rate = np.asarray(mean, dtype=np.float64)
    m = np.arange(m_max + 1, dtype=np.float64).reshape((-1,) + (1,) * rate.ndim)
    return xlogy(m, rate) - rate - gammaln(m + 1.0)


def poisson_m_max(mean: float) -> int:
    """Vesicles beyond which a Poisson with this mean holds less than 1e-9 of its probability."""
    return int(np.ceil(mean + 7.0 * np.sqrt(mean) + 9.0))


def mixture_loglikelihood(log_weights: ArrayLike, log_components: ArrayLike) -> NDArray[np.float64]:
    """Log likelihood of each amplitude, with the number of vesicles summed out.

    Parameters
    ----------
    log_weights : (M, ...) array_like of float
        Log probability of each number of vesicles; broadcasts against `log_components` after the first axis.
    log_components : (M, ..., T) array_like of float
        Log density of each amplitude given that number.

    Returns
    -------
    (..., T) ndarray of float
        In nats; 0 for a missing amplitude up to rounding.
    """
    joint = _joint(log_weights, log_components)
    peak = joint.max(axis=0)
    total: NDArray[np.float64] = peak + np.log(np.exp(joint - peak).sum(axis=0))
    return total


def vesicle_posterior(log_weights: ArrayLike, log_components: ArrayLike) -> NDArray[np.float64]:
    """Probability of each number of vesicles, given the amplitude (parameters as in `mixture_loglikelihood`).

    Returns
    -------
    (M, ..., T) ndarray of float
        Sums to 1 over the first axis. ``1 - result[0]`` is the probability that the pulse released at all.
    """
    joint = _joint(log_weights, log_components)
    share = np.exp(joint - joint.max(axis=0))
    posterior: NDArray[np.float64] = share / share.sum(axis=0)
    return posterior


def _joint(log_weights: ArrayLike, log_components: ArrayLike) -> NDArray[np.float64]:
    components = np.asarray(log_components, dtype=np.float64)
    weights = np.asarray(log_weights, dtype=np.float64)
    missing_axes = components.ndim - weights.ndim
    return weights.reshape(weights.shape + (1,) * missing_axes) + components


def binomial_gaussian_loglikelihood(
    amplitudes_dff: ArrayLike,
    *,
    n_sites: int,
    p_site: float,
    q_dff: float,
    q_cv: float,
    noise_sd_dff: ArrayLike,
    null_amplitudes_dff: ArrayLike = (),
) -> float:
    """Score one bouton's amplitudes under binomial release plus Gaussian noise (Boyd & Martin 1956).

    Parameters
    ----------
    amplitudes_dff : (T,) array_like of float
        Amplitude per stimulus, dF/F. NaN marks an unusable stimulus and is skipped.
    n_sites, p_site : int >= 1, float in [0, 1]
        Release sites; release probability per site.
    q_dff, q_cv : float > 0, float >= 0
        Mean response to one vesicle (dF/F) and its coefficient of variation.
    noise_sd_dff : float > 0 or (T,) array_like
        SD of the additive noise, dF/F; one for all or one per amplitude.
    null_amplitudes_dff : (K,) array_like of float
        Amplitudes where nothing was stimulated (no vesicle); need a single `noise_sd_dff`.

    Returns
    -------
    float
        Sum of log sum_m Binom(m; n, p) Normal(a; m q, noise² + m (q q_cv)²), in nats.

    Raises
    ------
    InputError
        If a parameter is out of range or no amplitude is finite.

    Examples
    --------
    >>> round(binomial_gaussian_loglikelihood([0.0, 0.1, 0.2], n_sites=2, p_site=0.5, q_dff=0.1, q_cv=0.0,
    ...     noise_sd_dff=0.02), 4)
    5.5135
    """
    if n_sites < 1 or int(n_sites) != n_sites:
        raise InputError(f"n_sites must be a whole number of at least 1 (given {n_sites}).")
    check_fraction("p_site", p_site)
    log_weights = binomial_log_weights(p_site, n_sites=n_sites, m_max=int(n_sites))
    return _score(amplitudes_dff, null_amplitudes_dff, log_weights, q_dff=q_dff, q_cv=q_cv, noise_sd_dff=noise_sd_dff)


def poisson_gaussian_loglikelihood(
    amplitudes_dff: ArrayLike,
    *,
    mean_vesicles: float,
    q_dff: float,
    q_cv: float,
    noise_sd_dff: ArrayLike,
    null_amplitudes_dff: ArrayLike = (),
) -> float:
    """Score one bouton's amplitudes under Poisson release plus Gaussian noise (del Castillo & Katz 1954).

    Parameters are those of `binomial_gaussian_loglikelihood`, with the mean number of vesicles a stimulus in place
    of sites and their probability.

    Raises
    ------
    InputError
        If a parameter is out of range or no amplitude is finite.

    Examples
    --------
    >>> round(poisson_gaussian_loglikelihood([0.0, 0.1, 0.2], mean_vesicles=1.0, q_dff=0.1, q_cv=0.0,
    ...     noise_sd_dff=0.02), 4)
    5.2861
    """
    check_not_negative("mean_vesicles", mean_vesicles)
    log_weights = poisson_log_weights(mean_vesicles, m_max=poisson_m_max(mean_vesicles))
    return _score(amplitudes_dff, null_amplitudes_dff, log_weights, q_dff=q_dff, q_cv=q_cv, noise_sd_dff=noise_sd_dff)


def null_loglikelihood(null_amplitudes: ArrayLike, *, noise_sd: ArrayLike) -> float:
    """Score amplitudes measured where nothing was released: Normal(0, noise_sd²), NaN skipped, in nats.

    Examples
    --------
    >>> round(null_loglikelihood([0.01, -0.02], noise_sd=0.02), 4)
    5.3612
    """
    return float(component_logpdf(null_amplitudes, noise_sd=noise_sd, q=1.0, q_cv=0.0, m_max=0).sum())


def _score(
    amplitudes: ArrayLike,
    null_amplitudes: ArrayLike,
    log_weights: NDArray[np.float64],
    *,
    q_dff: float,
    q_cv: float,
    noise_sd_dff: ArrayLike,
) -> float:
    check_positive("q_dff", q_dff, unit="dF/F")
    check_not_negative("q_cv", q_cv)
    noise = np.asarray(noise_sd_dff, dtype=np.float64)
    if not (noise > 0).all():
        raise InputError(f"noise_sd_dff must be greater than 0 in dF/F (smallest given {noise.min():g}).")
    observed = np.asarray(amplitudes, dtype=np.float64)
    if not np.isfinite(observed).any():
        raise InputError(f"amplitudes_dff must hold at least one finite amplitude (given {observed.size}, all NaN).")
    components = component_logpdf(observed, noise_sd=noise, q=q_dff, q_cv=q_cv, m_max=log_weights.size - 1)
    score = np.where(np.isnan(observed), 0.0, mixture_loglikelihood(log_weights, components)).sum()
    nulls = np.asarray(null_amplitudes, dtype=np.float64)
    if not nulls.size:
        return float(score)
    if noise.ndim:
        raise InputError(f"null_amplitudes_dff need one noise_sd_dff for all (given {noise.size}); score them apart.")
    return float(score) + null_loglikelihood(nulls, noise_sd=noise)
