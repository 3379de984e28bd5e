"""What trials of a bouton tell of its release probability: Fisher information under noise and doubt about the rest.

The angle arcsin(sqrt(p_release)) is what is estimated: with perfect calls its variance is 1 / (4 trials) whatever
p_release. Vesicles that hide in the noise, and not knowing q, q_cv, the noise or the number of sites, make it larger;
amplitudes that show how many vesicles were released make it smaller. The trials that perfect calls would need for the
same variance, the effective trials, turn it back into an interval of p_release.
"""

from __future__ import annotations

from functools import lru_cache
from typing import TYPE_CHECKING

import numpy as np

from ..statistics.intervals import wilson_interval
from .planned_bouton import Doubts, PlannedBouton, amplitude_grid, amplitude_probability, site_probability

if TYPE_CHECKING:
    from numpy.typing import NDArray

    Floats = NDArray[np.float64]

_DIFFERENCE = 1e-4
_LEAST_ANGLE = 0.01  # from p_release 0 and 1, where the angle turns back
_KNOWN = 1e-6  # doubt that stands for none


@lru_cache(maxsize=512)
def release_information(bouton: PlannedBouton) -> Floats:
    """Fisher information of one trial on all that an amplitude depends on.

    Parameters
    ----------
    bouton : PlannedBouton
        The bouton.

    Returns
    -------
    (5, 5) ndarray
        In the order angle of p_release, log q, log q_cv, log noise, 1/n_sites. The last is a difference quotient: what
        a site more, at the same p_release, would change.
    """
    amplitude = amplitude_grid(bouton)
    angle = np.clip(np.arcsin(np.sqrt(bouton.p_release)), _LEAST_ANGLE, 0.5 * np.pi - _LEAST_ANGLE)
    at = np.array([angle, np.log(bouton.q_over_noise), np.log(bouton.q_cv), 0.0])

    def probability(parameters: Floats, *, more_sites: int = 0) -> Floats:
        n = bouton.n_sites + more_sites
        q, q_cv, noise_sd = np.exp(parameters[1:])
        p_site = site_probability(float(np.sin(parameters[0]) ** 2), n_sites=n)
        return amplitude_probability(amplitude, n_sites=n, p_site=p_site, q=q, q_cv=q_cv, noise_sd=noise_sd)

    here = probability(at)
    steps = _DIFFERENCE * np.eye(len(at))
    slopes = [(probability(at + step) - probability(at - step)) / (2.0 * _DIFFERENCE) for step in steps]
    slopes.append((here - probability(at, more_sites=1)) * bouton.n_sites * (bouton.n_sites + 1))
    score = np.array(slopes)
    return np.asarray(score / np.maximum(here, 1e-300) @ score.T)


def effective_trials(bouton: PlannedBouton, *, n_trials: int, doubts: Doubts) -> float:
    """Trials with perfect calls that would tell as much of p_release as `n_trials` of this bouton.

    Parameters
    ----------
    bouton : PlannedBouton
        The bouton.
    n_trials : int
        Trials; the noise is known from as many null amplitudes.
    doubts : Doubts
        How well the rest is known beforehand.

    Returns
    -------
    float
        More than `n_trials` where several vesicles at a time are told apart from one.

    Examples
    --------
    >>> one_site = PlannedBouton(n_sites=1, p_site=0.5, q_over_noise=20.0, q_cv=0.1)
    >>> known = Doubts(q=0.1, q_cv=0.1, noise=0.02, inverse_sites=0.0)
    >>> round(effective_trials(one_site, n_trials=50, doubts=known), 1)
    50.0
    """
    covariance = np.linalg.inv(n_trials * release_information(bouton) + _prior(doubts, n_trials))
    return float(1.0 / (4.0 * covariance[0, 0]))


def expected_width(bouton: PlannedBouton, *, n_trials: int, doubts: Doubts, confidence: float) -> float:
    """Width of the interval of p_release to expect: that of Wilson (1927) at the effective trials.

    Parameters are those of `effective_trials`, and the interval's coverage.

    Examples
    --------
    >>> one_site = PlannedBouton(n_sites=1, p_site=0.5, q_over_noise=20.0, q_cv=0.1)
    >>> known = Doubts(q=0.1, q_cv=0.1, noise=0.02, inverse_sites=0.0)
    >>> round(expected_width(one_site, n_trials=22, doubts=known, confidence=0.95), 2)
    0.39
    """
    n = effective_trials(bouton, n_trials=n_trials, doubts=doubts)
    lo, hi = wilson_interval(bouton.p_release * n, n, confidence=confidence)
    return float(hi - lo)


def _prior(doubts: Doubts, n_trials: int) -> Floats:
    noise = 1.0 / (2.0 * n_trials) + doubts.noise**2
    sites = max(doubts.inverse_sites, _KNOWN) ** 2
    return np.diag([0.0, doubts.q**-2, doubts.q_cv**-2, 1.0 / noise, 1.0 / sites])
