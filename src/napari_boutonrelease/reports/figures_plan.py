"""A plan as curves: what each number of trials reaches, and where that is enough."""

from __future__ import annotations

import math

import numpy as np
import pandas as pd
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.lines import Line2D
from matplotlib.ticker import FuncFormatter, LogLocator, NullFormatter

from ..analysis.plan import Goals, Plan
from .figures_page import Area, blank_figure
from .figures_style import EVOKED, FIT, HAIRLINE, INK, MUTED, PULSE_2, SMALL, say_nothing_to_show, styled

_GOALS = ("width", "sites", "ppr", "change")
_NARROW = 2000  # beyond, there is room for the powers of ten alone
_NEAR, _LEVELS = 1.17, 4
_PAPER = {"facecolor": "white", "edgecolor": "none", "pad": 0.4, "alpha": 0.8}
_WIDTH_MM, _HEIGHT_MM = 180.0, 130.0


@styled
def figure_plan(plan: Plan, table: pd.DataFrame, curves: pd.DataFrame) -> Figure:
    """Draw a panel a goal: a line a bouton, the goal as a level, and the trials that reach it.

    Parameters
    ----------
    plan : Plan
        The plan.
    table, curves : DataFrame
        Its tables `plan` and `plan_curves`.
    """
    figure = blank_figure(_WIDTH_MM, _HEIGHT_MM)
    area = Area.of(figure, margin=4.0)
    left, gap, top, foot, between = 12.0, 18.0, 7.0, 21.0, 19.0
    width = (area.width - left - gap - 4.0) / 2
    height = (area.height - top - foot - between) / 2
    for index, goal in enumerate(_GOALS):
        row, column = divmod(index, 2)
        axes = area.axes(left + column * (width + gap), top + row * (height + between), width, height)
        _draw_goal(axes, goal, plan, table, curves)
    _draw_legend(area, table)
    return figure


def _draw_goal(axes: Axes, goal: str, plan: Plan, table: pd.DataFrame, curves: pd.DataFrame) -> None:
    axes.set_title(_title(goal, plan.goals, table), loc="left", pad=4, color=INK)
    mine = curves[curves["goal"] == goal]
    if not len(mine):
        say_nothing_to_show(axes, "No bouton can be planned for this.")
        return
    for _, line in mine.groupby("bouton", dropna=False):
        axes.plot(line["trials"].astype(float), line["reached"].astype(float), color=EVOKED, linewidth=0.9, alpha=0.8)
    together = curves[curves["goal"] == "paired_change"]
    if goal == "change" and len(together):
        axes.plot(together["trials"].astype(float), together["reached"].astype(float), "--", color=FIT, linewidth=1.3)
        _mark(axes, table[table["goal"] == "paired_change"], "trials_needed", "reached", "D", FIT, filled=True)
    answers = table[table["goal"] == goal]
    axes.axhline(plan.goals.width if goal == "width" else plan.goals.power, color=MUTED, linewidth=0.9, zorder=1.5)
    _mark(axes, answers, "trials_done", "reached_now", "o", PULSE_2, filled=False)
    _mark(axes, answers, "trials_needed", "reached", "o", EVOKED, filled=True)
    _name_boutons(axes, answers)
    _lay_out(axes, goal, mine, answers)


def _mark(axes: Axes, rows: pd.DataFrame, x: str, y: str, marker: str, colour: str, *, filled: bool) -> None:
    across, up = (pd.to_numeric(rows[name]).to_numpy(dtype=np.float64) for name in (x, y))
    axes.plot(across, up, marker, color=colour, markerfacecolor=colour if filled else "white", markersize=4.2, zorder=3)


def _name_boutons(axes: Axes, answers: pd.DataFrame) -> None:
    """Write each bouton's id over the trials that it needs; close neighbours one above the other."""
    named = answers.dropna(subset=["bouton", "trials_needed"]).sort_values("trials_needed")
    last, level = 0.0, 0
    for bouton, trials, value in zip(named["bouton"], named["trials_needed"], named["reached"], strict=True):
        level = (level + 1) % _LEVELS if last and trials / last < _NEAR else 0
        last = trials
        axes.annotate(
            f"{bouton}", (trials, value), xytext=(0.0, 4.0 + 5.5 * level), textcoords="offset points", ha="center",
            va="bottom", fontsize=SMALL - 0.6, color=MUTED, clip_on=True, bbox=_PAPER,
        )  # fmt: skip


def _lay_out(axes: Axes, goal: str, curve: pd.DataFrame, answers: pd.DataFrame) -> None:
    axes.set_xscale("log")
    needed = pd.to_numeric(answers["trials_needed"]).max()
    highest = float(np.clip(2.0 * needed if math.isfinite(needed) else 1e4, 1e3, 1e4))
    axes.set_xlim(float(curve["trials"].min()), highest)
    axes.xaxis.set_major_locator(LogLocator(subs=(1.0, 2.0, 5.0) if highest <= _NARROW else (1.0,)))
    axes.xaxis.set_major_formatter(FuncFormatter(lambda value, _: f"{value:,.0f}"))
    axes.xaxis.set_minor_formatter(NullFormatter())
    axes.grid(axis="y", color=HAIRLINE, linewidth=0.5)
    axes.set_ylim(0.0, 1.03)
    axes.set_xlabel("trials, before and after each" if goal == "change" else "trials")
    axes.set_ylabel("width of the 95 % interval" if goal == "width" else "power")


def _title(goal: str, goals: Goals, table: pd.DataFrame) -> str:
    if goal == "width":
        return f"Interval of p_release, {goals.width:g} wide"
    if goal == "sites":
        sites = pd.to_numeric(table.loc[table["goal"] == "sites", "wanted"]).dropna().unique()
        known = f"{sites[0]:.0f} sites or {sites[0] + 1:.0f}" if len(sites) == 1 else "n sites or n + 1"
        return known.replace("1 sites", "1 site")
    if goal == "ppr":
        return f"Paired-pulse ratio {goals.ppr:g} or 1"
    return f"Change of p_release by {goals.change:+g}"


def _draw_legend(area: Area, table: pd.DataFrame) -> None:
    several = pd.to_numeric(table["bouton"]).nunique() > 1
    handles = [
        Line2D([], [], color=EVOKED, marker="o", markersize=4.2, label="each bouton: trials needed" if several
               else "trials needed"),
        Line2D([], [], color=MUTED, linewidth=0.9, label="wanted"),
    ]  # fmt: skip
    if pd.to_numeric(table["trials_done"]).notna().any():
        handles.append(
            Line2D([], [], linestyle="none", marker="o", markersize=4.2, color=PULSE_2, markerfacecolor="white",
                   label="trials done")
        )  # fmt: skip
    paired = table[table["goal"] == "paired_change"]
    if len(paired):
        handles.append(
            Line2D([], [], color=FIT, linestyle="--", marker="D", markersize=4.2,
                   label=f"paired over {paired['boutons'].iloc[0]} boutons")
        )  # fmt: skip
    area.figure.legend(
        handles=handles,
        loc="lower center",
        bbox_to_anchor=(0.5, 0.025),
        ncols=len(handles),
        fontsize=SMALL,
        handlelength=2.2,
        labelcolor=INK,
    )
