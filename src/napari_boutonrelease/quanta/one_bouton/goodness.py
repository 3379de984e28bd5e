"""Whether the mixture describes the amplitudes at all."""

from __future__ import annotations

from dataclasses import replace
from typing import TYPE_CHECKING

import numpy as np
from scipy.special import ndtr

from .mixture_fit import (
    NOISE,
    RELEASE,
    SIZE,
    VARIATION,
    Problems,
    maximise,
    release_log_weights,
)

if TYPE_CHECKING:
    from numpy.typing import NDArray

    Floats = NDArray[np.float64]


def goodness_of_fit(
    problems: Problems, maximum: Floats, *, n_bootstrap: int, rng: np.random.Generator
) -> tuple[float, float]:
    """Compare amplitudes with their fitted distribution (Anderson & Darling 1954), calibrated by simulation.

    Parameters
    ----------
    problems : Problems
        One problem, without missing trials.
    maximum : (1, 4) ndarray
        Its fitted parameters.
    n_bootstrap : int
        Simulated recordings, each refitted from the fitted parameters at the same number of sites (parametric
        bootstrap; Stute, Gonzáles Manteiga & Presedo Quindimil 1993). Must be at least 1.
    rng : numpy.random.Generator
        Source of the simulated recordings.

    Returns
    -------
    statistic, p_value : float
        Anderson-Darling distance, and the share of simulated recordings that lie at least as far.
    """
    observed = float(_anderson_darling(problems, maximum)[0])
    repeats = problems.take(np.zeros(n_bootstrap, dtype=np.intp))
    simulated = _simulate(repeats, maximum, rng)
    refitted = maximise(simulated, np.repeat(maximum, n_bootstrap, axis=0), max_steps=25, tolerance=1e-3)
    distances = _anderson_darling(simulated, refitted.parameters)
    return observed, (1.0 + float(np.count_nonzero(distances >= observed))) / (1.0 + n_bootstrap)


def mixture_cdf(problems: Problems, theta: Floats) -> Floats:
    """Probability of an amplitude at most as large as each one, (B, T)."""
    weights = np.exp(release_log_weights(problems.n_sites, theta[:, RELEASE], m_max=problems.m_max))
    m = np.arange(problems.m_max + 1, dtype=np.float64)[None, :, None]
    q, cv, noise = (np.exp(theta[:, i])[:, None, None] for i in (SIZE, VARIATION, NOISE))
    spread = np.sqrt((noise * problems.relative_noise[:, None]) ** 2 + m * (q * cv) ** 2)
    below: Floats = np.einsum("bm,bmt->bt", weights, ndtr((problems.amplitudes[:, None] - m * q) / spread))
    return below


def _anderson_darling(problems: Problems, theta: Floats) -> Floats:
    ranked = np.sort(np.clip(mixture_cdf(problems, theta), 1e-12, 1.0 - 1e-12), axis=1)
    n = ranked.shape[1]
    odd = 2.0 * np.arange(1, n + 1) - 1.0
    distance: Floats = -n - (odd * (np.log(ranked) + np.log1p(-ranked[:, ::-1]))).sum(axis=1) / n
    return distance


def _simulate(problems: Problems, maximum: Floats, rng: np.random.Generator) -> Problems:
    """Draw new amplitudes and new null amplitudes (as their sum of squares) from the fitted model."""
    release, q, cv, noise = maximum[0, RELEASE], *np.exp(maximum[0, [SIZE, VARIATION, NOISE]])
    shape = problems.amplitudes.shape
    if np.isinf(problems.n_sites[0]):
        m = rng.poisson(np.exp(release), shape)
    else:
        m = rng.binomial(int(problems.n_sites[0]), 1.0 / (1.0 + np.exp(-release)), shape)
    spread = np.sqrt((noise * problems.relative_noise) ** 2 + m * (q * cv) ** 2)
    squares = np.zeros(shape[0])
    if problems.null_count[0] > 0:
        squares = noise**2 * rng.chisquare(problems.null_count[0], shape[0])
    return replace(problems, amplitudes=m * q + spread * rng.standard_normal(shape), null_squares=squares)
