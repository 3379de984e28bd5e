"""How different the boutons of an axon really are: spread of p_release once sampling is taken out.

Even equal boutons show different shares of released trials. The released counts of boutons that differ follow a
beta-binomial law (Skellam 1948): each bouton draws its p_release from a beta distribution, whose SD is the true spread.
Counts may be fractions of a trial: `effective_counts` turns what is known of one p_release through noise into the
number of noise-free trials, and of releases among them, that would tell as much.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from scipy.special import betaln, expit, gammaln, ndtri

from ...checks import check_array
from ...errors import InputError
from ..statistics.intervals import Estimate

if TYPE_CHECKING:
    from numpy.typing import ArrayLike, NDArray

    Floats = NDArray[np.float64]

_LEAST_RHO, _MOST_RHO = 1e-7, 1.0 - 1e-7
_SD_STEPS = 24  # spreads tried for the interval
_MEANS, _SPREADS, _ANGLES = 40, 30, 400  # grid over which shrunken estimates are integrated
_NEGLIGIBLE = 1e-6


@dataclass(frozen=True, slots=True, kw_only=True)
class BetaBinomialFit:
    """Maximum likelihood of a beta distribution behind counts.

    Attributes
    ----------
    a, b : float
        Its parameters; infinite where the counts vary no more than those of equal boutons.
    mean, sd : float
        Mean and SD of p_release between boutons.
    rho : float
        Correlation between two trials of one bouton, 1 / (a + b + 1).
    log_likelihood, binomial_log_likelihood : float
        Of this fit, and of one p_release for all.
    """

    a: float
    b: float
    mean: float
    sd: float
    rho: float
    log_likelihood: float
    binomial_log_likelihood: float


@dataclass(frozen=True, slots=True, kw_only=True)
class Heterogeneity:
    """Spread of p_release between boutons.

    Attributes
    ----------
    sd : Estimate
        True SD between boutons; NaN with `method` saying why.
    fit : BetaBinomialFit or None
        The maximum-likelihood fit; None with fewer than two boutons.
    p_equal : float
        p that all boutons share one p_release.
    shrunken, shrunken_lo, shrunken_hi : (n_boutons,) ndarray
        p_release of each bouton given what the others tell about it, and its interval; NaN where not measured.
    n_boutons : int
        Boutons that were measured.
    """

    sd: Estimate
    fit: BetaBinomialFit | None
    p_equal: float
    shrunken: Floats
    shrunken_lo: Floats
    shrunken_hi: Floats
    n_boutons: int


def effective_counts(probability: ArrayLike, p_release: ArrayLike) -> tuple[Floats, Floats]:
    """Turn posteriors of p_release into the counts that tell as much: mean and variance of a beta law are matched.

    Parameters
    ----------
    probability : (n_boutons, n_p) array_like
        Posterior mass of p_release under the Jeffreys prior Beta(1/2, 1/2); a row of NaN or of zeros is not measured.
    p_release : (n_p,) array_like
        Where on [0, 1].

    Returns
    -------
    released, trials : (n_boutons,) ndarray
        NaN where not measured.

    Examples
    --------
    >>> p = np.sin((np.arange(2000) + 0.5) * np.pi / 4000) ** 2  # on this grid the prior is flat
    >>> released, trials = effective_counts([p**12 * (1 - p) ** 28], p)
    >>> released.round(2), trials.round(2)
    (array([12.]), array([40.]))
    """
    mass, p = check_array("probability", probability, n_dims=2), check_array("p_release", p_release, n_dims=1)
    total = mass.sum(axis=1)
    with np.errstate(invalid="ignore", divide="ignore"):
        weights = mass / np.where(total > 0, total, np.nan)[:, None]
        mean = weights @ p
        variance = weights @ p**2 - mean**2
        concentration = mean * (1.0 - mean) / variance - 1.0
    trials = np.maximum(concentration - 1.0, 0.0)
    return np.clip(mean * concentration - 0.5, 0.0, trials), trials


def dispersion(released: ArrayLike, trials: ArrayLike) -> tuple[float, float]:
    """Measure how much more counts vary than those of equal boutons.

    Parameters
    ----------
    released, trials : (n_boutons,) array_like of float
        Releases, and trials.

    Returns
    -------
    index : float
        Sum of squared standardised deviations over boutons minus 1.
    z : float
        Tarone's statistic, standard normal for many equal boutons (Tarone 1979).

    Examples
    --------
    >>> index, z = dispersion([20, 5, 12], [50, 50, 50])
    >>> round(2 * index, 6)  # chi-squared of homogeneity, 2 degrees of freedom
    12.126286
    """
    k, n = _measured(released, trials)
    if k.size < 2 or not 0 < k.sum() < n.sum():
        return float("nan"), float("nan")
    p = k.sum() / n.sum()
    chi2 = float(np.sum((k - n * p) ** 2 / (n * p * (1.0 - p))))
    tarone = (float(np.sum((k - n * p) ** 2)) / (p * (1.0 - p)) - n.sum()) / np.sqrt(2.0 * np.sum(n * (n - 1.0)))
    return chi2 / (k.size - 1), float(tarone)


def fit_beta_binomial(released: ArrayLike, trials: ArrayLike) -> BetaBinomialFit:
    """Fit a beta distribution of p_release to counts by maximum likelihood.

    Parameters
    ----------
    released, trials : (n_boutons,) array_like of float
        Releases, and trials; at least two boutons with trials.

    Raises
    ------
    InputError
        If counts are impossible or fewer than two boutons have trials.

    References
    ----------
    Skellam 1948 J R Stat Soc B 10:257; Griffiths 1973 Biometrics 29:637.

    Examples
    --------
    >>> fit = fit_beta_binomial([2, 8, 14, 19], [20, 20, 20, 20])
    >>> round(fit.mean, 2), round(fit.sd, 2)
    (0.54, 0.29)
    """
    from scipy.optimize import minimize

    k, n = _measured(released, trials)
    if k.size < 2:
        raise InputError(f"The spread between boutons needs at least two of them (given {k.size}).")
    ways = float(np.sum(gammaln(n + 1.0) - gammaln(k + 1.0) - gammaln(n - k + 1.0)))
    p = float(k.sum() / n.sum())
    alone = ways + float(np.sum(_times_log(k, p) + _times_log(n - k, 1.0 - p)))
    if not 0.0 < p < 1.0:
        return _equal_boutons(p, alone)

    def minus_log_likelihood(logits: Floats) -> float:
        a, b = _shape(*expit(logits))
        return -float(np.sum(betaln(a + k, b + n - k) - betaln(a, b)))

    bounds = [(-20.0, 20.0), (_logit(_LEAST_RHO), _logit(_MOST_RHO))]
    best = min(
        (
            minimize(
                minus_log_likelihood,
                np.array([_logit(p), _logit(rho)]),
                method="L-BFGS-B",
                bounds=bounds,
                options={"ftol": 1e-14, "gtol": 1e-9},
            )
            for rho in (0.01, 0.2)
        ),
        key=lambda one: float(one.fun),
    )
    log_likelihood = ways - float(best.fun)
    if log_likelihood <= alone + 1e-9:
        return _equal_boutons(p, alone)
    mean, rho = (float(one) for one in expit(best.x))
    a, b = _shape(mean, rho)
    return BetaBinomialFit(
        a=float(a),
        b=float(b),
        mean=mean,
        sd=float(np.sqrt(rho * mean * (1.0 - mean))),
        rho=rho,
        log_likelihood=log_likelihood,
        binomial_log_likelihood=alone,
    )


def measure_heterogeneity(
    released: ArrayLike,
    trials: ArrayLike,
    *,
    confidence: float,
    n_simulations: int,
    rng: np.random.Generator,
    shared_variance: ArrayLike | None = None,
) -> Heterogeneity:
    """Measure the true spread of p_release between boutons, test it, and shrink each bouton's estimate.

    The test compares Tarone's statistic with boutons that share the total by chance (multivariate hypergeometric draws:
    exact whatever the common p_release). The interval of the SD holds those spreads under which draws from a
    beta distribution give a statistic like the one found; the estimate is the spread under which half of them are
    larger: maximum likelihood is too small where boutons are few. Shrunken estimates are posterior means over all beta
    distributions, each as far as it fits the axon, so that their intervals carry the doubt about it.

    Parameters
    ----------
    released, trials : (n_boutons,) array_like of float
        Releases and trials, fractions allowed (`effective_counts`); NaN or no trial where not measured.
    confidence : float
        Coverage of the intervals.
    n_simulations : int
        Draws for the test and for each spread tried.
    rng : numpy.random.Generator
        Source of those draws.
    shared_variance : (n_boutons,) array_like of float, optional
        Variance of each p_release by what is not known of all boutons alike, and what counts therefore leave out. It
        makes no spread between boutons, and widens their shrunken intervals alone. None, where left out.

    References
    ----------
    Tarone 1979 Biometrika 66:585; Skellam 1948 J R Stat Soc B 10:257; Robbins 1956 Proc 3rd Berkeley Symp 1:157.
    """
    k_all, n_all = check_array("released", released, n_dims=1), check_array("trials", trials, n_dims=1)
    known = np.isfinite(k_all) & np.isfinite(n_all) & (n_all > 0)
    shrunken, lo, hi = (np.full(k_all.shape, np.nan) for _ in range(3))
    k, n = _measured(k_all, n_all)
    if k.size < 2:
        none = Estimate(value=np.nan, lo=np.nan, hi=np.nan, method="none: fewer than two boutons were measured")
        return Heterogeneity(
            sd=none,
            fit=None,
            p_equal=np.nan,
            shrunken=shrunken,
            shrunken_lo=lo,
            shrunken_hi=hi,
            n_boutons=int(k.size),
        )
    shared = np.zeros(k_all.shape) if shared_variance is None else np.asarray(shared_variance, dtype=np.float64)
    shrunken[known], lo[known], hi[known] = _shrink(k, n, shared[known], confidence=confidence)
    fit = fit_beta_binomial(k, n)
    if not 0.0 < fit.mean < 1.0:
        sd = Estimate(value=0.0, lo=np.nan, hi=np.nan, method="none: every trial of every bouton had the same outcome")
        p_equal = 1.0
    else:
        p_equal = _homogeneity_p(k, n, n_simulations=n_simulations, rng=rng)
        sd = _spread(k, n, fit.mean, confidence=confidence, n_simulations=n_simulations, rng=rng)
    return Heterogeneity(
        sd=sd, fit=fit, p_equal=p_equal, shrunken=shrunken, shrunken_lo=lo, shrunken_hi=hi, n_boutons=int(k.size)
    )


def _measured(released: ArrayLike, trials: ArrayLike) -> tuple[Floats, Floats]:
    k, n = check_array("released", released, n_dims=1), check_array("trials", trials, n_dims=1)
    if k.shape != n.shape:
        raise InputError(f"released {k.shape} and trials {n.shape} must describe the same boutons.")
    known = np.isfinite(k) & np.isfinite(n) & (n > 0)
    k, n = k[known], n[known]
    if np.any(k < 0) or np.any(k > n):
        where = int(np.flatnonzero((k < 0) | (k > n))[0])
        raise InputError(f"released must lie between 0 and the trials (given {k[where]:g} of {n[where]:g}).")
    return k, n


def _equal_boutons(p: float, log_likelihood: float) -> BetaBinomialFit:
    return BetaBinomialFit(
        a=np.inf,
        b=np.inf,
        mean=p,
        sd=0.0,
        rho=0.0,
        log_likelihood=log_likelihood,
        binomial_log_likelihood=log_likelihood,
    )


def _logit(p: float) -> float:
    return float(np.log(p) - np.log1p(-p))


def _times_log(count: Floats, p: float) -> Floats:
    return np.asarray(count * np.log(p)) if p > 0 else np.zeros_like(count)


def _shape(mean: ArrayLike, rho: ArrayLike) -> tuple[Floats, Floats]:
    middle, total = np.asarray(mean, dtype=np.float64), 1.0 / np.asarray(rho, dtype=np.float64) - 1.0
    return np.asarray(middle * total), np.asarray((1.0 - middle) * total)


def _excess(k: Floats, n: Floats) -> Floats:
    """Tarone's sum of squares, in units of one trial's variance, for rows of counts."""
    p = k.sum(axis=-1, keepdims=True) / n.sum()
    with np.errstate(invalid="ignore", divide="ignore"):
        return np.asarray(np.nan_to_num(np.sum((k - n * p) ** 2, axis=-1) / (p * (1.0 - p))[..., 0]))


def _homogeneity_p(k: Floats, n: Floats, *, n_simulations: int, rng: np.random.Generator) -> float:
    whole = np.maximum(np.rint(n), 1.0).astype(np.int64)
    total = int(np.clip(np.rint(k.sum() * whole.sum() / n.sum()), 1, whole.sum() - 1))
    drawn = rng.multivariate_hypergeometric(whole, total, size=n_simulations, method="marginals")
    found = _excess(k, n)
    return float((1 + np.sum(_excess(drawn * (n / whole), n) >= found * (1.0 - 1e-9))) / (1 + n_simulations))


def _spread(
    k: Floats, n: Floats, mean: float, *, confidence: float, n_simulations: int, rng: np.random.Generator
) -> Estimate:
    """Invert the test of every spread: simulate it, and see where the observed statistic lies."""
    whole = np.maximum(np.rint(n), 1.0).astype(np.int64)
    found = float(_excess(k, n))
    most = float(np.sqrt(mean * (1.0 - mean)))  # SD that this mean allows
    spreads = np.linspace(0.0, most, _SD_STEPS + 1)[:-1]
    larger, larger_than_typical = np.empty(_SD_STEPS), np.empty(_SD_STEPS)
    for i, sd in enumerate(spreads):
        middle = _doubtful_mean(mean, n, sd=sd, size=n_simulations, rng=rng)
        rho = np.minimum(sd**2 / (middle * (1.0 - middle)), _MOST_RHO)
        p = middle if sd == 0 else rng.beta(*_shape(middle, rho), size=(n_simulations, k.size))
        statistic = _excess(rng.binomial(whole, p, size=(n_simulations, k.size)) * (n / whole), n)
        if i == 0:
            # Counts that vary less than chance would leave no spread at all: no more is made of them than of the lowest
            # tenth of what equal boutons show.
            typical = max(found, float(np.quantile(statistic, 0.1)))
        larger[i] = np.mean(statistic > found) + 0.5 * np.mean(statistic == found)
        larger_than_typical[i] = np.mean(statistic > typical) + 0.5 * np.mean(statistic == typical)

    def where(curve: Floats, at: float) -> float:
        # on the normal scale the curve is nearly straight between the spreads tried
        rising = np.clip(np.maximum.accumulate(curve), 0.5 / n_simulations, 1.0 - 0.5 / n_simulations)
        score = ndtri(rising) + 1e-9 * np.arange(_SD_STEPS)
        return float(np.interp(ndtri(at), score, spreads, left=0.0, right=most))

    tail = 0.5 * (1.0 - confidence)
    return Estimate(
        value=where(larger, 0.5),
        lo=where(larger, tail),
        hi=where(larger_than_typical, 1.0 - tail),
        method="beta-binomial, inverted Monte Carlo test",
    )


def _doubtful_mean(mean: float, n: Floats, *, sd: float, size: int, rng: np.random.Generator) -> Floats:
    """Draw the mean of p_release between boutons as far as it is known: it matters where the spread is large."""
    variance = (sd**2 + float(np.mean(1.0 / n)) * max(mean * (1.0 - mean) - sd**2, 0.0)) / n.size
    rho = min(variance / (mean * (1.0 - mean)), _MOST_RHO)
    return np.clip(rng.beta(*_shape(mean, rho), size=(size, 1)), _LEAST_RHO, _MOST_RHO)


def _shrink(k: Floats, n: Floats, shared: Floats, *, confidence: float) -> tuple[Floats, Floats, Floats]:
    """Posterior mean and interval of each bouton's p_release, integrated over the beta distributions."""
    means = (np.arange(_MEANS) + 0.5) / _MEANS
    shares = (np.arange(_SPREADS) + 0.5) / _SPREADS
    mean, share = (one.ravel()[:, None] for one in np.meshgrid(means, shares, indexing="ij"))
    a, b = _shape(mean, share**2)
    fits = np.sum(betaln(a + k, b + n - k) - betaln(a, b), axis=1)
    weight = np.exp(fits - fits.max())
    kept = weight > _NEGLIGIBLE * weight.max()
    a, b, weight = a[kept], b[kept], weight[kept] / weight[kept].sum()
    each = (a + k) / (a + b + n)
    value = weight @ each
    variance = weight @ (each * (1.0 - each) / (a + b + n + 1.0) + each**2) - value**2
    wider = np.sqrt(1.0 + shared / variance)
    angle = (np.arange(_ANGLES) + 0.5) * (np.pi / 2 / _ANGLES)
    log_p, log_not = 2.0 * np.log(np.sin(angle)), 2.0 * np.log(np.cos(angle))
    tail = 0.5 * (1.0 - confidence)
    lo, hi = np.empty(k.size), np.empty(k.size)
    edges = np.linspace(0.0, np.pi / 2, _ANGLES + 1)
    for i, (released, trials) in enumerate(zip(k, n, strict=True)):
        above, below = a + released, b + trials - released
        # the density over the angle has exponents one half larger than that over p
        density = (above - 0.5) * log_p + (below - 0.5) * log_not - betaln(above, below)
        mass = weight @ np.exp(density)
        cumulative = np.concatenate([[0.0], np.cumsum(mass)])
        ends, middle = np.interp([tail, 1.0 - tail], cumulative / cumulative[-1], edges), np.arcsin(np.sqrt(value[i]))
        lo[i], hi[i] = np.sin(np.clip(middle + wider[i] * (ends - middle), 0.0, np.pi / 2)) ** 2
    return value, lo, hi
