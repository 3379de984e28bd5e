"""The part of the Results dock that plans: goals, and the trials that each bouton needs for them."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
from qtpy.QtWidgets import QGridLayout, QPushButton, QTableView, QVBoxLayout, QWidget

from ..analysis.plan import Goals, make_plan, plan_table
from ..analysis.plan_inputs import measured_boutons
from ..analysis.usual_goals import USUAL_GOALS, USUAL_SIMULATIONS
from ..errors import InputError
from .number_field import NumberField

if TYPE_CHECKING:
    from collections.abc import Callable

    import pandas as pd

    from ..analysis.progress import Progress
    from ..analysis.quantal_step import ReleaseFits
    from .panel import Panel

_FIELD_PX = 64
_FIELDS = {
    "width": ("width", "Full width of the 95 % interval of p_release that is wanted"),
    "ppr": ("PPR", "Paired-pulse ratio to be told from 1; p_site changes, vesicles do not"),
    "change": ("change", "Change of p_release to be seen between two conditions; negative for less"),
    "power": ("power", "Chance of telling and of seeing"),
}


class PlanPart(QWidget):
    """A row of goals over a table of the trials that they need.

    Parameters
    ----------
    panel : Panel
        The dock it belongs to.
    view : QTableView
        Shows the table; the dock fills it.
    say : callable
        Takes a sentence on what is wrong with a goal.
    on_planned : callable
        Called when the table is another one.

    Attributes
    ----------
    frame : DataFrame or None
        The table of the last plan; None before one is made for what is measured now.
    """

    def __init__(
        self, panel: Panel, view: QTableView, *, say: Callable[[str], None], on_planned: Callable[[], None]
    ) -> None:
        super().__init__()
        self.model, self.runner = panel.model, panel.runner
        self._say, self._on_planned = say, on_planned
        self._release: ReleaseFits | None = None
        self.frame: pd.DataFrame | None = None
        goals = QGridLayout()
        self.goals: dict[str, NumberField] = {}
        for column, (key, (name, meaning)) in enumerate(_FIELDS.items()):
            field = self.goals[key] = NumberField(name, "", meaning)
            field.setFixedWidth(_FIELD_PX)
            field.fill(USUAL_GOALS[key])
            field.returnPressed.connect(self.plan)
            goals.addWidget(field.label, 0, column)
            goals.addWidget(field, 1, column)
        self.button = QPushButton("Plan")
        self.button.setToolTip("Work out the trials that each bouton needs for these goals, and for one site more.")
        self.button.clicked.connect(self.plan)
        goals.addWidget(self.button, 1, len(_FIELDS))
        goals.setColumnStretch(len(_FIELDS), 1)
        column = QVBoxLayout(self)
        column.setContentsMargins(0, 4, 0, 0)
        column.addLayout(goals)
        column.addWidget(view, 1)

    def show_state(self) -> None:
        """Let a plan be made where there is something to plan for, and drop one that was made for other boutons."""
        measured = self.model.measured
        self.button.setEnabled(measured is not None and not self.runner.busy)
        if self.frame is not None and (measured is None or measured.release is not self._release):
            self.frame = self._release = None
            self._on_planned()

    def plan(self) -> None:
        """Make the plan in another thread, as the command line does."""
        measured = self.model.measured
        if measured is None or self.runner.busy:
            return
        try:
            goals = self._goals()
            boutons = measured_boutons(self.model.table("boutons"), q_over_noise=None, q_cv=None)
        except InputError as error:
            self._say(str(error))
            return
        rng = np.random.default_rng(measured.settings.seed)

        def work(progress: Progress) -> tuple[ReleaseFits, pd.DataFrame]:
            plan = make_plan(
                boutons, goals=goals, n_boutons=None, n_simulations=USUAL_SIMULATIONS, rng=rng, progress=progress
            )
            return measured.release, plan_table(plan)

        self.runner.run(work, self._take, words="Planning", kind="plan")

    def _goals(self) -> Goals:
        wanted = dict(USUAL_GOALS)
        for key, field in self.goals.items():
            number = field.number()
            if number is None:
                raise InputError(f"{field.name} is empty: give a number, for example {USUAL_GOALS[key]:g}.")
            wanted[key] = number
        return Goals(sites=None, **wanted)

    def _take(self, planned: tuple[ReleaseFits, pd.DataFrame]) -> None:
        self._release, self.frame = planned
        self._on_planned()
        self.show_state()
