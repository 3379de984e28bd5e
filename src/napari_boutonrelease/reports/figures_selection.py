"""Which boutons the detection would have missed: the share found of simulated boutons against their p_release."""

from __future__ import annotations

import math

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.ticker import FixedLocator, NullFormatter

from ..analysis.results import AnalysisResult
from .facts import fact, number, texts, values
from .figures_page import Area, blank_figure
from .figures_style import EVOKED, FIT, FOUND_BY, HAIRLINE, INK, MUTED, SHADE, SMALL, styled
from .words import counted, fixed, selection_sentences, short

DETECTION_MM = 92.0
_TICKS = (0.005, 0.01, 0.02, 0.05, 0.1, 0.2, 0.5, 1.0)
_LEAST = 0.004  # where a p_release below the axis is drawn


def shows_detection(result: AnalysisResult) -> bool:
    """Whether simulated boutons were planted."""
    return len(result.detection) > 0


@styled
def figure_detection(result: AnalysisResult) -> Figure:
    """Draw the share found against p_release, with the boutons of the recording below it."""
    figure = blank_figure(180.0, DETECTION_MM + 46.0)
    draw_selection(Area.of(figure, margin=4.0), result)
    return figure


def draw_selection(area: Area, result: AnalysisResult) -> None:
    """Draw the curve with the boutons as a rug, and say what follows."""
    draw_detection(area.axes(13.0, 7.0, area.width - 18.0, DETECTION_MM - 18.0), result)
    y = area.paragraph(0.0, DETECTION_MM + 2.0, area.width, detection_caption(result), size=SMALL, color=MUTED)
    for sentence in selection_sentences(result):
        y = area.paragraph(0.0, y + 2.0, area.width, sentence, color=INK)


def draw_detection(axes: Axes, result: AnalysisResult) -> None:
    """Draw the share found of planted boutons, and the p_release of those of the recording."""
    table = result.detection
    p, share, fit = (values(table, name) for name in ("p_release", "found_share", "found_share_fit"))
    low, high = (values(table, f"found_share_{end}") for end in ("lo", "hi"))
    smallest = number(result, "selection.smallest_p_release")
    axes.axvspan(_LEAST / 1.3, smallest if math.isfinite(smallest) else 1.3, color=SHADE, linewidth=0, zorder=0)
    for level in (0.5, 0.95):
        axes.axhline(level, color=HAIRLINE, linewidth=0.7, zorder=0)
    axes.plot(p, fit, color=FIT, linewidth=1.1, zorder=2)
    axes.vlines(p, low, high, color=EVOKED, linewidth=1.1, zorder=3)
    axes.plot(p, share, "o", color=EVOKED, markersize=4.0, zorder=3, label="simulated boutons, 95 % interval")
    for key, level in (("p_found_half", 0.5), ("p_found_most", 0.95)):
        at = number(result, f"selection.{key}")
        if math.isfinite(at):
            axes.plot([at, at], [0.0, level], color=FIT, linewidth=0.8, dashes=(3, 2), zorder=1)
            axes.annotate(
                f"{fixed(100 * level, decimals=0)} % at {short(at)}", (at, level), xytext=(4.0, -3.0),
                textcoords="offset points", va="top", fontsize=SMALL, color=FIT,
            )  # fmt: skip
    _draw_rug(axes, result)
    axes.set_xscale("log")
    axes.set_xlim(_LEAST / 1.2, 1.2)
    axes.xaxis.set_major_locator(FixedLocator(_TICKS))
    axes.xaxis.set_minor_formatter(NullFormatter())
    axes.minorticks_off()
    axes.set_xticklabels([f"{tick:g}" for tick in _TICKS])
    axes.set_ylim(-0.16, 1.04)
    axes.set_yticks([0.0, 0.25, 0.5, 0.75, 1.0])
    axes.set_xlabel("p_release")
    axes.set_ylabel("share found by responses")
    axes.legend(loc="lower left", bbox_to_anchor=(0.0, 1.01), ncols=5, columnspacing=1.6)


def _draw_rug(axes: Axes, result: AnalysisResult) -> None:
    """Mark p_release of each bouton below the curve; those found by shape alone lower."""
    p, found_by = values(result.boutons, "p_release"), texts(result.boutons, "found_by")
    axes.axhline(0.0, color=HAIRLINE, linewidth=0.7, zorder=0)
    for name, (colour, marker, filled, words) in FOUND_BY.items():
        here = np.array([way == name for way in found_by]) & np.isfinite(p)
        if here.any():
            axes.plot(
                np.maximum(p[here], _LEAST),
                np.full(int(here.sum()), -0.115 if name == "shape" else -0.055),
                linestyle="none",
                marker=marker,
                color=colour,
                markerfacecolor=colour if filled else "white",
                markersize=4.2,
                clip_on=False,
                label=f"found by {words}",
            )


def detection_caption(result: AnalysisResult) -> str:
    """Say how the curve was made, and how to read it."""
    planted = values(result.detection, "planted")
    each = counted(float(planted[0]), "simulated bouton") if planted.size else "simulated boutons"
    smallest = number(result, "selection.smallest_p_release")
    shaded = (
        f" Shaded: fewer than 10 % would be found, so nothing is inferred of boutons there (below {short(smallest)})."
        if math.isfinite(smallest)
        else " Shaded: too few would be found to infer anything."
    )
    method = fact(result, "selection.method") or ""
    why = f" No corrected mean: {method.removeprefix('none: ')}." if method.startswith("none") else ""
    return (
        f"At each p_release (of pulse 1), {each} with brightness, vesicles and sites of the boutons found by "
        "responses, alone at places of this recording where none was found, with the noise there; the cut is the "
        "detection's own. Line: rising curve that fits best. Below: p_release of this recording's boutons; at the "
        f"left edge, those that are lower.{shaded}{why}"
    )
