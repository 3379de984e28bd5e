"""A plan: how many trials each bouton needs for every goal, beside the trials that were done."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import numpy as np

from ..quanta import (
    Doubts,
    PlannedBouton,
    TrialsNeeded,
    change_power,
    expected_width,
    paired_change_power,
    ppr_power,
    sites_evidence,
    trials_for_change,
    trials_for_paired_change,
    trials_for_ppr,
    trials_for_sites,
    trials_for_width,
)
from .plan_columns import PLAN, PLAN_CURVES
from .quantal_step import CONFIDENCE

if TYPE_CHECKING:
    import pandas as pd

    from .plan_inputs import MeasuredBouton
    from .progress import Progress

MAX_TRIALS = 100_000
_TELLING_NATS = float(np.log(CONFIDENCE / (1.0 - CONFIDENCE)))  # one site more leaves the 95 % set of n_sites
_CURVE_TRIALS = tuple(int(n) for n in np.unique(np.round(np.geomspace(5, 10_000, 34))))
# Measured: with these, the width of pooled fits is met to within 9 %. Vesicles of an axon's boutons differ by some
# 20 %, and their median is known only so well from ten boutons; q_cv_doubt is the default of the settings.
_DOUBTS = Doubts(q=0.3, q_cv=0.15, noise=0.02, inverse_sites=0.35)


@dataclass(frozen=True, slots=True, kw_only=True)
class Goals:
    """What is wanted.

    Attributes
    ----------
    width : float
        Full width of the 95 % interval of p_release.
    sites : int or None
        Number of sites to be told from one more; None takes each bouton's own.
    ppr : float
        Paired-pulse ratio to be told from 1.
    change, change_sd : float
        Change of p_release to be seen, and how much the true change varies between boutons.
    power : float
        Chance of telling and of seeing.
    """

    width: float
    sites: int | None
    ppr: float
    change: float
    change_sd: float
    power: float


@dataclass(frozen=True, slots=True, kw_only=True)
class Plan:
    """Goals, boutons, and the answers.

    Attributes
    ----------
    goals : Goals
        What was wanted.
    boutons : tuple of MeasuredBouton
        The boutons planned for.
    answers : tuple of tuple of TrialsNeeded
        For each bouton its answers, in the order width, sites, ppr, change; empty where nothing can be planned.
    paired : TrialsNeeded or None
        Change over all boutons; None with fewer than two.
    n_paired : int
        Boutons that this rests on.
    """

    goals: Goals
    boutons: tuple[MeasuredBouton, ...]
    answers: tuple[tuple[TrialsNeeded, ...], ...]
    paired: TrialsNeeded | None
    n_paired: int


def make_plan(
    boutons: Sequence[MeasuredBouton],
    *,
    goals: Goals,
    n_boutons: int | None,
    n_simulations: int,
    rng: np.random.Generator,
    progress: Progress | None,
) -> Plan:
    """Work out the trials that every goal needs.

    Parameters
    ----------
    boutons : sequence of MeasuredBouton
        Boutons to plan for.
    goals : Goals
        What is wanted.
    n_boutons : int or None
        Boutons over which a change is to be seen, taken from those given in turn; None takes each of them once, as
        far as its p_release leaves room for the change.
    n_simulations : int
        Simulated recordings that check the answer on pulse pairs; 0 leaves them out.
    rng : numpy.random.Generator
        Source of the simulations.
    progress : callable or None
        Called with (done, total).

    Raises
    ------
    InputError
        If a goal is out of range.
    """
    answers = []
    for done, measured in enumerate(boutons):
        if progress is not None:
            progress(done, len(boutons))
        planned = measured.planned
        answers.append(() if planned is None else _answers(planned, goals, n_simulations=n_simulations, rng=rng))
    pool = paired_boutons(boutons, change=goals.change)
    if n_boutons is not None and pool:
        pool = [pool[index % len(pool)] for index in range(n_boutons)]
    paired = None
    if len(pool) > 1:
        paired = trials_for_paired_change(
            pool,
            change=goals.change,
            change_sd=goals.change_sd,
            power=goals.power,
            doubts=_DOUBTS,
            confidence=CONFIDENCE,
            max_trials=MAX_TRIALS,
        )
    if progress is not None:
        progress(len(boutons), len(boutons))
    return Plan(goals=goals, boutons=tuple(boutons), answers=tuple(answers), paired=paired, n_paired=len(pool))


def paired_boutons(boutons: Sequence[MeasuredBouton], *, change: float) -> list[PlannedBouton]:
    """List the boutons whose p_release leaves room for the change."""
    planned = [measured.planned for measured in boutons if measured.planned is not None]
    return [bouton for bouton in planned if 0.0 < bouton.p_release + change < 1.0]


def reached(bouton: PlannedBouton, goal: str, goals: Goals, *, n_trials: int) -> float:
    """Width or power that `n_trials` of one bouton reach; NaN where the goal cannot be."""
    if n_trials < 1:
        return np.nan
    if goal == "width":
        return expected_width(bouton, n_trials=n_trials, doubts=_DOUBTS, confidence=CONFIDENCE)
    if goal == "sites":
        counted = _with_sites(bouton, goals.sites)
        return sites_evidence(counted, n_trials=n_trials, doubts=_DOUBTS, nats=_TELLING_NATS).power
    if goal == "ppr":
        if goals.ppr * bouton.p_site >= 1.0:
            return np.nan
        return ppr_power(bouton, ratio=goals.ppr, n_trials=n_trials, confidence=CONFIDENCE)
    if not 0.0 < bouton.p_release + goals.change < 1.0:
        return np.nan
    return change_power(bouton, change=goals.change, n_trials=n_trials, doubts=_DOUBTS, confidence=CONFIDENCE)


def plan_table(plan: Plan) -> pd.DataFrame:
    """Put a plan into the table `plan`, a row a bouton and goal."""
    import pandas as pd

    rows = [
        {
            "bouton": measured.bouton,
            **_shared(answer, plan.goals),
            "trials_done": measured.trials,
            "reached_now": reached(measured.planned, answer.goal, plan.goals, n_trials=measured.trials or 0),
            **_signal(measured.planned),
        }
        for measured, answers in zip(plan.boutons, plan.answers, strict=True)
        for answer in answers
        if measured.planned is not None
    ]
    rows += [
        {"bouton": measured.bouton, "trials_done": measured.trials, "reason": measured.reason}
        for measured in plan.boutons
        if measured.planned is None
    ]
    if plan.paired is not None:
        rows.append({**_shared(plan.paired, plan.goals), "boutons": plan.n_paired})
    return pd.DataFrame(rows, columns=list(PLAN.names), dtype=object)


def plan_curves(plan: Plan, *, progress: Progress | None) -> pd.DataFrame:
    """Work out what each number of trials reaches, a row a bouton, goal and number of trials."""
    import pandas as pd

    rows: list[dict[str, object]] = []
    for done, measured in enumerate(plan.boutons):
        if progress is not None:
            progress(done, len(plan.boutons))
        if measured.planned is not None:
            rows += _curve_rows(measured.bouton, measured.planned, plan.goals)
    pool = _paired_pool(plan)
    if len(pool) > 1:
        rows += [
            {"goal": "paired_change", "trials": n, "reached": _paired_reached(pool, plan.goals, n)}
            for n in _CURVE_TRIALS
        ]
    return pd.DataFrame(rows, columns=list(PLAN_CURVES.names), dtype=object)


def _curve_rows(bouton: int | None, planned: PlannedBouton, goals: Goals) -> Iterator[dict[str, object]]:
    for goal in ("width", "sites", "ppr", "change"):
        for n in _CURVE_TRIALS:
            value = reached(planned, goal, goals, n_trials=n)
            if np.isfinite(value):
                yield {"bouton": bouton, "goal": goal, "trials": n, "reached": value}


def _paired_pool(plan: Plan) -> list[PlannedBouton]:
    pool = paired_boutons(plan.boutons, change=plan.goals.change)
    return [pool[index % len(pool)] for index in range(plan.n_paired)] if pool else []


def _paired_reached(pool: list[PlannedBouton], goals: Goals, n_trials: int) -> float:
    return paired_change_power(
        pool,
        change=goals.change,
        change_sd=goals.change_sd,
        n_trials=n_trials,
        doubts=_DOUBTS,
        confidence=CONFIDENCE,
    )


def _answers(
    bouton: PlannedBouton, goals: Goals, *, n_simulations: int, rng: np.random.Generator
) -> tuple[TrialsNeeded, ...]:
    return (
        trials_for_width(bouton, width=goals.width, confidence=CONFIDENCE, doubts=_DOUBTS, max_trials=MAX_TRIALS),
        trials_for_sites(
            _with_sites(bouton, goals.sites),
            power=goals.power,
            nats=_TELLING_NATS,
            doubts=_DOUBTS,
            max_trials=MAX_TRIALS,
        ),
        trials_for_ppr(
            bouton,
            ratio=goals.ppr,
            power=goals.power,
            confidence=CONFIDENCE,
            max_trials=MAX_TRIALS,
            n_simulations=n_simulations,
            rng=rng,
        ),
        trials_for_change(
            bouton,
            change=goals.change,
            power=goals.power,
            confidence=CONFIDENCE,
            doubts=_DOUBTS,
            max_trials=MAX_TRIALS,
        ),
    )


def _with_sites(bouton: PlannedBouton, n_sites: int | None) -> PlannedBouton:
    """Return the bouton with another number of sites and the same p_release."""
    if n_sites is None:
        return bouton
    return replace(bouton, n_sites=n_sites).releasing(bouton.p_release)


def _shared(answer: TrialsNeeded, goals: Goals) -> dict[str, object]:
    return {
        "goal": answer.goal,
        "wanted": answer.wanted,
        "power": None if answer.goal == "width" else goals.power,
        "trials_needed": answer.trials,
        "reached": answer.reached,
        "simulated": answer.simulated.value,
        "simulated_lo": answer.simulated.lo,
        "simulated_hi": answer.simulated.hi,
        "method": answer.method,
        "reason": answer.reason or None,
    }


def _signal(bouton: PlannedBouton) -> dict[str, object]:
    return {
        "p_release": bouton.p_release,
        "n_sites": bouton.n_sites,
        "p_site": bouton.p_site,
        "q_over_noise": bouton.q_over_noise,
        "q_cv": bouton.q_cv,
    }
