"""The data dictionary of a plan: trials needed, and what other numbers of trials reach."""

from __future__ import annotations

from .column_types import TableDefinition, choice, column, count, number, probability

GOALS = ("width", "sites", "ppr", "change", "paired_change")
"""Codes of the goals, in the order of the tables."""

_BOUTON = count("bouton", "bouton id in the analysis; empty without one, and for all boutons together", minimum=1)
_GOAL = choice(
    "goal",
    "width of the 95 % interval of p_release; sites: n_sites told from one more; ppr: paired-pulse ratio told from 1; "
    "change: of p_release, at this bouton; paired_change: of p_release, over all boutons",
    *GOALS,
)

PLAN = TableDefinition(
    name="plan",
    meaning="a row a bouton and goal",
    key=(),
    columns=(
        _BOUTON,
        _GOAL,
        number("wanted", "", "the width, number of sites, ratio or change that is wanted"),
        probability("power", "wanted chance of telling or seeing it"),
        count("trials_done", "trials that the analysis rests on"),
        probability("reached_now", "width or power that as many trials reach"),
        count("trials_needed", "fewest trials that reach the goal; for a change, in each condition", minimum=1),
        probability("reached", "width or power that trials_needed reach"),
        probability("simulated", "power in simulated recordings of trials_needed trials"),
        probability("simulated_lo", "lower end of the 95 % interval of simulated"),
        probability("simulated_hi", "upper end of the 95 % interval of simulated"),
        column("method", "string", "", "how trials_needed was found"),
        column("reason", "string", "", "why there is no trials_needed"),
        probability("p_release", "probability that a pulse releases, planned with"),
        count("n_sites", "release sites, planned with", minimum=1),
        probability("p_site", "release probability of one site, planned with"),
        number("q_over_noise", "", "response to one vesicle over the noise, planned with", minimum=0),
        number("q_cv", "", "coefficient of variation of one vesicle, planned with", minimum=0),
        count("boutons", "boutons over which a paired_change is seen", minimum=2),
    ),
)

PLAN_CURVES = TableDefinition(
    name="plan_curves",
    meaning="a row a bouton, goal and number of trials",
    key=(),
    columns=(
        _BOUTON,
        _GOAL,
        count("trials", "number of trials; for a change, in each condition", minimum=1, required=True),
        probability("reached", "width of the interval where the goal is width, else power"),
    ),
)
