"""Release probability and quanta of all boutons of an axon together, by hierarchical Bayes on a grid.

One bouton seldom tells how large its vesicle is and how much vesicles vary; without that, its release probability is
ill determined at low signal (a small vesicle often, or a large one seldom?). The boutons of one axon share the reporter
and the release machinery, so each bouton's quantal size q is drawn from a log-normal distribution of the axon, whose
centre and spread are estimated with everything else, and the quantal variation is common. What is not known is
integrated over, not plugged in: every interval carries the uncertainty of q, q_cv, n_sites and the noise.

Model of one amplitude (Boyd & Martin 1956; del Castillo & Katz 1954): m ~ Binomial(n_sites, p_site) vesicles of mean q
and variance (q q_cv)² on top of normal noise. Vesicle sizes are taken as gamma distributed, hence positive and skewed:
a normal law for them, common in the literature, was measured to pull q down by 4 % and p_release up by 0.01 when sizes
are skewed, and gamma sizes cost nothing when they are not. The pulses of a trial share n_sites, q, q_cv and the noise;
each has its own p_release = 1 - (1 - p_site)^n_sites. Prior of p_release: Jeffreys, Beta(1/2, 1/2), the same for every
n_sites; of n_sites: 1/n up to `n_max`. The empirical-Bayes idea is Robbins 1956.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from scipy.special import gammaln

from ..checks import check_array, check_positive
from ..errors import InputError
from .vesicle_sizes import gamma_vesicles_logpdf

if TYPE_CHECKING:
    from collections.abc import Callable

    from numpy.typing import ArrayLike, NDArray

    Floats = NDArray[np.float64]

_Q_STEP = 0.07  # of log q
_Q_SPREADS = (0.04, 0.1, 0.2, 0.35)  # SD of log q between the boutons of an axon
_Q_CVS = (0.1, 0.18, 0.26, 0.35, 0.45, 0.6)
_TYPICAL_Q = (4.0, 0.5)  # weak prior of the axon's centre: q in noise SDs, and SD of its logarithm
_NOISE_DOUBT = 0.02  # relative: nulls and evoked amplitudes are not measured at the same moments
_INTERVAL = 0.95
_N_SCALES = 3
_SILENT = 0.5  # prior probability that a bouton never releases


@dataclass(frozen=True, slots=True, kw_only=True)
class AxonRelease:
    """Posterior summary of every bouton of an axon.

    Attributes
    ----------
    p_release, p_release_lo, p_release_hi : (n_boutons, n_pulses) ndarray
        Probability of at least one vesicle: posterior median and central 95 % interval. The lower limit is 0 where a
        probability of 0 is within the 95 % likelihood interval.
    release_evidence : (n_boutons, n_pulses) ndarray
        Log-likelihood ratio of the best p_release against none.
    p_released : (n_boutons, n_trials, n_pulses) ndarray
        Posterior probability that this pulse released; NaN where the amplitude is.
    p_site, p_site_lo, p_site_hi : (n_boutons, n_pulses) ndarray
        Release probability of one site: at `n_sites`; the interval includes the doubt about n_sites.
    n_sites, n_sites_lo, n_sites_hi : (n_boutons,) ndarray of int
        Most probable number of sites, and the ends of `n_set`.
    n_set : tuple of tuple of int
        For each bouton the smallest set of n_sites that holds 95 % of the posterior.
    n_probability : (n_boutons, n_max) ndarray
        Posterior of n_sites = 1..n_max.
    q, q_lo, q_hi : (n_boutons,) ndarray
        Size of one vesicle (dF/F): posterior median and 95 % interval.
    q_own : (n_boutons,) ndarray
        Share of what is known about log q that the bouton's own amplitudes contributed, 0 to 1.
    q_cv : float
        Variation of one vesicle's size, common to the axon: posterior mean.
    q_cv_lo, q_cv_hi : float
        Its 95 % interval, to the step of the grid.
    axon_q, axon_q_lo, axon_q_hi : float
        Median vesicle of the axon (dF/F) and its 95 % interval.
    axon_q_spread : float
        SD of log q between boutons: posterior mean.
    silent_probability : (n_boutons,) ndarray
        Probability that the bouton never releases at all, from an even prior. It enters `p_release` and `p_released`;
        intervals and everything about quanta hold given that the bouton does release.
    noise_scale : (n_boutons,) ndarray
        Posterior mean of the true noise over the noise given.
    """

    p_release: Floats
    p_release_lo: Floats
    p_release_hi: Floats
    release_evidence: Floats
    p_released: Floats
    p_site: Floats
    p_site_lo: Floats
    p_site_hi: Floats
    n_sites: NDArray[np.int64]
    n_sites_lo: NDArray[np.int64]
    n_sites_hi: NDArray[np.int64]
    n_set: tuple[tuple[int, ...], ...]
    n_probability: Floats
    q: Floats
    q_lo: Floats
    q_hi: Floats
    q_own: Floats
    q_cv: float
    q_cv_lo: float
    q_cv_hi: float
    axon_q: float
    axon_q_lo: float
    axon_q_hi: float
    axon_q_spread: float
    silent_probability: Floats
    noise_scale: Floats


@dataclass(frozen=True, slots=True, kw_only=True)
class _Grid:
    """The points at which the likelihood is known. Axes everywhere: noise scale, q, q_cv, n_sites, p_release."""

    q: Floats
    q_cv: Floats
    p_release: Floats
    p_site: Floats  # (n, p_release)
    weights: NDArray[np.float32]  # (n * p_release, vesicles)
    n_max: int


def fit_axon_release(
    amplitude: ArrayLike,
    amplitude_sd: ArrayLike,
    *,
    n_null: ArrayLike,
    n_max: int,
    q_cv: float,
    q_cv_doubt: float,
    progress: Callable[[int, int], None] | None = None,
) -> AxonRelease:
    """Estimate release probability, sites and quanta of all boutons of one axon.

    Parameters
    ----------
    amplitude : (n_boutons, n_trials, n_pulses) array_like
        Fitted responses, dF/F. NaN marks what is not to be used.
    amplitude_sd : (n_boutons, n_trials, n_pulses) array_like
        SD of the noise of each amplitude, dF/F; calibrated on null amplitudes.
    n_null : (n_boutons,) array_like
        Number of null amplitudes behind the calibration: how well the noise is known.
    n_max : int
        Largest number of sites considered.
    q_cv : float
        Expected coefficient of variation of one vesicle's size.
    q_cv_doubt : float
        SD of the logarithm of that expectation; small holds it fixed.
    progress : callable, optional
        Called with (done, total).

    Returns
    -------
    AxonRelease
        A bouton without a finite amplitude has NaN everywhere and the axon's n_sites posterior.

    Raises
    ------
    InputError
        If shapes differ or a parameter is out of range.

    References
    ----------
    Boyd & Martin 1956 J Physiol 132:74; del Castillo & Katz 1954 J Physiol 124:560; Robbins 1956 Proc 3rd Berkeley
    Symp 1:157.
    """
    a = check_array("amplitude", amplitude, n_dims=3)
    sd = check_array("amplitude_sd", amplitude_sd, n_dims=3)
    nulls = check_array("n_null", n_null, n_dims=1)
    if a.shape != sd.shape or nulls.shape != a.shape[:1]:
        raise InputError(
            f"amplitude {a.shape}, amplitude_sd {sd.shape} and n_null {nulls.shape} must describe the same boutons."
        )
    check_positive("q_cv", q_cv)
    check_positive("q_cv_doubt", q_cv_doubt)
    if n_max < 1:
        raise InputError(f"n_max must be at least 1 (given {n_max}).")
    a = np.where((sd > 0) & np.isfinite(sd), a, np.nan)

    grid = _make_grid(a, sd, n_max=n_max)
    n_boutons, _, n_pulses = a.shape
    scales = [_noise_scales(count) for count in nulls]
    shape = (_N_SCALES, len(grid.q), len(grid.q_cv), n_max, len(grid.p_release))
    likelihood = np.zeros((n_boutons, n_pulses, *shape), dtype=np.float32)
    for b in range(n_boutons):
        for j in range(n_pulses):
            likelihood[b, j] = _log_likelihood(a[b, :, j], sd[b, :, j], scales[b][0], grid)
        if progress is not None:
            progress(b + 1, n_boutons)

    # Integrate over p_release pulse by pulse, then join the pulses: they share all else.
    per_pulse = _log_sum(likelihood, axis=-1) - np.log(shape[-1])  # (bouton, pulse, scale, q, q_cv, n)
    log_scale_prior = np.log([weights for _, weights in scales]).reshape(n_boutons, _N_SCALES, 1, 1, 1)
    joint = per_pulse.sum(axis=1) + log_scale_prior
    joint = joint + np.log(_prior_of_n(n_max))
    at_scales = [_silent_log_likelihood(x, y, values) for x, y, (values, _) in zip(a, sd, scales, strict=True)]
    silent = _log_sum(np.reshape(at_scales, (n_boutons, _N_SCALES)) + log_scale_prior[:, :, 0, 0, 0], axis=1)
    marginal = _log_sum(joint, axis=(1, 4))  # (bouton, q, q_cv)
    axon = _fit_axon(marginal, silent, grid, noise_sd=_median(sd), q_cv=q_cv, q_cv_doubt=q_cv_doubt)
    log_posterior = joint + axon.log_prior[:, None, :, :, None]
    # A silent bouton tells nothing of q. Given that it releases after all, its own likelihood would choose a q too
    # small to be seen; so it takes q as all the others have it.
    told = np.where(axon.silent < 0.5, 0.0, 1.0)[:, None, None]
    log_posterior -= (told * marginal)[:, None, :, :, None]
    posterior = np.exp(log_posterior - _log_sum(log_posterior, axis=(1, 2, 3, 4), keepdims=True))

    p_release, p_lo, p_hi, evidence = (np.full((n_boutons, n_pulses), np.nan) for _ in range(4))
    p_site, site_lo, site_hi = (np.full((n_boutons, n_pulses), np.nan) for _ in range(3))
    p_released = np.full(a.shape, np.nan)
    n_probability = posterior.sum(axis=(1, 2, 3))
    n_sites = n_probability.argmax(axis=1) + 1
    for b, j in np.argwhere(np.isfinite(a).any(axis=1)):
        given = np.exp(likelihood[b, j] - per_pulse[b, j][..., None]) / shape[-1]  # p_release given the rest
        full = posterior[b][..., None] * given
        of_p = full.sum(axis=(0, 1, 2, 3))
        p_release[b, j], p_lo[b, j], p_hi[b, j] = _quantiles_of_p(of_p, axon.silent[b])
        evidence[b, j] = _evidence(likelihood[b, j], posterior[b])
        if evidence[b, j] < 1.92:
            p_lo[b, j] = 0.0
        of_site = full.sum(axis=(0, 1, 2))  # (n, p_release)
        at_n = of_site[n_sites[b] - 1]
        p_site[b, j] = at_n @ grid.p_site[n_sites[b] - 1] / at_n.sum()
        site_lo[b, j], site_hi[b, j] = _weighted_interval(grid.p_site.ravel(), of_site.ravel())
        given_active = _posterior_release(a[b, :, j], sd[b, :, j], scales[b][0], full, grid)
        p_released[b, :, j] = (1.0 - axon.silent[b]) * given_active

    n_sets = tuple(_credible_set(row) for row in n_probability)
    q_posterior = posterior.sum(axis=(1, 3, 4))
    q_mid, q_lo, q_hi = np.array([_log_quantiles(grid.q, row) for row in q_posterior]).reshape(-1, 3).T
    measured = np.isfinite(a).any(axis=(1, 2))
    return AxonRelease(
        p_release=p_release,
        p_release_lo=p_lo,
        p_release_hi=p_hi,
        release_evidence=evidence,
        p_released=p_released,
        p_site=p_site,
        p_site_lo=site_lo,
        p_site_hi=site_hi,
        n_sites=n_sites,
        n_sites_lo=np.array([min(members) for members in n_sets], dtype=np.int64),
        n_sites_hi=np.array([max(members) for members in n_sets], dtype=np.int64),
        n_set=n_sets,
        n_probability=n_probability,
        q=np.where(measured, q_mid, np.nan),
        q_lo=np.where(measured, q_lo, np.nan),
        q_hi=np.where(measured, q_hi, np.nan),
        q_own=_own_share(q_posterior, axon, grid),
        q_cv=axon.q_cv,
        q_cv_lo=axon.q_cv_lo,
        q_cv_hi=axon.q_cv_hi,
        axon_q=axon.q,
        axon_q_lo=axon.q_lo,
        axon_q_hi=axon.q_hi,
        axon_q_spread=axon.q_spread,
        silent_probability=axon.silent,
        noise_scale=np.array(
            [row.sum(axis=(1, 2, 3)) @ values for row, (values, _) in zip(posterior, scales, strict=True)]
        ),
    )


def _make_grid(a: Floats, sd: Floats, *, n_max: int) -> _Grid:
    typical = _median(sd)
    largest = np.nanmax(a, initial=0.0)
    top = max(12.0 * typical, 1.1 * largest)
    q = np.exp(np.arange(np.log(0.7 * typical), np.log(top) + _Q_STEP, _Q_STEP))
    n_points = int(np.clip(5 * np.sqrt(a.shape[1]), 48, 160))
    angle = (np.arange(n_points) + 0.5) * (np.pi / 2 / n_points)  # equal steps of the angle are the Jeffreys prior
    p_release = np.sin(angle) ** 2
    sites = np.arange(1, n_max + 1)
    log_failure = np.log1p(-p_release)[None, :] / sites[:, None]
    p_site = -np.expm1(log_failure)
    m = np.arange(n_max + 1)
    n = sites[:, None, None]
    with np.errstate(divide="ignore", invalid="ignore"):
        log_choose = np.where(m <= n, gammaln(n + 1) - gammaln(m + 1) - gammaln(np.maximum(n - m, 0) + 1), -np.inf)
    log_weight = log_choose + m * np.log(p_site)[..., None] + np.maximum(n - m, 0) * log_failure[..., None]
    return _Grid(
        q=q,
        q_cv=np.array(_Q_CVS),
        p_release=p_release,
        p_site=p_site,
        weights=np.exp(log_weight).reshape(-1, n_max + 1).astype(np.float32),
        n_max=n_max,
    )


def _log_sum(values: NDArray[np.floating], *, axis: int | tuple[int, ...], keepdims: bool = False) -> Floats:
    """Logarithm of the sum of exponentials; an axon without boutons is fine."""
    largest = np.max(values, axis=axis, keepdims=True, initial=-1e30)
    total = np.log(np.sum(np.exp(values - largest), axis=axis, keepdims=True)) + largest
    return np.asarray(total if keepdims else np.squeeze(total, axis=axis))


def _median(sd: Floats) -> float:
    usable = sd[np.isfinite(sd) & (sd > 0)]
    return float(np.median(usable)) if usable.size else 1.0


def _noise_scales(n_null: float) -> tuple[Floats, Floats]:
    """Three Gauss-Hermite nodes for the true noise over the given one, and their weights."""
    doubt = np.sqrt(1.0 / (2.0 * max(n_null, 2.0)) + _NOISE_DOUBT**2)
    return np.exp(np.array([-np.sqrt(3.0), 0.0, np.sqrt(3.0)]) * min(doubt, 0.3)), np.array([1.0, 4.0, 1.0]) / 6.0


def _densities(a: Floats, sd: Floats, scale: float, grid: _Grid) -> tuple[NDArray[np.float32], Floats]:
    """Density of each amplitude given m vesicles, over its largest (q * q_cv, vesicles, trials); log of the largest."""
    log_density = gamma_vesicles_logpdf(
        a,
        vesicles=np.arange(grid.n_max + 1)[None, :, None],
        q=np.repeat(grid.q, len(grid.q_cv))[:, None, None],
        q_cv=np.tile(grid.q_cv, len(grid.q))[:, None, None],
        noise_sd=scale * sd,
    )
    largest = log_density.max(axis=1)
    return np.exp(log_density - largest[:, None, :]).astype(np.float32), largest


def _log_likelihood(a: Floats, sd: Floats, scales: Floats, grid: _Grid) -> NDArray[np.float32]:
    """Log-likelihood of one bouton's amplitudes at one pulse, on the grid, up to a constant."""
    used = np.isfinite(a)
    shape = (len(grid.q), len(grid.q_cv), grid.n_max, len(grid.p_release))
    result = np.zeros((len(scales), *shape), dtype=np.float32)
    if not used.any():
        return result
    reference = -0.5 * (a[used] ** 2 / sd[used] ** 2 + np.log(2.0 * np.pi * sd[used] ** 2))  # no release
    for k, scale in enumerate(scales):
        density, largest = _densities(a[used], sd[used], scale, grid)
        offset = (largest - reference).sum(axis=1)
        for i, block in enumerate(density):
            mixture = grid.weights @ block
            np.maximum(mixture, np.float32(1e-37), out=mixture)
            np.log(mixture, out=mixture)
            result[k].reshape(len(density), -1)[i] = mixture.sum(axis=1) + offset[i]
    return result


@dataclass(frozen=True, slots=True, kw_only=True)
class _Axon:
    log_prior: Floats  # (bouton, q, q_cv): prior of each bouton's q and q_cv given all the others
    silent: Floats  # (bouton,): probability that it never releases
    q: float
    q_lo: float
    q_hi: float
    q_spread: float
    q_cv: float
    q_cv_lo: float
    q_cv_hi: float
    prior_variance: float  # of log q of a bouton, before its own amplitudes


def _prior_of_n(n_max: int) -> Floats:
    """Prior of n_sites, falling as 1/n: no number of sites is a preferred scale."""
    weights = 1.0 / np.arange(1, n_max + 1)
    return np.asarray(weights / weights.sum())


def _silent_log_likelihood(a: Floats, sd: Floats, scales: Floats) -> Floats:
    """Log-likelihood of a bouton that never releases, over that at the noise given, for each noise scale."""
    z = (a / sd)[np.isfinite(a)]
    return np.asarray(-0.5 * np.sum(z**2) * (1.0 / scales**2 - 1.0) - z.size * np.log(scales))


def _fit_axon(
    marginal: Floats, silent: Floats, grid: _Grid, *, noise_sd: float, q_cv: float, q_cv_doubt: float
) -> _Axon:
    """Posterior of the axon's quantal size, its spread and q_cv; and what they say beforehand of each bouton."""
    log_q = np.log(grid.q)
    spreads = np.array(_Q_SPREADS)
    centre = np.repeat(log_q, len(spreads))
    spread = np.tile(spreads, len(log_q))
    prior = np.exp(-0.5 * ((log_q[None, :] - centre[:, None]) / spread[:, None]) ** 2)
    prior /= prior.sum(axis=1, keepdims=True)  # (hyper, q)

    # A bouton may be silent for good: then it says nothing of q, rather than that q must be too small to be seen.
    largest = np.maximum(marginal.max(axis=(1, 2)), silent)[:, None, None]
    evidence = (1.0 - _SILENT) * np.einsum("bqc,hq->bhc", np.exp(marginal - largest), prior)
    evidence += _SILENT * np.exp(silent[:, None, None] - largest)
    evidence = np.maximum(evidence, 1e-300)
    hyper = -0.5 * ((centre - np.log(_TYPICAL_Q[0] * noise_sd)) / _TYPICAL_Q[1]) ** 2
    variation = -0.5 * (np.log(grid.q_cv / q_cv) / q_cv_doubt) ** 2
    log_posterior = np.log(evidence).sum(axis=0) + hyper[:, None] + variation[None, :]
    posterior = np.exp(log_posterior - log_posterior.max())
    posterior /= posterior.sum()

    expected = np.einsum("hc,bhc,hq->bqc", posterior, 1.0 / evidence, prior)
    never = _SILENT * np.exp(silent - largest[:, 0, 0]) * np.einsum("hc,bhc->b", posterior, 1.0 / evidence)
    of_centre = posterior.sum(axis=1).reshape(len(log_q), len(spreads))
    middle, low, high = _log_quantiles(grid.q, of_centre.sum(axis=1))
    of_cv = posterior.sum(axis=0)
    cv_low, cv_high = _weighted_interval(grid.q_cv, of_cv)
    overall = posterior.sum(axis=1) @ prior
    mean = overall @ log_q
    return _Axon(
        log_prior=np.log(np.maximum(expected, 1e-300)),
        silent=np.clip(never, 0.0, 1.0),
        q=middle,
        q_lo=low,
        q_hi=high,
        q_spread=float(of_centre.sum(axis=0) @ spreads),
        q_cv=float(of_cv @ grid.q_cv),
        q_cv_lo=cv_low,
        q_cv_hi=cv_high,
        prior_variance=float(overall @ (log_q - mean) ** 2),
    )


def _own_share(q_posterior: Floats, axon: _Axon, grid: _Grid) -> Floats:
    log_q = np.log(grid.q)
    mean = q_posterior @ log_q
    variance = np.sum(q_posterior * (log_q - mean[:, None]) ** 2, axis=1)
    return np.asarray(np.clip(1.0 - variance / axon.prior_variance, 0.0, 1.0))


def _evidence(likelihood: NDArray[np.float32], posterior: Floats) -> float:
    """Log-likelihood ratio of the best p_release against the smallest, the rest integrated over its posterior."""
    largest = float(likelihood.max())
    at_each_p = np.einsum("sqcn,sqcnp->p", posterior, np.exp(likelihood - largest, dtype=np.float64))
    with np.errstate(divide="ignore"):
        logarithm = np.log(at_each_p)
    return float(logarithm.max() - logarithm[0])


def _posterior_release(a: Floats, sd: Floats, scales: Floats, full: Floats, grid: _Grid) -> Floats:
    """Probability that each amplitude holds at least one vesicle, averaged over the posterior."""
    result = np.full(a.shape, np.nan)
    used = np.isfinite(a)
    silent = np.zeros(int(used.sum()))
    flat = full.reshape(len(scales), -1, grid.weights.shape[0])
    threshold = 1e-4 * flat.sum(axis=2).max()
    kept = 0.0
    for k, scale in enumerate(scales):
        density, _ = _densities(a[used], sd[used], scale, grid)
        for i in np.flatnonzero(flat[k].sum(axis=1) > threshold):
            mixture = np.maximum(grid.weights @ density[i], np.float32(1e-37))
            none = grid.weights[:, :1] * density[i][:1]
            silent += flat[k, i] @ (none / mixture)
            kept += flat[k, i].sum()
    result[used] = 1.0 - silent / kept
    return np.asarray(np.clip(result, 0.0, 1.0))


def _quantiles_of_p(mass: Floats, silent: float) -> tuple[float, float, float]:
    """Median, with the chance of a silent bouton, and central 95 % without it; on equal steps of the arcsine angle."""
    edges = np.linspace(0.0, np.pi / 2, len(mass) + 1)
    cumulative = np.concatenate([[0.0], np.cumsum(mass)])
    cumulative /= cumulative[-1]
    tail = (1.0 - _INTERVAL) / 2
    low, high = np.interp([tail, 1.0 - tail], cumulative, edges)
    middle = np.interp(0.5, silent + (1.0 - silent) * cumulative, edges) if silent < 0.5 else 0.0
    middle, low, high = np.sin([middle, low, high]) ** 2
    return float(middle), float(low), float(high)


def _weighted_interval(values: Floats, mass: Floats) -> tuple[float, float]:
    order = np.argsort(values)
    cumulative = np.cumsum(mass[order])
    tail = (1.0 - _INTERVAL) / 2
    low, high = np.searchsorted(cumulative / cumulative[-1], [tail, 1.0 - tail])
    top = len(values) - 1
    return float(values[order][min(low, top)]), float(values[order][min(high, top)])


def _log_quantiles(values: Floats, mass: Floats) -> tuple[float, float, float]:
    """Median and central 95 % of a posterior on log-spaced values."""
    step = np.log(values[1] / values[0])
    edges = np.log(values[0]) - step / 2 + step * np.arange(len(values) + 1)
    cumulative = np.concatenate([[0.0], np.cumsum(mass)])
    tail = (1.0 - _INTERVAL) / 2
    middle, low, high = np.exp(np.interp([0.5, tail, 1.0 - tail], cumulative / cumulative[-1], edges))
    return float(middle), float(low), float(high)


def _credible_set(probability: Floats) -> tuple[int, ...]:
    order = np.argsort(probability)[::-1]
    count = int(np.searchsorted(np.cumsum(probability[order]), _INTERVAL)) + 1
    return tuple(sorted(int(n) + 1 for n in order[:count]))
