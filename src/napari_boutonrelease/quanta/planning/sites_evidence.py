"""How many trials tell a number of sites from one more: the log-likelihood ratio and its exact distribution.

One site more explains the same amplitudes almost as well, if it may choose another p_site and, within what is known of
them, other vesicles. The best that it can do, the penalised Kullback-Leibler projection (White 1982), is found first;
the log-likelihood ratio of a recording is then a sum of independent terms of known distribution, whose tail follows
from its characteristic function (Gil-Pelaez 1951).
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from scipy.special import expit, logit

from .planned_bouton import Doubts, PlannedBouton, amplitude_grid, amplitude_probability, site_probability

if TYPE_CHECKING:
    from numpy.typing import NDArray

    Floats = NDArray[np.float64]

_LEAST = 1e-300
_FREQUENCIES = np.arange(0.01, 9.0, 0.02)  # in units of the inverse SD of the sum
_FAR = 30.0
_RANGE = 3.0  # of log q, log q_cv and log noise around what is known


@dataclass(frozen=True, slots=True, kw_only=True)
class SitesEvidence:
    """Log-likelihood ratio of the true number of sites against one more, for a number of trials.

    Attributes
    ----------
    expected : float
        Its mean, in nats: what is known beforehand of q, q_cv and the noise counts as well.
    sd : float
        Its SD between recordings.
    power : float
        Chance that it exceeds what was asked for.
    p_site, q_over_noise, q_cv : float
        How a bouton with one site more comes closest.
    """

    expected: float
    sd: float
    power: float
    p_site: float
    q_over_noise: float
    q_cv: float


def sites_evidence(bouton: PlannedBouton, *, n_trials: int, doubts: Doubts, nats: float) -> SitesEvidence:
    """Work out how well `n_trials` tell a bouton's number of sites from one more.

    Parameters
    ----------
    bouton : PlannedBouton
        The bouton, with its true number of sites.
    n_trials : int
        Trials; the noise is known from as many null amplitudes.
    doubts : Doubts
        How well q, q_cv and the noise are known beforehand.
    nats : float
        Log-likelihood ratio that counts as telling; log 19 is odds of 95 to 5.

    Returns
    -------
    SitesEvidence

    References
    ----------
    White 1982 Econometrica 50:1; Gil-Pelaez 1951 Biometrika 38:481.
    """
    from scipy.optimize import minimize

    amplitude = amplitude_grid(bouton)
    known = np.log([bouton.q_over_noise, bouton.q_cv, 1.0])
    n = bouton.n_sites
    true = amplitude_probability(
        amplitude, n_sites=n, p_site=bouton.p_site, q=bouton.q_over_noise, q_cv=bouton.q_cv, noise_sd=1.0
    )
    log_true = np.log(np.maximum(true, _LEAST))
    precision = np.array([doubts.q, doubts.q_cv, np.hypot(doubts.noise, np.sqrt(0.5 / n_trials))]) ** -2.0

    def log_other(x: Floats) -> Floats:
        q, q_cv, noise_sd = np.exp(x[1:] + known)
        p = float(expit(x[0]))
        probability = amplitude_probability(amplitude, n_sites=n + 1, p_site=p, q=q, q_cv=q_cv, noise_sd=noise_sd)
        return np.asarray(np.log(np.maximum(probability, _LEAST)))

    def penalty(x: Floats) -> float:
        return float(0.5 * precision @ x[1:] ** 2)

    def evidence(x: Floats) -> float:
        return float(true @ (log_true - log_other(x)) + penalty(x) / n_trials)

    start = np.array([logit(site_probability(bouton.p_release, n_sites=n + 1)), 0.0, 0.0, 0.0])
    bounds = [(-20.0, 20.0), *[(-_RANGE, _RANGE)] * 3]
    closest = minimize(evidence, start, method="L-BFGS-B", bounds=bounds, options={"ftol": 1e-12, "gtol": 1e-6}).x
    terms = log_true - log_other(closest)
    mean = float(true @ terms)
    sd = float(np.sqrt(true @ (terms - mean) ** 2))
    surprise = penalty(closest)
    q, q_cv, _ = np.exp(closest[1:] + known)
    return SitesEvidence(
        expected=n_trials * mean + surprise,
        sd=float(np.sqrt(n_trials)) * sd,
        power=_chance_above(nats - surprise, true, terms, n_terms=n_trials),
        p_site=float(expit(closest[0])),
        q_over_noise=float(q),
        q_cv=float(q_cv),
    )


def _chance_above(limit: float, probability: Floats, terms: Floats, *, n_terms: int) -> float:
    """Chance that the sum of `n_terms` independent terms exceeds `limit`; probability need not add up to 1 exactly."""
    weights = probability / probability.sum()
    mean = float(weights @ terms)
    sd = float(np.sqrt(n_terms * (weights @ (terms - mean) ** 2)))
    if sd == 0.0:
        return float(n_terms * mean > limit)
    of_one = np.exp(1j * np.outer(_FREQUENCIES / sd, terms - mean)) @ weights
    z = (limit - n_terms * mean) / sd
    if abs(z) > _FAR:
        return float(z < 0)
    of_sum = np.exp(n_terms * np.log(of_one)) * np.exp(-1j * _FREQUENCIES * z)
    step = _FREQUENCIES[1] - _FREQUENCIES[0]
    return float(np.clip(0.5 + np.sum(of_sum.imag / _FREQUENCIES) * step / np.pi, 0.0, 1.0))
