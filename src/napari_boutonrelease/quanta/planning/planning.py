"""Trials needed to measure release as well as wanted: width of an interval, number of sites, pulse pairs, changes.

Each question has a function that says how well a number of trials does, and one that looks for the fewest trials that
do well enough. What is worked out, and from what:

- interval of p_release: Fisher information of noisy amplitudes (`release_information`);
- n sites or one more: exact distribution of the log-likelihood ratio (`sites_evidence`);
- paired-pulse ratio: paired t-test of both amplitudes, of which excluding the ratio 1 is a monotone transform, and
  beside it simulated recordings;
- change of p_release: at one bouton from the information of both conditions, over boutons by a paired t-test.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import numpy as np

from ...checks import check_positive
from ...errors import InputError
from ..statistics.intervals import Estimate
from .planned_bouton import Doubts, PlannedBouton
from .planned_power import (
    NOT_SIMULATED,
    change_power,
    paired_change_power,
    paired_power,
    ppr_power,
    simulated_ppr_power,
)
from .release_information import expected_width
from .sites_evidence import sites_evidence

if TYPE_CHECKING:
    from collections.abc import Callable, Sequence


_BRIGHT = 20.0  # vesicles over noise at which every call is right


@dataclass(frozen=True, slots=True, kw_only=True)
class TrialsNeeded:
    """Answer to one question.

    Attributes
    ----------
    goal : str
        `width`, `sites`, `ppr`, `change` or `paired_change`.
    wanted : float
        Width, number of sites, ratio or change that was asked for.
    trials : int or None
        Fewest trials that do; for a change, in each condition. None where no number up to the limit does.
    reached : float
        Width or power at that number of trials; NaN where there is none.
    simulated : Estimate
        Power in simulated recordings of so many trials, with its own 95 % interval; NaN where none were.
    method : str
        How the number was found.
    reason : str
        Why there is no number; empty where there is one.
    """

    goal: str
    wanted: float
    trials: int | None
    reached: float
    simulated: Estimate
    method: str
    reason: str


def trials_for_width(
    bouton: PlannedBouton, *, width: float, doubts: Doubts, confidence: float, max_trials: int
) -> TrialsNeeded:
    """Find the trials after which the interval of p_release is as narrow as wanted.

    Parameters
    ----------
    bouton : PlannedBouton
        The bouton.
    width : float
        Full width of the interval, between 0 and 1.
    doubts : Doubts
        How well the rest is known beforehand.
    confidence : float
        Coverage of the interval.
    max_trials : int
        Where to stop looking.

    Returns
    -------
    TrialsNeeded
        The width is what recordings show on average.

    Raises
    ------
    InputError
        If `width` is out of range.

    Examples
    --------
    >>> bouton = PlannedBouton(n_sites=1, p_site=0.5, q_over_noise=20.0, q_cv=0.3)
    >>> known = Doubts(q=0.3, q_cv=0.15, noise=0.02, inverse_sites=0.0)
    >>> trials_for_width(bouton, width=0.4, doubts=known, confidence=0.95, max_trials=1000).trials
    21
    """
    _check_between("width", width, 0.0, 1.0)

    def found(one: PlannedBouton, n_trials: int) -> float:
        return -expected_width(one, n_trials=n_trials, doubts=doubts, confidence=confidence)

    answer = _search("width", width, bouton, found, target=-width, max_trials=max_trials)
    return replace(answer, reached=-answer.reached, method="Fisher information, Wilson interval")


def trials_for_sites(
    bouton: PlannedBouton, *, power: float, doubts: Doubts, nats: float, max_trials: int
) -> TrialsNeeded:
    """Find the trials that tell the bouton's number of sites from one more.

    Parameters are those of `trials_for_width` and `sites_evidence`; `power` is the wanted chance of telling.

    Raises
    ------
    InputError
        If `power` is out of range.
    """
    _check_between("power", power, 0.0, 1.0)

    def found(one: PlannedBouton, n_trials: int) -> float:
        return sites_evidence(one, n_trials=n_trials, doubts=doubts, nats=nats).power

    answer = _search("sites", bouton.n_sites, bouton, found, target=power, max_trials=max_trials)
    return replace(answer, method="likelihood ratio, exact distribution")


def trials_for_ppr(
    bouton: PlannedBouton,
    *,
    ratio: float,
    power: float,
    confidence: float,
    max_trials: int,
    n_simulations: int,
    rng: np.random.Generator,
) -> TrialsNeeded:
    """Find the trials that show that a paired-pulse ratio is not 1.

    Parameters
    ----------
    bouton : PlannedBouton
        The bouton at the first pulse.
    ratio : float
        True ratio, greater than 0 and not 1; p_site of the second pulse is so many times that of the first.
    power : float
        Wanted chance that the interval of the ratio excludes 1.
    confidence : float
        Coverage of that interval.
    max_trials : int
        Where to stop looking.
    n_simulations : int
        Simulated recordings that check the answer; 0 leaves them out.
    rng : numpy.random.Generator
        Source of the simulations.

    Returns
    -------
    TrialsNeeded

    Raises
    ------
    InputError
        If `ratio` or `power` is out of range.
    """
    _check_between("power", power, 0.0, 1.0)
    check_positive("ratio", ratio)
    if ratio == 1.0:
        raise InputError("ratio must differ from 1: no number of trials tells 1 from 1.")
    if ratio * bouton.p_site >= 1.0:
        return _impossible(
            "ppr", ratio, f"p_site {bouton.p_site:.2g} leaves room for a ratio below {1.0 / bouton.p_site:.2g} only"
        )

    def found(one: PlannedBouton, n_trials: int) -> float:
        return ppr_power(one, ratio=ratio, n_trials=n_trials, confidence=confidence)

    answer = _search("ppr", ratio, bouton, found, target=power, max_trials=max_trials)
    if answer.trials is not None and n_simulations:
        simulated = simulated_ppr_power(
            bouton, ratio=ratio, n_trials=answer.trials, confidence=confidence, n_simulations=n_simulations, rng=rng
        )
        answer = replace(answer, simulated=simulated)
    return replace(answer, method="paired t-test")


def trials_for_change(
    bouton: PlannedBouton, *, change: float, power: float, doubts: Doubts, confidence: float, max_trials: int
) -> TrialsNeeded:
    """Find the trials, in each of two conditions, that show a change of this bouton's p_release.

    Parameters
    ----------
    bouton : PlannedBouton
        The bouton before.
    change : float
        Change of p_release, not 0; negative for less.
    power : float
        Wanted chance that the change is significant at 1 - `confidence`, two-sided.
    doubts : Doubts
        How well the rest is known beforehand, in each condition.
    confidence : float
        Coverage of the interval of the change that is to exclude 0.
    max_trials : int
        Where to stop looking.

    Raises
    ------
    InputError
        If `change` is 0 or `power` is out of range.
    """
    _check_change(change, power)
    after = bouton.p_release + change
    if not 0.0 < after < 1.0:
        return _impossible("change", change, _no_room(bouton, change))

    def found(one: PlannedBouton, n_trials: int) -> float:
        return change_power(one, change=change, n_trials=n_trials, doubts=doubts, confidence=confidence)

    answer = _search("change", change, bouton, found, target=power, max_trials=max_trials)
    return replace(answer, method="Fisher information of both conditions")


def trials_for_paired_change(
    boutons: Sequence[PlannedBouton],
    *,
    change: float,
    change_sd: float,
    power: float,
    doubts: Doubts,
    confidence: float,
    max_trials: int,
) -> TrialsNeeded:
    """Find the trials, in each of two conditions, that show a change of p_release over several boutons.

    Parameters are those of `trials_for_change` and `paired_change_power`.

    Returns
    -------
    TrialsNeeded
        None where more trials do not help, because the boutons are too few for changes that differ so much.

    Raises
    ------
    InputError
        If `change` is 0, `power` is out of range, or there are fewer than two boutons.
    """
    _check_change(change, power)
    n_boutons = len(boutons)
    if n_boutons < 2:
        raise InputError(f"A change over boutons needs at least two of them (given {n_boutons}).")
    without_room = [bouton for bouton in boutons if not 0.0 < bouton.p_release + change < 1.0]
    if without_room:
        return _impossible("paired_change", change, _no_room(without_room[0], change))
    if change_sd > 0.0 and paired_power(change, change_sd**2, n=n_boutons, confidence=confidence) < power:
        enough = _fewest(
            lambda n: paired_power(change, change_sd**2, n=n, confidence=confidence), target=power, most=max_trials
        )
        least = f"at least {enough:,}" if enough else f"more than {max_trials:,}"
        reason = f"{n_boutons} boutons are too few, however many trials, if changes differ by {change_sd:g}: {least}"
        return _impossible("paired_change", change, reason)

    def found(n_trials: int) -> float:
        return paired_change_power(
            boutons, change=change, change_sd=change_sd, n_trials=n_trials, doubts=doubts, confidence=confidence
        )

    trials = _fewest(found, target=power, most=max_trials)
    return TrialsNeeded(
        goal="paired_change",
        wanted=change,
        trials=trials,
        reached=found(trials) if trials else np.nan,
        simulated=NOT_SIMULATED,
        method="paired t-test over boutons",
        reason="" if trials else f"more than {max_trials:,} trials",
    )


def _search(
    goal: str,
    wanted: float,
    bouton: PlannedBouton,
    found: Callable[[PlannedBouton, int], float],
    *,
    target: float,
    max_trials: int,
) -> TrialsNeeded:
    trials = _fewest(lambda n: found(bouton, n), target=target, most=max_trials)
    reason = ""
    if trials is None:
        reason = f"more than {max_trials:,} trials"
        bright = replace(bouton, q_over_noise=max(_BRIGHT, bouton.q_over_noise))
        if found(bright, max_trials) < target:
            reason += ", at any q/noise"
        else:
            reason += f": q/noise {bouton.q_over_noise:.2g} is too small, more light or a brighter reporter would help"
    return TrialsNeeded(
        goal=goal,
        wanted=wanted,
        trials=trials,
        reached=found(bouton, trials) if trials else np.nan,
        simulated=NOT_SIMULATED,
        method="",
        reason=reason,
    )


def _fewest(found: Callable[[int], float], *, target: float, most: int) -> int | None:
    """Smallest number of trials from which on `found`, which rises with it, is at least `target`."""
    below, n = 0, 1
    while found(n) < target:
        if n >= most:
            return None
        below, n = n, min(2 * n, most)
    while n - below > 1:
        middle = (below + n) // 2
        below, n = (below, middle) if found(middle) >= target else (middle, n)
    return n


def _impossible(goal: str, wanted: float, reason: str) -> TrialsNeeded:
    return TrialsNeeded(
        goal=goal,
        wanted=wanted,
        trials=None,
        reached=np.nan,
        simulated=NOT_SIMULATED,
        method="none",
        reason=reason,
    )


def _no_room(bouton: PlannedBouton, change: float) -> str:
    direction = "rise" if change > 0 else "fall"
    return f"p_release {bouton.p_release:.2g} cannot {direction} by {abs(change):g}"


def _check_change(change: float, power: float) -> None:
    _check_between("power", power, 0.0, 1.0)
    if change == 0.0 or not -1.0 < change < 1.0:
        raise InputError(f"change must lie between -1 and 1 and differ from 0 (given {change:g}).")


def _check_between(name: str, value: float, low: float, high: float) -> None:
    if not low < value < high:
        raise InputError(f"{name} must lie between {low:g} and {high:g}, both excluded (given {value:g}).")
