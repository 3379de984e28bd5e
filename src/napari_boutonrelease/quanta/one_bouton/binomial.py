"""Binomial release of one bouton by maximum likelihood: sites, their probability, and the size of one vesicle.

a | m ~ Normal(m q, noise_sd² + m (q q_cv)²) with m ~ Binomial(n_sites, p_site) (Boyd & Martin 1956) or Poisson (del
Castillo & Katz 1954). The likelihood is joint over evoked and null amplitudes, so that noise_sd carries its own
uncertainty. What is known beforehand of q, q_cv or the noise enters as a log-normal prior.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import numpy as np
from scipy.special import chdtri

from ...errors import InputError
from ..statistics.intervals import Estimate
from .fit_inputs import (
    BoutonData,
    ReleasePriors,
    poisson_terms,
    read_bouton_data,
)
from .goodness import goodness_of_fit
from .likelihoods import component_logpdf, vesicle_posterior
from .mixture_fit import (
    NOISE,
    RELEASE,
    SIZE,
    VARIATION,
    Problems,
    maximise,
    release_log_weights,
)
from .site_search import (
    MAX_STEPS,
    TOLERANCE,
    Family,
    ReleaseModel,
    climb,
    likelihood_reach,
    release_models,
)

if TYPE_CHECKING:
    from collections.abc import Sequence

    from numpy.typing import ArrayLike, NDArray

    Floats = NDArray[np.float64]

_FEW_TRIALS = 20
_LOW_SIGNAL = 2.0
_POOR_FIT = 0.01


@dataclass(frozen=True, slots=True, kw_only=True)
class SitesFit:
    """What the amplitudes of one bouton say about its release.

    Attributes
    ----------
    models : tuple of ReleaseModel
        One for each number of sites tried, Poisson release last; empty where nothing could be fitted.
    best : int
        Index of the model with the smallest BIC (among equals the fewest sites); -1 where nothing could be fitted.
    quantal_model : str
        `binomial`, `poisson` or `none`.
    n_sites : int or None
        Of the best model; None for Poisson release or no model.
    n_set : tuple of int
        Numbers of sites whose maximum lies within `chi2(1) / 2` nats of the best (1.92 at 95 %).
    poisson_possible : bool
        Whether Poisson release, many sites of small probability, lies within that distance too.
    n_unbounded : bool
        Whether the set has no upper end: the largest number tried, or Poisson release, is in it.
    p_release, p_site, q : Estimate
        Values of the best model. Intervals are profile likelihoods in which n_sites is a parameter like the others:
        whatever any model reaches within `chi2(1) / 2` nats of the best.
    q_cv, noise_sd : float
        Of the best model.
    p_released : (n_trials,) ndarray
        Probability that each single pulse released; NaN where the amplitude is missing.
    release_evidence : float
        Log likelihood of the best model over that of no release at all, in nats.
    fit_p : float
        Goodness of fit (Anderson-Darling by parametric bootstrap at the best n_sites); NaN where left out.
    n_trials, n_null, n_spontaneous : int
        Evoked and null amplitudes used; null amplitudes left out because they look like releases.
    flags : frozenset of str
        Codes of the registry in `flags.py`.
    """

    models: tuple[ReleaseModel, ...]
    best: int
    quantal_model: str
    n_sites: int | None
    n_set: tuple[int, ...]
    poisson_possible: bool
    n_unbounded: bool
    p_release: Estimate
    p_site: Estimate
    q: Estimate
    q_cv: float
    noise_sd: float
    p_released: Floats
    release_evidence: float
    fit_p: float
    n_trials: int
    n_null: int
    n_spontaneous: int
    flags: frozenset[str]


def fit_sites(
    amplitudes: ArrayLike,
    null_amplitudes: ArrayLike,
    *,
    relative_noise: ArrayLike | None,
    n_max: int,
    priors: ReleasePriors,
    confidence: float,
    n_bootstrap: int,
    rng: np.random.Generator,
) -> SitesFit:
    """Fit 1 to `n_max` sites and Poisson release to one bouton's amplitudes, and say which the data exclude.

    Parameters
    ----------
    amplitudes, null_amplitudes : (T,), (K,) array_like of float
        Amplitudes at stimuli and where nothing was stimulated; NaN is skipped.
    relative_noise : (T,) array_like of float or None
        Noise SD of each amplitude over that of the null amplitudes; None where all are alike.
    n_max : int
        Largest number of sites tried, at least 1.
    priors : ReleasePriors
        What is known beforehand of q, q_cv and the noise.
    confidence : float
        Coverage of intervals and of the set of n_sites.
    n_bootstrap : int
        Simulated recordings for the goodness of fit; 0 leaves it out.
    rng : numpy.random.Generator
        Source of the simulated recordings.

    Returns
    -------
    SitesFit
        With NaN, an empty `models` and flags where the amplitudes allow no fit (all missing, one, or all equal).

    Raises
    ------
    InputError
        If `n_max` is below 1 or an array has the wrong shape.

    Examples
    --------
    >>> from napari_boutonrelease.quanta import LogPrior
    >>> rng = np.random.default_rng(1)
    >>> vesicles = rng.binomial(2, 0.4, 300)
    >>> fit = fit_sites(0.2 * vesicles + rng.normal(0, 0.02, 300), rng.normal(0, 0.02, 100), relative_noise=None,
    ...     n_max=4, priors=ReleasePriors(q=None, q_cv=LogPrior(centre=0.1, log_sd=0.5), noise=None),
    ...     confidence=0.95, n_bootstrap=0, rng=rng)
    >>> fit.n_sites, round(fit.q.value, 2), fit.p_release.lo < 0.64 < fit.p_release.hi
    (2, 0.2, True)
    """
    if n_max < 1:
        raise InputError(f"n_max must be at least 1 (given {n_max}).")
    tried: list[tuple[Sequence[float], int]] = [(range(1, n_max + 1), n_max), ((np.inf,), poisson_terms(n_max))]
    return _fit(
        read_bouton_data(amplitudes, null_amplitudes, relative_noise=relative_noise, noise_prior=priors.noise),
        tried=tried,
        priors=priors,
        confidence=confidence,
        n_bootstrap=n_bootstrap,
        rng=rng,
    )


def fit_binomial(
    amplitudes: ArrayLike,
    null_amplitudes: ArrayLike,
    *,
    relative_noise: ArrayLike | None,
    n_sites: int,
    priors: ReleasePriors,
    confidence: float,
    n_bootstrap: int,
    rng: np.random.Generator,
) -> SitesFit:
    """Fit release from a known number of sites; parameters, returns and errors else as in `fit_sites`.

    Examples
    --------
    >>> from napari_boutonrelease.quanta import LogPrior
    >>> rng = np.random.default_rng(1)
    >>> amplitudes = 0.2 * rng.binomial(1, 0.5, 100) + rng.normal(0, 0.03, 100)
    >>> fit = fit_binomial(amplitudes, rng.normal(0, 0.03, 100), relative_noise=None, n_sites=1,
    ...     priors=ReleasePriors(q=None, q_cv=LogPrior(centre=0.1, log_sd=0.5), noise=None), confidence=0.95,
    ...     n_bootstrap=0, rng=rng)
    >>> fit.n_set, fit.p_site.lo < 0.5 < fit.p_site.hi
    ((1,), True)
    """
    if n_sites < 1:
        raise InputError(f"n_sites must be at least 1 (given {n_sites}).")
    return _fit(
        read_bouton_data(amplitudes, null_amplitudes, relative_noise=relative_noise, noise_prior=priors.noise),
        tried=[((n_sites,), n_sites)],
        priors=priors,
        confidence=confidence,
        n_bootstrap=n_bootstrap,
        rng=rng,
    )


def _fit(
    data: BoutonData,
    *,
    tried: list[tuple[Sequence[float], int]],
    priors: ReleasePriors,
    confidence: float,
    n_bootstrap: int,
    rng: np.random.Generator,
) -> SitesFit:
    if not data.usable:
        return _no_fit(data)
    families = [climb(data, np.asarray(n, dtype=np.float64), m_max=m_max, priors=priors) for n, m_max in tried]
    models = tuple(model for family in families for model in release_models(family))
    bic = np.array([model.bic for model in models])
    best = int(np.flatnonzero(bic <= bic.min() + 1e-6)[0])  # among equals the simplest
    chosen = models[best]
    level = chosen.objective - 0.5 * float(chdtri(1, 1.0 - confidence))
    kept = [model.n_sites for model in models if model.objective >= level]
    largest = models[len(families[0].objective) - 1].n_sites
    reach = likelihood_reach(families, level=level)
    problem, at = _only(families, best)
    fit_p = goodness_of_fit(problem, at, n_bootstrap=n_bootstrap, rng=rng)[1] if n_bootstrap else float("nan")
    p_release = _estimate(chosen.p_release, reach["p_release"])
    flags = {
        "few_trials": data.amplitudes.size < _FEW_TRIALS,
        "low_signal": chosen.q < _LOW_SIGNAL * chosen.noise_sd,
        "n_unresolved": len(kept) > 1,
        "poor_fit": fit_p < _POOR_FIT,
        "silent": p_release.lo == 0.0,
    }
    return SitesFit(
        models=models,
        best=best,
        quantal_model="poisson" if chosen.n_sites is None else "binomial",
        n_sites=chosen.n_sites,
        n_set=tuple(n for n in kept if n is not None),
        poisson_possible=None in kept,
        n_unbounded=len(models) > 1 and (None in kept or largest in kept),
        p_release=p_release,
        p_site=_estimate(chosen.p_site, reach["p_site"]),
        q=_estimate(chosen.q, reach["q"]),
        q_cv=chosen.q_cv,
        noise_sd=chosen.noise_sd,
        p_released=_released(data, problem, at),
        release_evidence=chosen.objective - _silent_objective(problem, at),
        fit_p=fit_p,
        n_trials=data.amplitudes.size,
        n_null=int(data.null_count),
        n_spontaneous=data.n_spontaneous,
        flags=frozenset(code for code, raised in flags.items() if raised),
    )


def _no_fit(data: BoutonData) -> SitesFit:
    unknown = Estimate(value=np.nan, lo=np.nan, hi=np.nan, method="none: too few amplitudes that differ")
    return SitesFit(
        models=(),
        best=-1,
        quantal_model="none",
        n_sites=None,
        n_set=(),
        poisson_possible=False,
        n_unbounded=False,
        p_release=unknown,
        p_site=unknown,
        q=unknown,
        q_cv=np.nan,
        noise_sd=np.nan,
        p_released=np.full(data.used.size, np.nan),
        release_evidence=np.nan,
        fit_p=np.nan,
        n_trials=data.amplitudes.size,
        n_null=int(data.null_count),
        n_spontaneous=data.n_spontaneous,
        flags=frozenset({"few_trials"} if data.amplitudes.size < _FEW_TRIALS else ()),
    )


def _estimate(value: float, limits: tuple[float, float]) -> Estimate:
    return Estimate(value=value, lo=limits[0], hi=limits[1], method="profile likelihood")


def _only(families: Sequence[Family], best: int) -> tuple[Problems, Floats]:
    """Return the best model alone, as a problem and its parameters."""
    for family in families:
        if best < len(family.objective):
            return family.problems.take(np.array([best])), family.parameters[[best]]
        best -= len(family.objective)
    raise IndexError(best)


def _silent_objective(problem: Problems, at: Floats) -> float:
    """Maximum of the same objective where nothing is ever released."""
    silent = at.copy()
    silent[:, RELEASE] = -700.0
    informed = problem.prior_precision[:, [SIZE, VARIATION]] > 0
    silent[:, [SIZE, VARIATION]] = np.where(
        informed, problem.prior_mean[:, [SIZE, VARIATION]], silent[:, [SIZE, VARIATION]]
    )
    only_noise = problem.free & (np.arange(problem.free.shape[1]) == NOISE)
    lower, upper = np.minimum(problem.lower, silent), np.maximum(problem.upper, silent)
    upper[:, NOISE] += 5.0  # with no release, the spread of the amplitudes has to be noise
    pinned = replace(problem, free=only_noise, lower=lower, upper=upper)
    return float(maximise(pinned, silent, max_steps=MAX_STEPS, tolerance=TOLERANCE).objective[0])


def _released(data: BoutonData, problem: Problems, at: Floats) -> Floats:
    q, q_cv, noise_sd = np.exp(at[0, [SIZE, VARIATION, NOISE]])
    components = component_logpdf(
        data.amplitudes, noise_sd=noise_sd * data.relative_noise, q=q, q_cv=q_cv, m_max=problem.m_max
    )
    log_weights = release_log_weights(problem.n_sites, at[:, RELEASE], m_max=problem.m_max)[0]
    released = np.full(data.used.size, np.nan)
    released[data.used] = 1.0 - vesicle_posterior(log_weights, components)[0]
    return released
