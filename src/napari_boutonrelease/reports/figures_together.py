"""The boutons together: how much they differ, order along the axon, release in common, and failed stimuli."""

from __future__ import annotations

import math

import numpy as np
from matplotlib.axes import Axes
from matplotlib.cm import ScalarMappable
from matplotlib.colors import LinearSegmentedColormap, Normalize
from matplotlib.figure import Figure
from matplotlib.lines import Line2D

from ..analysis.results import AnalysisResult
from .facts import number, on_a_path, values
from .figures_page import Area, blank_figure
from .figures_style import (
    EVOKED,
    FIT,
    HAIRLINE,
    HEAD,
    INK,
    MUTED,
    PULSE_2,
    SMALL,
    say_nothing_to_show,
    styled,
)
from .together_words import co_release_words, distance_words, spread_words, stimuli_words

_SUSPECTED = 0.5
_PULSES = (EVOKED, PULSE_2)


@styled
def figure_together(result: AnalysisResult) -> Figure:
    """Draw how much boutons differ, their order along the axon, release in common, and failed stimuli."""
    figure = blank_figure(180.0, 236.0 if on_a_path(result) else 178.0)
    draw_together(Area.of(figure, margin=4.0), result)
    return figure


def shows_together(result: AnalysisResult) -> bool:
    """Whether at least two boutons can be compared."""
    return number(result, "heterogeneity.boutons") >= 2 and math.isfinite(number(result, "heterogeneity.sd"))


def draw_together(area: Area, result: AnalysisResult) -> None:
    """Draw the panels one below the other, each with its words; only what applies."""
    half = 0.5 * area.width - 4.0
    right = area.width - half
    area.text(0.0, 0.0, "Spread between boutons", size=HEAD, weight="bold")
    area.text(right, 0.0, "Release in common", size=HEAD, weight="bold")
    draw_spread(area.axes(11.0, 9.0, half - 13.0, 58.0), result)
    draw_co_release(area.part(right, 6.0, half, 64.0), result)
    y = max(
        area.paragraph(0.0, 78.0, half, _spread_words(result), size=SMALL, color=MUTED),
        area.paragraph(right, 78.0, half, _co_release_words(result), size=SMALL, color=MUTED),
    )
    if on_a_path(result):
        y += 5.0
        area.text(0.0, y, "Along the axon", size=HEAD, weight="bold")
        draw_distance(area.axes(11.0, y + 7.0, area.width - 13.0, 36.0), result)
        y = area.paragraph(0.0, y + 53.0, area.width, _distance_words(result), size=SMALL, color=MUTED)
    y += 5.0
    area.text(0.0, y, "Stimulus by stimulus", size=HEAD, weight="bold")
    draw_stimuli(area.axes(11.0, y + 9.0, area.width - 13.0, 34.0), result)
    area.paragraph(0.0, y + 53.0, area.width, stimuli_words(result), size=SMALL, color=MUTED)


def draw_spread(axes: Axes, result: AnalysisResult) -> None:
    """Draw p_release of each bouton alone and given the others, in ascending order."""
    plain, shrunken = values(result.boutons, "p_release"), values(result.boutons, "p_release_shrunk")
    low, high = (values(result.boutons, f"p_release_shrunk_{end}") for end in ("lo", "hi"))
    rows = np.flatnonzero(np.isfinite(plain) & np.isfinite(shrunken))
    if not rows.size:
        say_nothing_to_show(axes, "no bouton to compare")
        return
    rows = rows[np.argsort(plain[rows], kind="stable")]
    place = np.arange(rows.size)
    axes.vlines(place, low[rows], high[rows], color=EVOKED, linewidth=1.1)
    axes.plot(place, plain[rows], "o", color=MUTED, markerfacecolor="white", markersize=4.6, markeredgewidth=0.9)
    axes.plot(place, shrunken[rows], "D", color=EVOKED, markersize=2.8)
    axes.set_ylim(-0.03, 1.03)
    axes.set_xlim(-0.7, rows.size - 0.3)
    step = max(1, -(-rows.size // 14))
    axes.set_xticks(place[::step], [f"{one:g}" for one in values(result.boutons, "bouton")[rows][::step]])
    axes.set_xlabel("bouton, in order of p_release")
    axes.set_ylabel("p_release")
    handles = [
        Line2D([], [], linestyle="none", marker="o", color=MUTED, markerfacecolor="white", label="as measured"),
        Line2D([], [], marker="D", color=EVOKED, markersize=2.8, label="given the other boutons"),
    ]
    axes.legend(handles=handles, loc="lower left", bbox_to_anchor=(0.0, 1.01), ncols=2, columnspacing=1.2)


def draw_co_release(area: Area, result: AnalysisResult) -> None:
    """Draw the correlation of every pair of boutons; dots mark pairs that do not release independently."""
    pairs = result.co_release
    if not len(pairs):
        say_nothing_to_show(area.axes(0.0, 0.0, area.width, area.height), "no pair of boutons to compare")
        return
    one, other = values(pairs, "bouton"), values(pairs, "other_bouton")
    ids = np.unique(np.concatenate([one, other]))
    matrix, adjusted = np.full((ids.size, ids.size), np.nan), np.full((ids.size, ids.size), np.nan)
    at, beside = np.searchsorted(ids, one), np.searchsorted(ids, other)
    for grid, column in ((matrix, "correlation"), (adjusted, "p_adjusted")):
        grid[at, beside] = grid[beside, at] = values(pairs, column)
    side = min(area.width - 30.0, area.height - 10.0)
    axes = area.axes(9.0, 3.0, side, side)
    most = max(float(np.nanmax(np.abs(matrix))), 0.3)
    norm = Normalize(-most, most)
    axes.set_facecolor(HAIRLINE)
    axes.imshow(matrix, cmap=_diverging(), norm=norm, interpolation="nearest")
    with np.errstate(invalid="ignore"):
        y, x = np.nonzero(adjusted < 0.05)
    axes.plot(x, y, ".", color=INK, markersize=max(1.0, min(4.0, 40.0 / ids.size)))
    step = max(1, -(-ids.size // 12))
    names = [f"{one:g}" for one in ids[::step]]
    axes.set_xticks(range(0, ids.size, step), names)
    axes.set_yticks(range(0, ids.size, step), names)
    axes.tick_params(length=0)
    axes.set_xlabel("bouton")
    axes.set_ylabel("bouton")
    for spine in axes.spines.values():
        spine.set_visible(False)
    bar = area.axes(9.0 + side + 4.0, 3.0, 2.6, side)
    axes.figure.colorbar(ScalarMappable(norm=norm, cmap=_diverging()), cax=bar, label="correlation")
    bar.yaxis.label.set_fontsize(SMALL)
    bar.spines["outline"].set_visible(False)


def _diverging() -> LinearSegmentedColormap:
    return LinearSegmentedColormap.from_list("boutonrelease_pairs", [EVOKED, "#ffffff", FIT])


def draw_distance(axes: Axes, result: AnalysisResult) -> None:
    """Draw p_release with intervals against the distance along the axon, joined in order, with the fitted line."""
    where = values(result.boutons, "axon_um")
    value, low, high = (values(result.boutons, f"p_release{end}") for end in ("", "_lo", "_hi"))
    rows = np.flatnonzero(np.isfinite(where) & np.isfinite(value))
    rows = rows[np.argsort(where[rows], kind="stable")]
    if not rows.size:
        say_nothing_to_show(axes, "no bouton on the path")
        return
    axes.plot(where[rows], value[rows], color=HAIRLINE, linewidth=0.9, zorder=1)
    axes.vlines(where[rows], low[rows], high[rows], color=EVOKED, linewidth=1.1)
    axes.plot(where[rows], value[rows], "o", color=EVOKED, markersize=4)
    slope, start = (number(result, f"p_release_against_distance.{key}") for key in ("slope_per_um", "at_start"))
    if math.isfinite(slope):
        ends = np.array([where[rows[0]], where[rows[-1]]])
        axes.plot(ends, start + slope * ends, color=FIT, linewidth=1.1, dashes=(4, 2))
    axes.set_ylim(-0.03, 1.03)
    axes.set_xlabel("distance along the axon (µm)")
    axes.set_ylabel("p_release")


def draw_stimuli(axes: Axes, result: AnalysisResult) -> None:
    """Draw how many boutons released at each stimulus, and mark those that seem to have reached none."""
    trials = result.trials
    trial, pulse = values(trials, "trial"), values(trials, "pulse")
    share = values(trials, "released") / np.where(values(trials, "boutons") > 0, values(trials, "boutons"), np.nan)
    failed = values(trials, "stimulus_failure_p")
    if not np.isfinite(share).any() and not np.isfinite(failed).any():
        say_nothing_to_show(axes, "no stimulus to compare")
        return
    n_pulses = int(pulse.max())
    # two pulses side by side; more, as points of one colour
    offset = 0.3 * (pulse - 1.5) if n_pulses == 2 else np.zeros_like(pulse)
    for number_, colour in zip(range(1, min(n_pulses, 2) + 1), _PULSES, strict=False):
        inside = (pulse == number_) if n_pulses <= 2 else np.ones(pulse.size, dtype=np.bool_)
        axes.plot(
            trial[inside] + offset[inside],
            share[inside],
            linestyle="none",
            marker="os"[number_ - 1],
            color=colour,
            markersize=2.8,
            label=f"pulse {number_}" if n_pulses <= 2 else "each pulse",
        )
        if n_pulses > 2:
            break
    marked = failed > _believed_cut(result)
    axes.plot(
        trial[marked] + offset[marked],
        np.full(int(marked.sum()), 1.09),
        linestyle="none",
        marker="v",
        color=FIT,
        markersize=4,
        clip_on=False,
        label="suspected: reached no bouton",
    )
    axes.set_ylim(-0.04, 1.04)
    axes.set_xlim(0.3, float(np.nanmax(trial)) + 0.7)
    axes.set_ylabel("share of boutons\nthat released")
    axes.set_xlabel("trial")
    axes.locator_params(axis="x", integer=True, min_n_ticks=1)
    axes.legend(loc="lower right", bbox_to_anchor=(1.0, 1.13), ncols=3, columnspacing=1.6)


def _believed_cut(result: AnalysisResult) -> float:
    """Probability above which a stimulus is marked; none is where failures are not believed at all."""
    if not number(result, "stimulus_failures.suspected") > 0:
        return math.inf
    cut = getattr(getattr(result.settings, "calls", None), "stimulus_failure_cut", _SUSPECTED)
    return float(cut)


def _spread_words(result: AnalysisResult) -> str:
    return f"{spread_words(result)} Bars: 95 % intervals of each bouton given what the others tell about it."


def _co_release_words(result: AnalysisResult) -> str:
    dots = " Dots: those pairs." if number(result, "co_release.pairs_together") > 0 else ""
    return co_release_words(result) + dots


def _distance_words(result: AnalysisResult) -> str:
    dashed = math.isfinite(number(result, "p_release_against_distance.slope_per_um"))
    return distance_words(result) + (" Dashed: the fitted line." if dashed else "")
