"""Trains: amplitude against pulse, the pool behind it, each bouton's pool; and the ratio against the pulse interval."""

from __future__ import annotations

import math

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from numpy.typing import NDArray

from ..analysis.fitted_curves import ratio_curve, train_curve
from ..analysis.results import AnalysisResult
from .facts import fact, number, texts, values
from .figures_page import Area, blank_figure
from .figures_style import EVOKED, FIT, HAIRLINE, INK, MUTED, NULL, SMALL, say_nothing_to_show, styled
from .words import duration, fixed, listed

TRAINS_MM, INTERVALS_MM = 150.0, 80.0
_MOST_NAMED = 12

TRAINS_CAPTION = (
    "Upper left: mean amplitudes, summed over boutons, with 95 % intervals, and the model of Tsodyks and Markram "
    "(1997). Upper right: the same summed up from pulse to pulse; the line through the last responses (open) meets "
    "pulse 1 at the pool. "
    "Below: pool and first share of each bouton with 95 % intervals, which end in an arrow where the data set no end."
)
INTERVALS_CAPTION = (
    "Ratios of mean amplitudes against the time between the pulses. Left: all boutons together, with 95 % intervals "
    "and the time course chosen by AICc. Right: each bouton; a ratio that is not defined is left out."
)


@styled
def figure_trains(result: AnalysisResult) -> Figure:
    """Draw the train of all boutons together with model and pool, and what each bouton's says."""
    figure = blank_figure(180.0, TRAINS_MM + 8.0)
    draw_trains(Area.of(figure, margin=4.0), result)
    return figure


@styled
def figure_pulse_intervals(result: AnalysisResult) -> Figure:
    """Draw the paired-pulse ratio against the pulse interval."""
    figure = blank_figure(180.0, INTERVALS_MM + 8.0)
    draw_pulse_intervals(Area.of(figure, margin=4.0), result)
    return figure


def draw_trains(area: Area, result: AnalysisResult) -> None:
    """Draw amplitudes and cumulative amplitudes above, each bouton's pool and first share below."""
    half, height = 0.5 * area.width, 0.5 * area.height
    _draw_amplitudes(area.axes(13.0, 6.0, half - 18.0, height - 18.0), result)
    _draw_cumulative(area.axes(half + 13.0, 6.0, half - 18.0, height - 18.0), result)
    below = area.axes(13.0, height + 6.0, half - 18.0, height - 18.0)
    _draw_boutons(below, result, column="pool_vesicles", label="pool (vesicles)", sentence="No bouton has a pool.")
    below = area.axes(half + 13.0, height + 6.0, half - 18.0, height - 18.0)
    _draw_boutons(below, result, column="u", label="share of pulse 1, u", sentence="No bouton's train was fitted.")


def draw_pulse_intervals(area: Area, result: AnalysisResult) -> None:
    """Draw all boutons together at the left, each at the right."""
    half = 0.5 * area.width
    left = area.axes(13.0, 6.0, half - 18.0, area.height - 18.0)
    right = area.axes(half + 13.0, 6.0, half - 18.0, area.height - 18.0)
    interval_s = _numbers(result, "pulse_intervals.interval_s")
    for axes in (left, right):
        axes.set_xscale("log")
        axes.axhline(1.0, color=HAIRLINE, linewidth=0.8, zorder=0)
        axes.set_xlabel("time between pulses (s)")
        axes.set_ylabel("paired-pulse ratio")
    _draw_time_course(left, result, interval_s)
    _draw_each_ratio(right, result)
    for axes in (left, right):
        if axes.axison and interval_s.size:
            axes.set_xticks(interval_s, [f"{gap:.3g}" for gap in interval_s])
            axes.minorticks_off()
            axes.set_xlim(interval_s.min() / 1.3, interval_s.max() * 1.3)


def _draw_amplitudes(axes: Axes, result: AnalysisResult) -> None:
    mean, low, high = (_numbers(result, f"train.amplitude{end}") for end in ("", "_lo", "_hi"))
    if not np.isfinite(mean).any():
        say_nothing_to_show(axes, "The amplitudes of the train\ncould not be measured.")
        return
    pulse = np.arange(1, mean.size + 1)
    axes.vlines(pulse, low, high, color=EVOKED, linewidth=1.0)
    axes.plot(pulse, mean, "o", color=EVOKED)
    curve = _model_curve(result)
    if curve.size:
        axes.plot(pulse, curve, color=FIT, linewidth=1.1)
        words = [
            f"u {fixed(number(result, 'train.u'))}",
            *(
                _time_words(result, key, name)
                for key, name in (("tau_rec_s", "recovery"), ("tau_facil_s", "facilitation"))
            ),
        ]
        axes.set_title(listed(filter(None, words)), loc="left", color=FIT, fontsize=SMALL)
    axes.set_ylim(bottom=min(0.0, float(np.nanmin(low))))
    _label_pulses(axes, "amplitude, all boutons (dF/F)")


def _time_words(result: AnalysisResult, key: str, name: str) -> str:
    value = number(result, f"train.{key}")
    return f"{name} {duration(value)}" if value > 0 else ""


def _model_curve(result: AnalysisResult) -> NDArray[np.float64]:
    """Amplitudes that the model gives each pulse; empty without a model."""
    row = {name: number(result, f"train.{name}") for name in ("u", "resources", "tau_rec_s", "tau_facil_s")}
    return train_curve(row, _numbers(result, "train.pulse_s"))


def _draw_cumulative(axes: Axes, result: AnalysisResult) -> None:
    total, error = _numbers(result, "train.cumulative"), _numbers(result, "train.cumulative_se")
    if not np.isfinite(total).any():
        say_nothing_to_show(axes, "The pulses are not evenly spaced,\nor too few trials are complete.")
        return
    pulse = np.arange(1, total.size + 1)
    axes.errorbar(pulse, total, error, fmt="o", color=EVOKED, elinewidth=1.0)
    pool, low, high = (number(result, f"train.pool{end}") for end in ("", "_lo", "_hi"))
    slope, late = number(result, "train.replenished"), number(result, "train.late_pulses")
    if math.isfinite(pool):
        axes.plot([1, total.size], [pool, pool + slope * (total.size - 1)], color=FIT, linewidth=1.1)
        axes.plot(pulse[-int(late) :], total[-int(late) :], "o", color=EVOKED, markerfacecolor="white", zorder=3)
        axes.plot([1, 1], [low, high], color=FIT, linewidth=1.4)
        axes.plot(1, pool, "D", color=FIT, markersize=3.5)
        title = f"pool {fixed(pool)} dF/F (95 %: {fixed(low)} to {fixed(high)})"
        axes.set_title(title, loc="left", color=FIT, fontsize=SMALL)
    else:
        axes.set_title("no pool: see the note in trains.csv", loc="left", color=MUTED, fontsize=SMALL)
    axes.set_ylim(bottom=0.0)
    _label_pulses(axes, "cumulative amplitude (dF/F)")


def _label_pulses(axes: Axes, label: str) -> None:
    axes.locator_params(axis="x", integer=True)
    axes.set_xlabel("pulse")
    axes.set_ylabel(label)


def _draw_boutons(axes: Axes, result: AnalysisResult, *, column: str, label: str, sentence: str) -> None:
    value, low, high = (values(result.trains, column + end) for end in ("", "_lo", "_hi"))
    known = np.isfinite(value)
    if not known.any():
        say_nothing_to_show(axes, sentence)
        return
    ids = values(result.trains, "bouton")
    ends = np.concatenate([value[known], high[known & np.isfinite(high)]])
    top = min(float(ends.max()), 3.0 * float(value[known].max())) * 1.05
    for row in np.flatnonzero(known):
        beyond = not high[row] <= top
        axes.plot([row, row], [max(low[row], 0.0), top if beyond else high[row]], color=EVOKED, linewidth=1.1)
        if beyond:
            axes.plot(row, top, "^", color=EVOKED, markersize=3.5, clip_on=False)
        axes.plot(row, value[row], "o", color=EVOKED, markersize=4.5)
    step = max(1, -(-len(ids) // 25))
    axes.set_xticks(range(0, len(ids), step), [f"{bouton:g}" for bouton in ids[::step]])
    axes.tick_params(axis="x", length=0)
    axes.set_xlim(-0.6, len(ids) - 0.4)
    axes.set_ylim(0.0, top)
    axes.set_xlabel("bouton")
    axes.set_ylabel(label)


def _draw_time_course(axes: Axes, result: AnalysisResult, interval_s: NDArray[np.float64]) -> None:
    ratio, low, high = (_numbers(result, f"pulse_intervals.ppr{end}") for end in ("", "_lo", "_hi"))
    if not np.isfinite(ratio).any():
        say_nothing_to_show(axes, "There is no ratio of all boutons together.")
        return
    axes.vlines(interval_s, low, high, color=INK, linewidth=1.0)
    axes.plot(interval_s, ratio, "o", color=INK)
    at = np.geomspace(interval_s.min() / 1.3, interval_s.max() * 1.3, 200)
    row: dict[str, float] = {}
    words = []
    for name in ("facilitation", "depression"):
        size, time_s = (number(result, f"pulse_intervals.{name}{end}") for end in ("", "_s"))
        row |= {name: size, f"{name}_s": time_s}
        if math.isfinite(size):
            words.append(f"{name} {fixed(size)}" + (f", {duration(time_s)}" if math.isfinite(time_s) else ""))
    if fact(result, "pulse_intervals.model") not in (None, "none"):
        axes.plot(at, ratio_curve(row, at), color=FIT, linewidth=1.1)
    axes.set_title("; ".join(words) or "no time course", loc="left", color=FIT if words else MUTED, fontsize=SMALL)


def _draw_each_ratio(axes: Axes, result: AnalysisResult) -> None:
    bouton, interval_s, ratio = (values(result.intervals, name) for name in ("bouton", "interval_s", "ppr"))
    known = np.isfinite(ratio)
    if not known.any():
        say_nothing_to_show(axes, "No bouton has a paired-pulse ratio.")
        return
    starts: list[tuple[float, float, str]] = []
    chosen = dict(zip(values(result.recovery, "bouton"), texts(result.recovery, "model"), strict=True))
    for one in np.unique(bouton[known]):
        mine = known & (bouton == one)
        follows = chosen.get(one) in ("facilitation", "depression", "both")
        colour = EVOKED if follows else NULL
        axes.plot(interval_s[mine], ratio[mine], "o-", color=colour, linewidth=0.8, markersize=3.0)
        starts.append((float(ratio[mine][0]), float(interval_s[mine][0]), f"{one:g}"))
    _name_lines(axes, starts)
    axes.set_title("blue: with a time course of its own", loc="left", color=MUTED, fontsize=SMALL)


def _name_lines(axes: Axes, starts: list[tuple[float, float, str]]) -> None:
    """Write each bouton's id beside the start of its line, apart from the others."""
    if len(starts) > _MOST_NAMED:
        return
    bottom, top = axes.get_ylim()
    lowest = -math.inf
    for y, x, name in sorted(starts):
        at = max(y, lowest)
        lowest = at + 0.05 * (top - bottom)
        axes.annotate(
            name, (x, at), xytext=(-5.0, 0.0), textcoords="offset points", ha="right", va="center",
            fontsize=SMALL - 0.6, color=MUTED, annotation_clip=False,
        )  # fmt: skip


def _numbers(result: AnalysisResult, path: str) -> NDArray[np.float64]:
    found = fact(result, path)
    return np.array([math.nan if one is None else float(one) for one in found or ()], dtype=np.float64)
