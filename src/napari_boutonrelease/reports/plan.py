"""A plan as a folder: tables with their data dictionary, and the curves as a figure."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import asdict
from pathlib import Path
from typing import TYPE_CHECKING, Any

from ..analysis.plan import Plan, plan_curves, plan_table
from ..analysis.plan_columns import PLAN, PLAN_CURVES
from .datapackage import describe_package
from .folder import PACKAGE, replaced_whole
from .strict_json import write_json
from .tables import write_table

if TYPE_CHECKING:
    from matplotlib.figure import Figure

PLAN_MARK = "plan.json"
"""The file by which a folder is known to hold a plan."""


def write_plan(
    plan: Plan,
    folder: Path,
    *,
    asked: Mapping[str, Any],
    overwrite: bool,
    progress: Callable[[int, int], None] | None = None,
) -> Path:
    """Write a plan into a folder, whole or not at all.

    Parameters
    ----------
    plan : Plan
        The plan.
    folder : Path
        Folder to be made, or replaced if it holds a plan.
    asked : mapping
        What else was asked for and is worth keeping: the analysis, the seed.
    overwrite : bool
        Whether a plan that is there may be replaced.
    progress : callable, optional
        Called with (done, total).

    Returns
    -------
    Path
        The folder, with `plan.csv`, `plan_curves.csv`, `plan.json`, `figures/plan.svg` and `.png`, and
        `datapackage.json`.

    Raises
    ------
    OutputError
        If the folder holds a plan and `overwrite` is false, holds anything else, or cannot be written.
    """
    from importlib.metadata import version

    from .figures import write_figure

    table, curves = plan_table(plan), plan_curves(plan, progress=progress)
    with replaced_whole(folder, overwrite=overwrite, mark=PLAN_MARK) as work:
        write_table(table, work / "plan.csv", table=PLAN)
        write_table(curves, work / "plan_curves.csv", table=PLAN_CURVES)
        write_json(
            {
                "format": "boutonrelease plan",
                "version": version("napari-boutonrelease"),
                "goals": asdict(plan.goals),
                **asked,
            },
            work / PLAN_MARK,
        )
        (work / "figures").mkdir()
        write_figure(_figure(plan, table, curves), work / "figures" / "plan.svg")
        package = describe_package(
            work, name=folder.resolve().name, tables={"plan": PLAN, "plan_curves": PLAN_CURVES}, title="Trials needed"
        )
        write_json(package, work / PACKAGE)
    return folder


def _figure(plan: Plan, table: Any, curves: Any) -> Figure:
    from .figures_plan import figure_plan

    return figure_plan(plan, table, curves)
