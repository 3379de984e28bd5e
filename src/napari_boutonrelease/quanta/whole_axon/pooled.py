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

from ...checks import check_array, check_positive
from ...errors import InputError
from ..one_bouton.release_grid import (
    N_SCALES,
    ReleaseGrid,
    integrated_likelihood,
    log_sum,
    make_grid,
    mixtures,
    noise_scales,
    silent_likelihood,
)
from .axon_quanta import fit_axon_quanta, log_quantiles, own_share, weighted_interval

if TYPE_CHECKING:
    from collections.abc import Callable

    from numpy.typing import ArrayLike, NDArray

    Floats = NDArray[np.float64]

_INTERVAL = 0.95
_IN_LIKELIHOOD_INTERVAL = 1.92  # half the 95 % point of chi-squared with one degree of freedom
_NEGLIGIBLE = 1e-4  # of the most probable point


@dataclass(frozen=True, slots=True, kw_only=True)
class AxonRelease:
    """Posterior summary of every bouton of an axon.

    Attributes
    ----------
    p_release, p_release_lo, p_release_hi : (n_boutons, n_pulses) ndarray
        Probability of at least one vesicle: posterior mean and central 95 % interval. The lower limit is 0 where a
        probability of 0 is within the 95 % likelihood interval.
    release_evidence : (n_boutons, n_pulses) ndarray
        Log-likelihood ratio of the best p_release against none.
    p_release_grid : (n_p,) ndarray
        Where `p_release_mass` lies.
    p_release_mass : (n_boutons, n_pulses, n_p) ndarray
        Posterior of p_release given that the bouton does release, under the Jeffreys prior, which is flat on this grid;
        NaN without an amplitude.
    p_released : (n_boutons, n_trials, n_pulses) ndarray
        Posterior probability that this pulse released; NaN where the amplitude is.
    p_site, p_site_lo, p_site_hi : (n_boutons, n_pulses) ndarray
        Release probability of one site: at `n_sites`; the interval includes the doubt about n_sites.
    vesicles, vesicles_lo, vesicles_hi : (n_boutons, n_pulses) ndarray
        Mean number of vesicles a pulse releases, n_sites times p_site: posterior mean and 95 % interval.
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
        Probability that the bouton never releases at all; how many do not is learned from the axon. It enters
        `p_release` and `p_released`; intervals and everything about quanta hold given that the bouton does release.
    noise_scale : (n_boutons,) ndarray
        Posterior mean of the true noise over the noise given.
    """

    p_release: Floats
    p_release_lo: Floats
    p_release_hi: Floats
    release_evidence: Floats
    p_release_grid: Floats
    p_release_mass: Floats
    p_released: Floats
    p_site: Floats
    p_site_lo: Floats
    p_site_hi: Floats
    vesicles: Floats
    vesicles_lo: Floats
    vesicles_hi: Floats
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


def fit_axon_release(
    amplitude: ArrayLike,
    amplitude_sd: ArrayLike,
    *,
    n_null: ArrayLike,
    n_max: int,
    q_cv: float,
    q_cv_doubt: float,
    tells: ArrayLike | None = None,
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
    tells : (n_boutons,) array_like of bool, optional
        Boutons whose responses say how large a vesicle is, where some do not (they are clipped by the detector). The
        others take the vesicle of these as their prior and give nothing back. All, where left out or none does.
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

    informing = np.ones(len(a), dtype=np.bool_) if tells is None else np.asarray(tells, dtype=np.bool_)
    if informing.shape != (len(a),):
        raise InputError(f"tells must have one entry a bouton, {len(a)} (given shape {informing.shape}).")
    if not np.isfinite(a[informing]).any():
        informing = np.ones_like(informing)
    noise_sd = _median(sd[informing])
    grid = make_grid(noise_sd=noise_sd, largest=float(np.nanmax(a, initial=0.0)), n_trials=a.shape[1], n_max=n_max)
    n_boutons, _, n_pulses = a.shape
    scales = [noise_scales(count) for count in nulls]
    # Integrate over p_release pulse by pulse, then join the pulses: they share all else.
    joint = np.zeros((n_boutons, N_SCALES, len(grid.q), len(grid.q_cv), n_max))
    silent = np.zeros((n_boutons, N_SCALES))
    for b in range(n_boutons):
        values, weights = scales[b]
        for j in range(n_pulses):
            joint[b] += integrated_likelihood(a[b, :, j], sd[b, :, j], values, grid)
        joint[b] += np.log(weights)[:, None, None, None] + np.log(_prior_of_n(n_max))
        silent[b] = silent_likelihood(a[b], sd[b], values) + np.log(weights)
        if progress is not None:
            progress(b + 1, n_boutons)
    marginal = log_sum(joint, axis=(1, 4))  # (bouton, q, q_cv)
    axon = fit_axon_quanta(
        marginal,
        log_sum(silent, axis=1),
        grid,
        tells=informing,
        noise_sd=noise_sd,
        q_cv=q_cv,
        q_cv_doubt=q_cv_doubt,
    )
    log_posterior = joint + axon.log_prior[:, None, :, :, None]
    # A silent bouton tells nothing of q. Given that it releases after all, its own likelihood would choose a q too
    # small to be seen; so it takes q as all the others have it.
    told = np.where(axon.silent < 0.5, 0.0, 1.0)[:, None, None]
    log_posterior -= (told * marginal)[:, None, :, :, None]
    posterior = np.exp(log_posterior - log_sum(log_posterior, axis=(1, 2, 3, 4), keepdims=True))

    p_release, p_lo, p_hi, evidence = (np.full((n_boutons, n_pulses), np.nan) for _ in range(4))
    p_site, site_lo, site_hi = (np.full((n_boutons, n_pulses), np.nan) for _ in range(3))
    vesicles, vesicles_lo, vesicles_hi = (np.full((n_boutons, n_pulses), np.nan) for _ in range(3))
    m = np.arange(1, n_max + 1)[:, None] * grid.p_site
    p_released = np.full(a.shape, np.nan)
    mass = np.full((n_boutons, n_pulses, grid.p_release.size), np.nan)
    n_probability = posterior.sum(axis=(1, 2, 3))
    n_sites = n_probability.argmax(axis=1) + 1
    for b, j in np.argwhere(np.isfinite(a).any(axis=1)):
        known = np.isfinite(a[b, :, j])
        pulse = _look_at_pulse(a[b, known, j], sd[b, known, j], scales[b][0], posterior[b], grid)
        of_p = mass[b, j] = pulse.probability.sum(axis=0)
        p_release[b, j], p_lo[b, j], p_hi[b, j] = _summary_of_p(of_p, grid.p_release, axon.silent[b])
        evidence[b, j] = pulse.evidence
        if pulse.evidence < _IN_LIKELIHOOD_INTERVAL:
            p_lo[b, j] = 0.0
        p_lo[b, j] = min(p_lo[b, j], p_release[b, j])  # the chance of silence lowers the mean, not the interval
        at_n = pulse.probability[n_sites[b] - 1]
        p_site[b, j] = at_n @ grid.p_site[n_sites[b] - 1] / at_n.sum()
        site_lo[b, j], site_hi[b, j] = weighted_interval(grid.p_site.ravel(), pulse.probability.ravel())
        vesicles[b, j] = np.sum(pulse.probability * m)
        vesicles_lo[b, j], vesicles_hi[b, j] = weighted_interval(m.ravel(), pulse.probability.ravel())
        p_released[b, known, j] = (1.0 - axon.silent[b]) * pulse.released

    n_sets = tuple(_credible_set(row) for row in n_probability)
    q_posterior = posterior.sum(axis=(1, 3, 4))
    q_mid, q_lo, q_hi = np.array([log_quantiles(grid.q, row) for row in q_posterior]).reshape(-1, 3).T
    measured = np.isfinite(a).any(axis=(1, 2))
    return AxonRelease(
        p_release=p_release,
        p_release_lo=p_lo,
        p_release_hi=p_hi,
        release_evidence=evidence,
        p_release_grid=grid.p_release,
        p_release_mass=mass,
        p_released=p_released,
        p_site=p_site,
        p_site_lo=site_lo,
        p_site_hi=site_hi,
        vesicles=vesicles,
        vesicles_lo=vesicles_lo,
        vesicles_hi=vesicles_hi,
        n_sites=n_sites,
        n_sites_lo=np.array([min(members) for members in n_sets], dtype=np.int64),
        n_sites_hi=np.array([max(members) for members in n_sets], dtype=np.int64),
        n_set=n_sets,
        n_probability=n_probability,
        q=np.where(measured, q_mid, np.nan),
        q_lo=np.where(measured, q_lo, np.nan),
        q_hi=np.where(measured, q_hi, np.nan),
        q_own=own_share(q_posterior, axon, grid),
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


@dataclass(frozen=True, slots=True, kw_only=True)
class _Pulse:
    """Posterior of one bouton's pulse."""

    probability: Floats  # (n_max, n_p) of n_sites and p_release
    released: Floats  # (n_trials,) of at least one vesicle
    evidence: float  # log-likelihood ratio of the best p_release against the smallest, the rest integrated


def _look_at_pulse(a: Floats, sd: Floats, scales: Floats, posterior: Floats, grid: ReleaseGrid) -> _Pulse:
    """Spread the posterior of noise, q, q_cv and n_sites over p_release, where it is not negligible."""
    n_max, n_p = grid.p_site.shape
    of_pairs = posterior.reshape(len(scales), -1, n_max)
    probability = np.zeros((n_max, n_p))
    failed = np.zeros(a.size)
    at_each_p = np.full(n_p, -np.inf)
    least = _NEGLIGIBLE * of_pairs.sum(axis=2).max()
    for k, scale in enumerate(scales):
        for pair, mixture, failure, log_unit in mixtures(
            a, scale * sd, grid, at=np.flatnonzero(of_pairs[k].sum(axis=1) > least)
        ):
            likelihood = np.log(mixture).sum(axis=1, dtype=np.float64).reshape(n_max, n_p)
            given = np.exp(likelihood - log_sum(likelihood, axis=1, keepdims=True))
            here = of_pairs[k, pair][:, None] * given
            probability += here
            failed += here.ravel() @ (grid.weights[:, :1] * failure / mixture)
            with np.errstate(divide="ignore"):
                weighted = np.log(of_pairs[k, pair])[:, None] + likelihood + log_unit.sum()
            at_each_p = np.logaddexp(at_each_p, np.logaddexp.reduce(weighted, axis=0))
    total = probability.sum()
    return _Pulse(
        probability=probability / total,
        released=np.clip(1.0 - failed / total, 0.0, 1.0),
        evidence=float(at_each_p.max() - at_each_p[0]),
    )


def _median(sd: Floats) -> float:
    usable = sd[np.isfinite(sd) & (sd > 0)]
    return float(np.median(usable)) if usable.size else 1.0


def _prior_of_n(n_max: int) -> Floats:
    """Prior of n_sites, falling as 1/n: no number of sites is a preferred scale."""
    weights = 1.0 / np.arange(1, n_max + 1)
    return np.asarray(weights / weights.sum())


def _summary_of_p(mass: Floats, p_release: Floats, silent: float) -> tuple[float, float, float]:
    """Mean, with the chance of a silent bouton, and central 95 % without it; on equal steps of the arcsine angle."""
    edges = np.linspace(0.0, np.pi / 2, len(mass) + 1)
    cumulative = np.concatenate([[0.0], np.cumsum(mass)])
    tail = (1.0 - _INTERVAL) / 2
    low, high = np.sin(np.interp([tail, 1.0 - tail], cumulative / cumulative[-1], edges)) ** 2
    return float((1.0 - silent) * (mass @ p_release) / cumulative[-1]), float(low), float(high)


def _credible_set(probability: Floats) -> tuple[int, ...]:
    order = np.argsort(probability)[::-1]
    count = int(np.searchsorted(np.cumsum(probability[order]), _INTERVAL)) + 1
    return tuple(sorted(int(n) + 1 for n in order[:count]))
