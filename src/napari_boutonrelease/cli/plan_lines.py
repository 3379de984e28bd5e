"""A plan in the lines that a terminal shows."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING

from ..analysis.plan import MAX_TRIALS

if TYPE_CHECKING:
    from collections.abc import Iterator, Sequence

    from ..analysis.plan import Goals, Plan
    from ..analysis.plan_inputs import MeasuredBouton
    from ..quanta import TrialsNeeded

_WORDS = {"width": "width", "sites": "number of sites", "ppr": "PPR", "change": "change"}
_TOO_MANY = f">{MAX_TRIALS:,}"


def plan_lines(plan: Plan) -> list[str]:
    """Return the lines: the answers for one bouton, or a row a bouton of an analysis."""
    one = plan.boutons[0]
    return _described(plan, one) if one.bouton is None else _measured(plan)


def _described(plan: Plan, one: MeasuredBouton) -> list[str]:
    bouton = one.planned
    assert bouton is not None
    answers = list(plan.answers[0]) + ([plan.paired] if plan.paired else [])
    rows = [("goal", "trials", "reached", "simulated")]
    rows += [(_goal(answer, plan), _trials(answer), _reached(answer), _simulated(answer)) for answer in answers]
    sites = "1 site" if bouton.n_sites == 1 else f"{bouton.n_sites} sites"
    return [
        f"a bouton of p_release {bouton.p_release:.2f} ({sites} of p_site {bouton.p_site:.2f}), q/noise "
        f"{bouton.q_over_noise:g}, q_cv {bouton.q_cv:g}; power {plan.goals.power:g}",
        *_aligned(rows),
        *(f"{_goal(answer, plan)}: {answer.reason}" for answer in answers if answer.reason),
    ]


def _measured(plan: Plan) -> list[str]:
    goals = plan.goals
    header = ("bouton", "p_release", "sites", "q/noise", "done", *_headings(goals))
    rows = [header, *(_row(plan, index) for index in range(len(plan.boutons)))]
    lines = [f"trials needed at power {goals.power:g}", *_aligned(rows)]
    if any("*" in cell for row in rows for cell in row):
        lines.append("* reached by the trials done")
    if plan.paired is not None:
        needed = f"{_trials(plan.paired)} trials" if plan.paired.trials else plan.paired.reason
        lines.append(f"{_goal(plan.paired, plan)}: {needed}")
    return [*lines, *_notes(plan)]


def _headings(goals: Goals) -> tuple[str, ...]:
    sites = f"{goals.sites} or {goals.sites + 1} sites" if goals.sites else "n or n+1 sites"
    return (f"width {goals.width:g}", sites, f"PPR {goals.ppr:g}", f"change {goals.change:+g}")


def _row(plan: Plan, index: int) -> tuple[str, ...]:
    measured, bouton = plan.boutons[index], plan.boutons[index].planned
    done = "-" if measured.trials is None else f"{measured.trials:,}"
    if bouton is None:
        return (f"{measured.bouton}", "-", "-", "-", done, "-", "-", "-", "-")
    cells = (
        _trials(answer) + ("*" if answer.trials is not None and answer.trials <= (measured.trials or 0) else "")
        for answer in plan.answers[index]
    )
    return (
        f"{measured.bouton}",
        f"{bouton.p_release:.2f}",
        f"{bouton.n_sites}",
        f"{bouton.q_over_noise:.1f}",
        done,
        *cells,
    )


def _notes(plan: Plan) -> Iterator[str]:
    """Yield why a cell holds no number, once for all boutons with the same reason."""
    boutons: dict[str, list[str]] = {}
    for measured, answers in zip(plan.boutons, plan.answers, strict=True):
        reasons = [measured.reason] if measured.planned is None else []
        reasons += [f"{_WORDS[answer.goal]}: {answer.reason}" for answer in answers if answer.reason]
        for reason in reasons:
            boutons.setdefault(reason, []).append(str(measured.bouton))
    for reason, ids in boutons.items():
        yield f"bouton{'s' if len(ids) > 1 else ''} {', '.join(ids)}: {reason}"


def _goal(answer: TrialsNeeded, plan: Plan) -> str:
    wanted = answer.wanted
    if answer.goal == "width":
        return f"interval of p_release {wanted:g} wide"
    if answer.goal == "sites":
        return f"{wanted:g} site{'' if wanted == 1 else 's'} told from {wanted + 1:g}"
    if answer.goal == "ppr":
        return f"paired-pulse ratio {wanted:g} told from 1"
    where = "at one bouton" if answer.goal == "change" else f"over {plan.n_paired} boutons"
    return f"p_release changed by {wanted:+g}, {where}, before and after each"


def _trials(answer: TrialsNeeded) -> str:
    if answer.trials is not None:
        return f"{answer.trials:,}"
    return _TOO_MANY if answer.reason.startswith("more than") else "-"


def _reached(answer: TrialsNeeded) -> str:
    return "-" if math.isnan(answer.reached) else f"{answer.reached:.2f}"


def _simulated(answer: TrialsNeeded) -> str:
    of = answer.simulated
    return "" if math.isnan(of.value) else f"{of.value:.2f} ({of.lo:.2f} to {of.hi:.2f})"


def _aligned(rows: Sequence[tuple[str, ...]]) -> list[str]:
    """Put cells into columns: words at the left of theirs, numbers at the right."""
    widths = [max(map(len, column)) for column in zip(*rows, strict=True)]
    first = widths[0]
    return [
        "  ".join(
            [row[0].ljust(first), *(cell.rjust(width) for cell, width in zip(row[1:], widths[1:], strict=True))]
        ).rstrip()
        for row in rows
    ]
