"""Along the axon: release probability, potency and one vesicle's response of each bouton."""

from __future__ import annotations

import math

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.lines import Line2D
from numpy.typing import NDArray

from ..analysis.results import AnalysisResult
from .facts import fact, nothing_released, number, on_a_path, silent, texts, values
from .figures_page import Area, blank_figure
from .figures_style import FOUND_BY, HAIRLINE, INK, MUTED, NULL, SHADE, SMALL, say_nothing_to_show, styled
from .words import short


@styled
def figure_release_along_axon(result: AnalysisResult) -> Figure:
    """Draw p_release and q of each bouton with intervals along the axon."""
    figure = blank_figure(180.0, 128.0)
    draw_release_along_axon(Area.of(figure, margin=4.0), result)
    return figure


def draw_release_along_axon(area: Area, result: AnalysisResult) -> None:
    """Draw p_release above q against the distance along the axon, or the id where there is no path."""
    width = area.width - 25.0
    gap = 6.0
    upper_mm = (area.height - 24.0) * 0.6
    upper = area.axes(14.0, 10.0, width, upper_mm)
    lower = area.axes(14.0, 10.0 + upper_mm + gap, width, area.height - 24.0 - upper_mm - gap, sharex=upper)
    where, label = _places(result)
    if not np.isfinite(where).any():
        say_nothing_to_show(upper, "There are no boutons to show.")
        lower.set_axis_off()
        return
    _draw_population(upper, result)
    _draw_by_found(upper, result, where, "p_release")
    upper.set_ylim(-0.03, 1.03)
    upper.set_ylabel("p_release")
    upper.tick_params(labelbottom=False)
    if on_a_path(result):
        _write_ids(upper, result, where)
    borrowed = [source == "axon" for source in texts(result.boutons, "q_from")]
    _draw_by_found(lower, result, where, "q", pale=borrowed, hidden=silent(result))
    lower.set_ylabel("q, one vesicle (dF/F)")
    lower.set_ylim(bottom=0.0)
    lower.locator_params(axis="y", nbins=5)
    for axes in (upper, lower):
        axes.yaxis.set_label_coords(-9.5 / width, 0.5)
    lower.set_xlabel(label)
    span = float(np.nanmax(where) - np.nanmin(where)) or 1.0
    upper.set_xlim(float(np.nanmin(where)) - 0.04 * span, float(np.nanmax(where)) + 0.04 * span)
    if not on_a_path(result):
        step = max(1, -(-len(where) // 40))
        lower.set_xticks(where[::step], [f"{bouton:g}" for bouton in where[::step]])
    for axes, name, shown in ((upper, "p_release", np.isfinite(where)), (lower, "q", ~silent(result))):
        if not np.isfinite(values(result.boutons, name)[shown]).any():
            sentence = f"{name} could be measured at no bouton."
            axes.set_yticks([])
            axes.text(0.5, 0.5, sentence, transform=axes.transAxes, ha="center", color=MUTED)
    _legend(upper, result)


def _places(result: AnalysisResult) -> tuple[NDArray[np.float64], str]:
    if on_a_path(result):
        return values(result.boutons, "axon_um"), "distance along the axon (µm)"
    return values(result.boutons, "bouton"), "bouton"


def _draw_population(axes: Axes, result: AnalysisResult) -> None:
    if nothing_released(result):
        return
    mean, low, high = (number(result, f"population.p_release{end}") for end in ("", "_lo", "_hi"))
    if not math.isfinite(mean):
        return
    if math.isfinite(low) and math.isfinite(high):
        axes.axhspan(low, high, color=SHADE, linewidth=0, zorder=0)
    axes.axhline(mean, color=NULL, linewidth=0.8, zorder=0.5)
    axes.text(1.01, mean, f"mean\n{short(mean)}", transform=axes.get_yaxis_transform(), va="center", fontsize=SMALL)


def _draw_by_found(
    axes: Axes,
    result: AnalysisResult,
    where: NDArray[np.float64],
    column: str,
    *,
    pale: list[bool] | None = None,
    hidden: NDArray[np.bool_] | None = None,
) -> None:
    """Points with intervals, marked by how each bouton was found; pale where the number is borrowed."""
    shown = np.isfinite(where) if hidden is None else np.isfinite(where) & ~hidden
    value, low, high = (values(result.boutons, column + end) for end in ("", "_lo", "_hi"))
    found_by = texts(result.boutons, "found_by")
    for row in np.flatnonzero(np.isfinite(value) & shown):
        colour, marker, filled, _ = FOUND_BY.get(found_by[row], (MUTED, "o", True, ""))
        alpha = 0.4 if pale and pale[row] else 1.0
        if np.isfinite(low[row]) and np.isfinite(high[row]):
            axes.plot([where[row]] * 2, [low[row], high[row]], color=colour, linewidth=1.1, alpha=alpha)
        face = colour if filled else "white"
        axes.plot(
            where[row],
            value[row],
            marker,
            color=colour,
            markerfacecolor=face,
            markeredgewidth=1.1,
            markersize=5,
            alpha=alpha,
        )


def _write_ids(axes: Axes, result: AnalysisResult, where: NDArray[np.float64]) -> None:
    """Write ids above the axes, in two rows where they would touch."""
    span = float(np.nanmax(where) - np.nanmin(where)) or 1.0
    last, raised = -math.inf, False
    known = np.isfinite(values(result.boutons, "p_release"))
    for row, bouton in enumerate(values(result.boutons, "bouton")):
        if not math.isfinite(where[row]):
            continue
        raised = not raised if (where[row] - last) / span < 0.025 else False
        last = where[row]
        axes.text(
            where[row],
            1.075 if raised else 1.02,
            f"{bouton:g}",
            transform=axes.get_xaxis_transform(),
            ha="center",
            va="bottom",
            fontsize=SMALL,
            color=INK if known[row] else NULL,
        )
        axes.axvline(where[row], color=HAIRLINE, linewidth=0.4, zorder=0.2)


def _legend(axes: Axes, result: AnalysisResult) -> None:
    present = [name for name in FOUND_BY if name in set(texts(result.boutons, "found_by"))]
    handles = [
        Line2D(
            [],
            [],
            color=FOUND_BY[name][0],
            marker=FOUND_BY[name][1],
            markerfacecolor=FOUND_BY[name][0] if FOUND_BY[name][2] else "white",
            linestyle="none",
            label=FOUND_BY[name][3],
        )
        for name in present
    ]
    handles.insert(0, Line2D([], [], linestyle="none", label="found by"))
    height = 1.13 if on_a_path(result) else 1.04  # ids stand between
    axes.legend(handles=handles, loc="lower left", bbox_to_anchor=(0.0, height), ncols=len(handles), handlelength=1.0)


def axon_title(result: AnalysisResult) -> str:
    """Title of the page, which must not promise an order along the axon that is not known."""
    return "Release along the axon" if on_a_path(result) else "Release, bouton by bouton"


def selection_words(result: AnalysisResult) -> str:
    """Say which boutons the shaded mean rests on, and what is not drawn."""
    words = "Bars: 95 % intervals. Pale q: borrowed from the axon's other boutons."
    if silent(result).any():
        words += " Boutons that show no release have no q of their own."
    if not on_a_path(result):
        words += (
            " Boutons stand in the order of their ids: give the course of the axon (--axon) to see distances along it."
        )
    selection = fact(result, "population.selection")
    if not selection or not math.isfinite(number(result, "population.p_release")) or nothing_released(result):
        return f"No population mean is given. {words}"
    count = number(result, "population.boutons")
    return f"Line and band: mean p_release of {count:g} boutons with its 95 % interval; selection: {selection}. {words}"
