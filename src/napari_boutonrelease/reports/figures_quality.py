"""Quality of the recording: movement, bleaching, noise against the photon limit, and release over the trials."""

from __future__ import annotations

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from numpy.typing import NDArray

from ..analysis.results import AnalysisResult
from .facts import amplitude_grid, silent, values
from .figures_bouton import envelope
from .figures_page import Area, blank_figure
from .figures_style import EVOKED, FIT, HAIRLINE, INK, MUTED, NULL, PULSE_2, SMALL, say_nothing_to_show, styled


@styled
def figure_quality(result: AnalysisResult) -> Figure:
    """Draw movement, baselines, noise against the photon limit, and release over the trials."""
    figure = blank_figure(180.0, 122.0)
    draw_quality(Area.of(figure, margin=4.0), result)
    return figure


def draw_quality(area: Area, result: AnalysisResult) -> None:
    """Draw the four panels."""
    width, height = (area.width - 34.0) / 2, (area.height - 30.0) / 2
    left, right, upper, lower = 13.0, 32.0 + width, 6.0, 22.0 + height
    _draw_movement(
        area.axes(left, upper, width, height * 0.62), area.axes(left, upper + height * 0.7, width, height * 0.3), result
    )
    _draw_baselines(area.axes(right, upper, width, height), result)
    _draw_noise(area.axes(left, lower, width, height), result)
    _draw_release_over_trials(area.axes(right, lower, width, height), result)


def _title(axes: Axes, text: str) -> None:
    axes.set_title(text, loc="left", fontsize=SMALL, color=MUTED, pad=3)


def _draw_movement(upper: Axes, lower: Axes, result: AnalysisResult) -> None:
    """Draw the movement, and below it how well each frame matches the reference."""
    _title(upper, "movement")
    time, used = values(result.drift, "time_s"), values(result.drift, "used") == 1
    if not len(time):
        say_nothing_to_show(upper, "Movement was not measured.")
        lower.set_axis_off()
        return
    for name, colour, label in (("dy_px", EVOKED, "y"), ("dx_px", PULSE_2, "x")):
        upper.plot(
            *envelope(time, np.where(used, values(result.drift, name), np.nan)),
            color=colour,
            linewidth=0.8,
            label=label,
        )
    upper.set_ylabel("shift (px)")
    upper.tick_params(labelbottom=False)
    upper.legend(loc="lower right", bbox_to_anchor=(1.0, 1.0), ncols=2)
    match = values(result.drift, "match")
    lower.plot(*envelope(time, match), color=MUTED, linewidth=0.6)
    if not used.all():
        lower.plot(time[~used], match[~used], "x", color=FIT, markersize=3, markeredgewidth=0.7)
        lower.text(1.0, 1.06, "× left out", transform=lower.transAxes, ha="right", fontsize=SMALL - 0.4, color=FIT)
    lower.set_ylabel("match")
    lower.set_xlabel("time (s)")
    for axes in (upper, lower):
        axes.set_xlim(float(time[0]), float(time[-1]) or 1.0)
        axes.yaxis.set_label_coords(-0.13, 0.5)
        axes.locator_params(axis="y", nbins=4)
    lower.locator_params(axis="y", nbins=2)


def _draw_baselines(axes: Axes, result: AnalysisResult) -> None:
    """Draw each bouton's F0 relative to its start."""
    _title(axes, "baseline F0, relative to its start")
    start = [first_finite(one) for one in result.f0]
    drawn = False
    for one, first in zip(result.f0, start, strict=True):
        if np.isfinite(first) and first > 0:
            step = max(1, len(one) // 400)
            axes.plot(result.time_s[::step], one[::step] / first, color=NULL, linewidth=0.7)
            drawn = True
    if not drawn:
        say_nothing_to_show(axes, "No bouton has a usable baseline.")
        return
    axes.axhline(1.0, color=HAIRLINE, linewidth=0.8, zorder=0)
    axes.set_ylim(bottom=min(0.0, axes.get_ylim()[0]), top=max(1.1, axes.get_ylim()[1]))
    axes.set_xlim(float(result.time_s[0]), float(result.time_s[-1]))
    axes.set_xlabel("time (s)")
    axes.set_ylabel("F0 / F0 at start")


def first_finite(trace: NDArray[np.float64]) -> float:
    """First value of a trace that is not missing; NaN where all are."""
    known = np.flatnonzero(np.isfinite(trace))
    return float(trace[known[0]]) if known.size else float("nan")


def _draw_noise(axes: Axes, result: AnalysisResult) -> None:
    """Draw noise_sd against what photon and read noise alone would give, with one vesicle for scale."""
    _title(axes, "noise")
    limit, noise, q = (values(result.boutons, name) for name in ("noise_photon_limit_sd", "noise_sd", "q"))
    place = np.arange(len(noise))
    if not np.isfinite(noise).any():
        say_nothing_to_show(axes, "Noise could be measured at no bouton.")
        return
    q = np.where(silent(result), np.nan, q)  # what shows no release has no vesicle of its own
    axes.plot(place, q, "_", color=FIT, markersize=7, markeredgewidth=1.2, label="one vesicle (q)")
    axes.plot(place, noise, "o", color=EVOKED, label="noise_sd")
    if np.isfinite(limit).any():
        axes.vlines(place, limit, noise, color=NULL, linewidth=0.8)
        axes.plot(place, limit, "_", color=INK, markersize=7, markeredgewidth=1.0, label="photon limit")
    axes.set_ylim(bottom=0.0)
    ids = values(result.boutons, "bouton")
    step = max(1, -(-len(ids) // 20))
    axes.set_xticks(place[::step], [f"{bouton:g}" for bouton in ids[::step]])
    axes.set_xlabel("bouton")
    axes.set_ylabel("dF/F")
    axes.yaxis.set_label_coords(-0.13, 0.5)
    axes.legend(loc="lower right", bbox_to_anchor=(1.02, 1.0), ncols=3, columnspacing=1.0)


def _draw_release_over_trials(axes: Axes, result: AnalysisResult) -> None:
    """Draw the share of boutons that released at pulse 1, trial by trial, and its running mean."""
    _title(axes, "release over the trials, pulse 1")
    calls = amplitude_grid(result, "called")[:, :, 0]
    known = np.isfinite(calls).sum(axis=0)
    trials = np.flatnonzero(known) + 1
    if not trials.size:
        say_nothing_to_show(axes, "There are no calls to show.")
        return
    share = np.nansum(calls, axis=0)[known > 0] / known[known > 0]
    axes.plot(trials, share, "o", color=NULL, markersize=2.6)
    size = max(len(share) // 8, 3)
    if len(share) >= 2 * size:
        running = np.convolve(share, np.ones(size) / size, mode="valid")
        axes.plot(np.convolve(trials, np.ones(size) / size, mode="valid"), running, color=EVOKED, linewidth=1.4)
        axes.text(
            1.0,
            1.02,
            f"line: mean of {size} trials",
            transform=axes.transAxes,
            ha="right",
            fontsize=SMALL - 0.4,
            color=MUTED,
        )
    axes.set_ylim(-0.03, 1.03)
    axes.locator_params(axis="x", integer=True, min_n_ticks=1)
    axes.set_xlabel("trial")
    axes.set_ylabel("share of boutons")
