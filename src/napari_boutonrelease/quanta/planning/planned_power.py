"""How well a number of trials shows what is asked: the power of tests of pulse pairs and of changes of p_release."""

from __future__ import annotations

from dataclasses import replace
from typing import TYPE_CHECKING

import numpy as np
from scipy.special import nctdtr, ndtr, ndtri, stdtrit

from ..pulses.pulse_pairs import DETECTED_SE
from ..statistics.intervals import Estimate, wilson_interval
from .planned_bouton import Doubts, PlannedBouton
from .release_information import effective_trials

if TYPE_CHECKING:
    from collections.abc import Sequence

_LARGE_DF = 5000  # from here on Student's t is normal, as far as planning goes
_DRAWS_AT_ONCE = 2_000_000
_FAR = 8.0  # SDs beyond which nothing happens
_MOST_DRAWS = 100_000_000
NOT_SIMULATED = Estimate(value=np.nan, lo=np.nan, hi=np.nan, method="not simulated")
"""Stands where no recordings were simulated."""


def ppr_power(bouton: PlannedBouton, *, ratio: float, n_trials: int, confidence: float) -> float:
    """Chance that the interval of a paired-pulse ratio is there and excludes 1, on the true side.

    The interval of the ratio of means excludes 1 where that of their difference excludes 0, a paired t-test. There is
    none where the first mean is within noise of zero, as `measure_pulse_pair` has it. Both pulses of a trial are taken
    as independent, given their release probabilities.

    Parameters
    ----------
    bouton : PlannedBouton
        The bouton at the first pulse.
    ratio : float
        True ratio; p_site of the second pulse is so many times that of the first.
    n_trials : int
        Trials.
    confidence : float
        Coverage of the interval.

    Examples
    --------
    >>> bouton = PlannedBouton(n_sites=2, p_site=0.3, q_over_noise=4.0, q_cv=0.3)
    >>> round(ppr_power(bouton, ratio=1.5, n_trials=100, confidence=0.95), 2)
    0.78
    """
    if n_trials < 2:
        return 0.0
    second = replace(bouton, p_site=ratio * bouton.p_site)
    step, variance = second.mean - bouton.mean, bouton.variance + second.variance
    told = paired_power(step, variance, n=n_trials, confidence=confidence)
    # what is told although the first mean is not seen: normal means, over the first one up to its limit
    sd = np.sqrt(bouton.variance / n_trials)
    limit = (DETECTED_SE / np.sqrt(n_trials) - bouton.mean) / sd
    if limit < -_FAR:
        return told
    first = limit - (np.arange(400) + 0.5) * (_FAR / 400)
    expected = step - first * sd
    needed = _critical_t(n_trials - 1, confidence) * np.sqrt(variance / n_trials)
    passing = ndtr((np.sign(step) * expected - needed) / np.sqrt(second.variance / n_trials))
    unseen = float(np.sum(passing * np.exp(-0.5 * first**2)) * (_FAR / 400) / np.sqrt(2.0 * np.pi))
    return max(told - unseen, 0.0)


def simulated_ppr_power(
    bouton: PlannedBouton,
    *,
    ratio: float,
    n_trials: int,
    confidence: float,
    n_simulations: int,
    rng: np.random.Generator,
) -> Estimate:
    """Count how often a paired t-test tells both amplitudes apart, in recordings drawn vesicle by vesicle.

    Parameters are those of `ppr_power`, the number of recordings, and their source.

    Returns
    -------
    Estimate
        Share of the recordings, with its 95 % Wilson interval; none where a recording is too long to be drawn often.
    """
    second = replace(bouton, p_site=ratio * bouton.p_site)
    at_once = min(n_simulations, _DRAWS_AT_ONCE // n_trials)
    if n_trials < 2 or at_once < 1 or n_simulations * n_trials > _MOST_DRAWS:
        return NOT_SIMULATED
    critical = _critical_t(n_trials - 1, confidence)
    told = 0
    for first in range(0, n_simulations, at_once):
        shape = (min(at_once, n_simulations - first), n_trials)
        one = bouton.draw(shape, rng=rng)
        difference = second.draw(shape, rng=rng) - one
        seen = one.mean(axis=1) >= DETECTED_SE / np.sqrt(n_trials)
        t = np.sqrt(n_trials) * difference.mean(axis=1) / difference.std(axis=1, ddof=1)
        told += int(np.sum(seen & (np.sign(ratio - 1.0) * t > critical)))
    lo, hi = wilson_interval(told, n_simulations, confidence=0.95)
    return Estimate(
        value=told / n_simulations,
        se=float(np.sqrt(told * (n_simulations - told) / n_simulations**3)),
        lo=float(lo),
        hi=float(hi),
        method=f"{n_simulations} simulated recordings",
    )


def change_power(bouton: PlannedBouton, *, change: float, n_trials: int, doubts: Doubts, confidence: float) -> float:
    """Chance that a change of one bouton's p_release is significant, whatever its vesicles do.

    Normal on the scale arcsin(sqrt(p)), on which the variance of perfect calls does not depend on p (Cohen 1988,
    chapter 6). Both recordings are measured on their own: vesicles, too, may have changed.

    Parameters
    ----------
    bouton : PlannedBouton
        The bouton before.
    change : float
        Change of p_release.
    n_trials : int
        Trials in each condition.
    doubts : Doubts
        How well the rest is known beforehand, in each condition.
    confidence : float
        Coverage of the interval of the change that is to exclude 0.
    """
    both = (bouton, bouton.releasing(bouton.p_release + change))
    before, after = (np.arcsin(np.sqrt(one.p_release)) for one in both)
    variance = sum(0.25 / effective_trials(one, n_trials=n_trials, doubts=doubts) for one in both)
    step, z = float(abs(after - before) / np.sqrt(variance)), float(ndtri(0.5 * (1.0 + confidence)))
    return float(ndtr(step - z) + ndtr(-step - z))


def paired_change_power(
    boutons: Sequence[PlannedBouton],
    *,
    change: float,
    change_sd: float,
    n_trials: int,
    doubts: Doubts,
    confidence: float,
) -> float:
    """Chance that a paired t-test over boutons shows a mean change of p_release.

    Parameters
    ----------
    boutons : sequence of PlannedBouton
        The boutons before.
    change, change_sd : float
        Mean and SD over boutons of the true change.
    n_trials : int
        Trials of each bouton in each condition.
    doubts : Doubts
        How well the rest is known beforehand, for each bouton.
    confidence : float
        Coverage of the interval of the mean change that is to exclude 0.
    """
    variances = {bouton: _change_variance(bouton, change, n_trials, doubts) for bouton in set(boutons)}
    sampling = sum(variances[bouton] for bouton in boutons) / len(boutons)
    return paired_power(change, change_sd**2 + sampling, n=len(boutons), confidence=confidence)


def _change_variance(bouton: PlannedBouton, change: float, n_trials: int, doubts: Doubts) -> float:
    """Variance of the change of p_release that one bouton shows."""
    return sum(
        one.p_release * (1.0 - one.p_release) / effective_trials(one, n_trials=n_trials, doubts=doubts)
        for one in (bouton, bouton.releasing(bouton.p_release + change))
    )


def paired_power(mean: float, variance: float, *, n: int, confidence: float) -> float:
    """Chance that a t-test of `n` differences shows their mean, in its true direction."""
    if n < 2:
        return 0.0
    shift = float(abs(mean) * np.sqrt(n / variance))
    critical = _critical_t(n - 1, confidence)
    if n > _LARGE_DF or shift > 30.0:
        return float(ndtr(shift - critical))
    return float(1.0 - nctdtr(n - 1, shift, critical))


def _critical_t(degrees: int, confidence: float) -> float:
    return float(stdtrit(degrees, 0.5 * (1.0 + confidence)))
