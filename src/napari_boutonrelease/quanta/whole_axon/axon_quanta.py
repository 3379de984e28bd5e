"""What all boutons of an axon say together about the size of a vesicle and how much it varies."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from ..one_bouton.release_grid import ReleaseGrid

    Floats = NDArray[np.float64]

_Q_SPREADS = (0.04, 0.1, 0.2, 0.35)  # SD of log q between the boutons of an axon
_TYPICAL_Q = (4.0, 0.5)  # weak prior of the axon's centre: q in noise SDs, and SD of its logarithm
_SILENT_SHARES = (np.arange(10) + 0.5) / 10  # of the boutons that never release: all equally likely beforehand
_TAIL = 0.025


@dataclass(frozen=True, slots=True, kw_only=True)
class AxonQuanta:
    """Posterior of the axon's quantal size, and what follows for each bouton.

    Attributes
    ----------
    log_prior : (n_boutons, n_q, n_cv) ndarray
        Prior of each bouton's q and q_cv given all the other boutons, not normalised.
    silent : (n_boutons,) ndarray
        Probability that the bouton never releases.
    q, q_lo, q_hi : float
        Median vesicle of the axon and its 95 % interval.
    q_spread : float
        SD of log q between boutons, posterior mean.
    q_cv, q_cv_lo, q_cv_hi : float
        Variation of a vesicle's size, posterior mean and 95 % interval to the step of the grid.
    prior_variance : float
        Of log q of a bouton before its own amplitudes are looked at.
    """

    log_prior: Floats
    silent: Floats
    q: float
    q_lo: float
    q_hi: float
    q_spread: float
    q_cv: float
    q_cv_lo: float
    q_cv_hi: float
    prior_variance: float


def fit_axon_quanta(
    marginal: Floats,
    silent: Floats,
    grid: ReleaseGrid,
    *,
    tells: NDArray[np.bool_],
    noise_sd: float,
    q_cv: float,
    q_cv_doubt: float,
) -> AxonQuanta:
    """Estimate the axon's quantal size, its spread between boutons and q_cv.

    Parameters
    ----------
    marginal : (n_boutons, n_q, n_cv) ndarray
        Log-likelihood of each bouton's amplitudes given q and q_cv, if it releases.
    silent : (n_boutons,) ndarray
        The same if it never does.
    grid : ReleaseGrid
        The points.
    tells : (n_boutons,) ndarray of bool
        Boutons whose responses say how large a vesicle is; the others learn from these.
    noise_sd : float
        Typical noise of an amplitude.
    q_cv, q_cv_doubt : float
        Expected variation, and SD of its logarithm.

    Returns
    -------
    AxonQuanta
    """
    log_q = np.log(grid.q)
    spreads = np.array(_Q_SPREADS)
    centre = np.repeat(log_q, len(spreads))
    spread = np.tile(spreads, len(log_q))
    prior = np.exp(-0.5 * ((log_q[None, :] - centre[:, None]) / spread[:, None]) ** 2)
    prior /= prior.sum(axis=1, keepdims=True)  # (hyper, q)

    # A bouton may be silent for good: then it says nothing of q, rather than that q must be too small to be seen.
    largest = np.maximum(marginal.max(axis=(1, 2)), silent)[:, None, None]
    # How many are silent is learned with the rest: in an axon of silent boutons, one more is no surprise.
    share = _SILENT_SHARES[:, None, None, None]
    releasing = np.einsum("bqc,hq->bhc", np.exp(marginal - largest), prior)
    never = np.exp(silent[:, None, None] - largest)
    evidence = np.maximum((1.0 - share) * releasing + share * never, 1e-300)  # (share, bouton, hyper, q_cv)
    hyper = -0.5 * ((centre - np.log(_TYPICAL_Q[0] * noise_sd)) / _TYPICAL_Q[1]) ** 2
    variation = -0.5 * (np.log(grid.q_cv / q_cv) / q_cv_doubt) ** 2
    log_joint = np.log(evidence[:, tells]).sum(axis=1) + hyper[:, None] + variation[None, :]
    joint = np.exp(log_joint - log_joint.max())
    joint /= joint.sum()  # (share, hyper, q_cv)

    over_evidence = joint[:, None] / evidence
    without_own = np.where(tells[:, None, None], over_evidence, joint[:, None])
    expected = np.einsum("bhc,hq->bqc", ((1.0 - share) * without_own).sum(axis=0), prior)
    is_silent = never[:, 0, 0] * (share * over_evidence).sum(axis=(0, 2, 3))
    posterior = joint.sum(axis=0)
    of_centre = posterior.sum(axis=1).reshape(len(log_q), len(spreads))
    middle, low, high = log_quantiles(grid.q, of_centre.sum(axis=1))
    of_cv = posterior.sum(axis=0)
    cv_low, cv_high = weighted_interval(grid.q_cv, of_cv)
    overall = posterior.sum(axis=1) @ prior
    mean = overall @ log_q
    return AxonQuanta(
        log_prior=np.log(np.maximum(expected, 1e-300)),
        silent=np.clip(is_silent, 0.0, 1.0),
        q=middle,
        q_lo=low,
        q_hi=high,
        q_spread=float(of_centre.sum(axis=0) @ spreads),
        q_cv=float(of_cv @ grid.q_cv),
        q_cv_lo=cv_low,
        q_cv_hi=cv_high,
        prior_variance=float(overall @ (log_q - mean) ** 2),
    )


def own_share(q_posterior: Floats, axon: AxonQuanta, grid: ReleaseGrid) -> Floats:
    """Share of the knowledge of each bouton's log q that its own amplitudes brought, 0 to 1."""
    log_q = np.log(grid.q)
    mean = q_posterior @ log_q
    variance = np.sum(q_posterior * (log_q - mean[:, None]) ** 2, axis=1)
    return np.asarray(np.clip(1.0 - variance / axon.prior_variance, 0.0, 1.0))


def weighted_interval(values: Floats, mass: Floats) -> tuple[float, float]:
    """Return the central 95 % of weighted values."""
    order = np.argsort(values)
    cumulative = np.cumsum(mass[order])
    low, high = np.searchsorted(cumulative / cumulative[-1], [_TAIL, 1.0 - _TAIL])
    top = len(values) - 1
    return float(values[order][min(low, top)]), float(values[order][min(high, top)])


def log_quantiles(values: Floats, mass: Floats) -> tuple[float, float, float]:
    """Return median and central 95 % of a distribution on log-spaced values."""
    step = np.log(values[1] / values[0])
    edges = np.log(values[0]) - step / 2 + step * np.arange(len(values) + 1)
    cumulative = np.concatenate([[0.0], np.cumsum(mass)])
    middle, low, high = np.exp(np.interp([0.5, _TAIL, 1.0 - _TAIL], cumulative / cumulative[-1], edges))
    return float(middle), float(low), float(high)
