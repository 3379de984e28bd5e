"""The raster of calls: which bouton released in which trial."""

from __future__ import annotations

import numpy as np
from matplotlib.axes import Axes
from matplotlib.colors import ListedColormap
from matplotlib.figure import Figure
from matplotlib.lines import Line2D
from matplotlib.patches import Patch
from numpy.typing import NDArray

from ..analysis.results import AnalysisResult
from .facts import amplitude_grid, values
from .figures_page import Area, blank_figure
from .figures_style import EVOKED, HAIRLINE, INK, MUTED, NULL, SHADE, SMALL, say_nothing_to_show, styled

_LEFT_OUT, _FAILED, _RELEASED = 0, 1, 2


@styled
def figure_calls(result: AnalysisResult) -> Figure:
    """Draw the calls of every bouton and trial, pulse 1 beside pulse 2."""
    figure = blank_figure(180.0, min(max(60.0, 45.0 + 4.0 * len(result.boutons)), 250.0))
    draw_calls(Area.of(figure, margin=4.0), result)
    return figure


def draw_calls(area: Area, result: AnalysisResult) -> None:
    """Draw one panel a pulse where there are one or two, else all pulses as lines within each bouton's row."""
    calls = amplitude_grid(result, "called")
    n_boutons, n_trials, n_pulses = calls.shape
    if not n_boutons:
        say_nothing_to_show(area.axes(0.0, 0.0, area.width, area.height), "There are no boutons to show.")
        return
    states = np.where(np.isnan(calls), _LEFT_OUT, np.where(calls == 1, _RELEASED, _FAILED))
    if n_pulses > 2:
        panels = [(f"Pulses 1 to {n_pulses}, line by line", states.transpose(0, 2, 1).reshape(-1, n_trials))]
    else:
        panels = [(f"Pulse {pulse + 1}", states[:, :, pulse]) for pulse in range(n_pulses)]
    left, gap, foot = 11.0, 5.0, 21.0
    width = (area.width - left - gap * (len(panels) - 1)) / len(panels)
    height = area.height - foot - 7.0
    for index, (title, panel) in enumerate(panels):
        x = left + index * (width + gap)
        axes = area.axes(x, 7.0, width, height)
        _draw_panel(axes, panel, n_boutons)
        axes.set_title(title, loc="left", fontsize=SMALL, color=MUTED, pad=3)
        _name_boutons(axes, result, first=index == 0)
        axes.tick_params(labelbottom=False, length=0)
        share = area.axes(x, 7.0 + height + 1.5, width, 9.0, sharex=axes)
        _draw_share(share, panel)
        share.set_xlabel("trial")
        if index == 0:
            share.set_ylabel(
                "calls" if n_pulses > 2 else "boutons", rotation=0, ha="right", va="center", fontsize=SMALL
            )
        else:
            share.tick_params(labelleft=False)
    handles = [
        Patch(facecolor=EVOKED, label="release called"),
        Patch(facecolor=SHADE, edgecolor=HAIRLINE, label="failure"),
        Line2D([], [], linestyle="none", marker="x", color=NULL, markersize=2.6, markeredgewidth=0.6, label="left out"),
    ]
    axes.legend(
        handles=handles, loc="lower right", bbox_to_anchor=(1.0, 1.0 + 1.2 / height), ncols=3, columnspacing=1.2,
        handlelength=1.0, handleheight=0.8,
    )  # fmt: skip


def _draw_panel(axes: Axes, panel: NDArray[np.int_], n_boutons: int) -> None:
    rows, trials = panel.shape
    colours = ListedColormap(["white", SHADE, EVOKED])
    extent = (0.5, trials + 0.5, n_boutons - 0.5, -0.5)
    axes.imshow(panel, cmap=colours, vmin=0, vmax=2, aspect="auto", interpolation="nearest", extent=extent)
    out = np.argwhere(panel == _LEFT_OUT)
    if 0 < len(out) <= 4000:
        y = -0.5 + (out[:, 0] + 0.5) * n_boutons / rows
        axes.plot(out[:, 1] + 1, y, linestyle="none", marker="x", color=NULL, markersize=2.2, markeredgewidth=0.5)
    for boundary in np.arange(0.5, n_boutons - 1):
        axes.axhline(boundary, color="white", linewidth=1.0)
    for spine in axes.spines.values():
        spine.set_visible(False)


def _name_boutons(axes: Axes, result: AnalysisResult, *, first: bool) -> None:
    ids = values(result.boutons, "bouton")
    step = max(1, -(-len(ids) // 60))
    axes.set_yticks(range(0, len(ids), step), [f"{bouton:g}" for bouton in ids[::step]])
    axes.tick_params(axis="y", length=0, labelleft=first)
    if first:
        axes.set_ylabel("bouton", color=INK)


def _draw_share(axes: Axes, panel: NDArray[np.int_]) -> None:
    """Draw in each trial how many releases were called."""
    trials = np.arange(1, panel.shape[1] + 1)
    axes.bar(trials, (panel == _RELEASED).sum(axis=0), width=0.8, color=EVOKED, alpha=0.6, linewidth=0)
    axes.set_ylim(0, max(int((panel != _LEFT_OUT).any(axis=1).sum()), 1))
    axes.locator_params(axis="y", nbins=2, integer=True)
    axes.locator_params(axis="x", integer=True, min_n_ticks=1)
