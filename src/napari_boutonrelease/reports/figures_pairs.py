"""Pulse pairs: the ratio of each bouton, both release probabilities, what the first release leaves behind, trains."""

from __future__ import annotations

import math

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.lines import Line2D
from numpy.typing import NDArray

from ..analysis.results import AnalysisResult
from .facts import number, silent, texts, values
from .figures_page import Area, blank_figure
from .figures_style import EVOKED, HAIRLINE, MUTED, NULL, SHADE, SMALL, VERDICTS, say_nothing_to_show, styled
from .words import short

_MOST_NAMED = 25


@styled
def figure_pulse_pairs(result: AnalysisResult) -> Figure:
    """Draw the paired-pulse ratio of each bouton with its interval and verdict, and both release probabilities."""
    figure = blank_figure(180.0, 92.0)
    draw_pulse_pairs(Area.of(figure, margin=4.0), result)
    return figure


@styled
def figure_train(result: AnalysisResult) -> Figure:
    """Draw the mean amplitude of each pulse of the train."""
    figure = blank_figure(120.0, 70.0)
    draw_train(Area.of(figure, margin=4.0).axes(14.0, 5.0, 94.0, 46.0), result)
    return figure


def draw_pulse_pairs(area: Area, result: AnalysisResult) -> None:
    """Draw the ratios at the left, release probabilities of pulse 2 against pulse 1 at the right."""
    side = min(area.height - 22.0, 58.0)
    ratios = area.axes(13.0, 9.0, area.width - side - 36.0, area.height - 22.0)
    _draw_ratios(ratios, result)
    _draw_probabilities(area.axes(area.width - side - 2.0, 9.0, side, side), result)


def _draw_ratios(axes: Axes, result: AnalysisResult) -> None:
    ratio, low, high = (values(result.boutons, "ppr" + end) for end in ("", "_lo", "_hi"))
    known = np.isfinite(ratio) & (ratio > 0)
    if not known.any():
        say_nothing_to_show(axes, "No bouton has a paired-pulse ratio.")
        return
    ids, verdicts = values(result.boutons, "bouton"), texts(result.boutons, "paired_pulse")
    _draw_population(axes, result)
    axes.axhline(1.0, color=MUTED, linewidth=0.7)
    lowest, highest = float(ratio[known].min()) / 2.5, float(ratio[known].max()) * 2.5
    for row in np.flatnonzero(known):
        colour, marker = VERDICTS.get(verdicts[row], VERDICTS["unresolved"])
        if math.isfinite(low[row]) and not math.isnan(high[row]):
            top = min(high[row], 1e3)  # beyond any axis, where the interval has no upper end
            axes.plot([row, row], [max(low[row], 1e-3), max(top, 1e-3)], color=colour, linewidth=1.1)
            lowest, highest = min(lowest, max(low[row], lowest / 2)), max(highest, min(high[row], 2 * highest))
        face = colour if verdicts[row] in ("facilitation", "depression") else "white"
        axes.plot(row, ratio[row], marker, color=colour, markerfacecolor=face, markersize=5)
    axes.set_yscale("log", base=2)
    axes.set_ylim(min(lowest, 0.7), max(highest, 1.4))
    ticks = [t for t in (0.125, 0.25, 0.5, 0.7, 1, 1.4, 2, 4, 8, 16) if axes.get_ylim()[0] <= t <= axes.get_ylim()[1]]
    axes.set_yticks(ticks, [f"{tick:g}" for tick in ticks])
    axes.minorticks_off()
    step = max(1, -(-len(ids) // 25))
    axes.set_xticks(range(0, len(ids), step), [f"{bouton:g}" for bouton in ids[::step]])
    axes.tick_params(axis="x", length=0)
    axes.set_xlim(-0.6, len(ids) - 0.4)
    axes.set_xlabel("bouton")
    axes.set_ylabel("paired-pulse ratio (log scale)")
    handles = [
        Line2D([], [], linestyle="none", color=colour, marker=marker, label=name,
               markerfacecolor="white" if name == "unresolved" else colour)
        for name, (colour, marker) in VERDICTS.items()
    ]  # fmt: skip
    axes.legend(handles=handles, loc="lower left", bbox_to_anchor=(0.0, 1.02), ncols=3, handlelength=1.0)


def _draw_population(axes: Axes, result: AnalysisResult) -> None:
    mean, low, high = (number(result, f"population.ppr{end}") for end in ("", "_lo", "_hi"))
    if math.isfinite(mean) and math.isfinite(low) and math.isfinite(high):
        axes.axhspan(low, high, color=SHADE, linewidth=0, zorder=0)
        axes.axhline(mean, color=NULL, linewidth=0.8, zorder=0.5)
        axes.text(
            1.01,
            mean,
            f"all\n{short(mean, digits=3)}",
            transform=axes.get_yaxis_transform(),
            va="center",
            fontsize=SMALL,
        )


def _draw_probabilities(axes: Axes, result: AnalysisResult) -> None:
    """Scatter the release probability of pulse 2 against that of pulse 1, with both intervals."""
    first, second = _limits(result, 1), _limits(result, 2)
    known = np.isfinite(first[0]) & np.isfinite(second[0]) & ~silent(result)
    if not known.any():
        say_nothing_to_show(axes, "No releasing bouton has both\nrelease probabilities.")
        return
    axes.plot([0, 1], [0, 1], color=HAIRLINE, linewidth=0.8, zorder=0)
    axes.hlines(second[0][known], first[1][known], first[2][known], color=NULL, linewidth=0.6)
    axes.vlines(first[0][known], second[1][known], second[2][known], color=NULL, linewidth=0.6)
    axes.plot(first[0][known], second[0][known], "o", color=EVOKED, markersize=4)
    points = np.column_stack([first[0][known], second[0][known]])
    named = values(result.boutons, "bouton")[known] if len(points) <= _MOST_NAMED else []
    for (x, y), bouton in zip(points, named, strict=False):
        offset = _away_from_neighbour(points, x, y)
        axes.annotate(
            f"{bouton:g}", (x, y), xytext=offset, textcoords="offset points", ha="center", va="center",
            fontsize=SMALL - 0.6, color=MUTED,
        )  # fmt: skip
    axes.set_xlim(-0.03, 1.03)
    axes.set_ylim(-0.03, 1.03)
    axes.set_xticks([0, 0.25, 0.5, 0.75, 1])
    axes.set_yticks([0, 0.25, 0.5, 0.75, 1])
    axes.set_xlabel("p_release, pulse 1")
    axes.set_ylabel("p_release, pulse 2", labelpad=4)


def _limits(result: AnalysisResult, pulse: int) -> NDArray[np.float64]:
    """p_release of one pulse and the ends of its interval, a column a bouton."""
    numbers, at = values(result.pulses, "pulse"), values(result.pulses, "bouton")
    found = np.full((3, len(result.boutons)), np.nan)
    rows = {bouton: row for row, bouton in enumerate(values(result.boutons, "bouton"))}
    mine = np.array([one == pulse and bouton in rows for one, bouton in zip(numbers, at, strict=True)], dtype=bool)
    columns = [rows[bouton] for bouton in at[mine]]
    for line, end in enumerate(("", "_lo", "_hi")):
        found[line, columns] = values(result.pulses, f"p_release{end}")[mine]
    return found


def _away_from_neighbour(points: NDArray[np.float64], x: float, y: float) -> tuple[float, float]:
    """Offset of a point's label in points, on the side where no other point is near."""
    from_others = np.array([x, y]) - points
    distance = np.hypot(*from_others.T)
    distance[distance == 0] = np.inf
    if not np.isfinite(distance).any() or distance.min() > 0.12:
        return (-6.0, 4.5) if x > 0.9 else (6.0, 4.5)
    direction = from_others[np.argmin(distance)] / distance.min()
    return 6.5 * float(direction[0]), 6.5 * float(direction[1])


def draw_train(axes: Axes, result: AnalysisResult) -> None:
    """Draw each bouton's mean amplitude against the pulse number, divided by that of pulse 1, and their median."""
    pulse, bouton = values(result.pulses, "pulse"), values(result.pulses, "bouton")
    mean, error = values(result.pulses, "amplitude_mean"), values(result.pulses, "amplitude_se")
    curves = []
    for one in np.unique(bouton):
        mine = np.flatnonzero(bouton == one)
        mine = mine[np.argsort(pulse[mine])]
        if mine.size and mean[mine[0]] > 3 * error[mine[0]]:  # else the quotient says nothing
            curves.append((pulse[mine], mean[mine] / mean[mine[0]]))
            axes.plot(*curves[-1], color=NULL, linewidth=0.7)
    if not curves:
        say_nothing_to_show(axes, "No bouton has a first response clear of the noise.")
        return
    numbers = np.unique(np.concatenate([x for x, _ in curves]))
    middle = [np.nanmedian(np.concatenate([y[x == at] for x, y in curves])) for at in numbers]
    axes.plot(numbers, middle, "o-", color=EVOKED, label=f"median of {len(curves)} boutons")
    axes.axhline(1.0, color=HAIRLINE, linewidth=0.8, zorder=0)
    axes.set_ylim(bottom=min(0.0, float(min(y.min() for _, y in curves))))
    axes.locator_params(axis="x", integer=True)
    axes.set_xlabel("pulse")
    axes.set_ylabel("amplitude, relative to pulse 1")
    axes.legend(loc="lower left", bbox_to_anchor=(0.0, 1.01))
