"""A comparison as figures: which bouton is which, what changed, and what all recordings say together."""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from functools import partial
from typing import TYPE_CHECKING

import numpy as np
from matplotlib.figure import Figure
from matplotlib.lines import Line2D

from ..analysis.fitted_curves import ratio_curve
from .facts import values
from .figures_page import Area, blank_figure
from .figures_style import EVOKED, FIT, HAIRLINE, INK, MUTED, NULL, PULSE_2, SMALL, say_nothing_to_show, styled

if TYPE_CHECKING:
    import pandas as pd
    from matplotlib.axes import Axes
    from numpy.typing import NDArray

    from ..comparison import Comparison

    Floats = NDArray[np.float64]

SERIES = (EVOKED, PULSE_2, "#63b8a8", "#9c3a76", FIT, "#1d2833")
"""Colours of recordings, in their order; markers differ, too."""

MARKERS = ("o", "s", "D", "^", "v", "P")
_SITES = (("first recording alone", NULL, "s"), ("all recordings together", EVOKED, "o"))
_PARABOLAS_A_ROW, _MOST_PARABOLAS = 4, 16


def comparison_figures(comparison: Comparison) -> dict[str, Callable[[], Figure]]:
    """List the figures of a comparison by file stem; each is drawn when it is called."""
    listing: dict[str, Callable[[], Figure]] = {
        "matches": partial(_figure, comparison, draw_matches, matches_mm(comparison)),
        "release": partial(_figure, comparison, draw_release, 70.0),
        "changes": partial(_figure, comparison, draw_changes, changes_mm(comparison)),
        "sites": partial(_figure, comparison, draw_sites, 62.0),
        "inverse_cv2": partial(_figure, comparison, draw_inverse_cv2, 70.0),
        "variance_mean": partial(_figure, comparison, draw_parabolas, parabolas_mm(comparison)),
    }
    if len(comparison.recovery):
        listing["pulse_intervals"] = partial(_figure, comparison, draw_intervals, 70.0)
    return listing


@styled
def _figure(comparison: Comparison, draw: Callable[[Area, Comparison], None], height_mm: float) -> Figure:
    figure = blank_figure(180.0, height_mm + 8.0)
    draw(Area.of(figure, margin=4.0), comparison)
    return figure


def matches_mm(comparison: Comparison) -> float:
    """Height that the mean images need, mm."""
    tall = max(one.mean_image.shape[0] / one.mean_image.shape[1] for one in comparison.recordings)
    width = _image_width_mm(comparison, 172.0)
    rows = math.ceil(len(comparison.recordings) / _columns(comparison))
    return rows * (min(float(tall) * width, 90.0) + 8.0)


def draw_matches(area: Area, comparison: Comparison) -> None:
    """Draw each mean image with the ids of the first recording at the boutons that were found there."""
    columns = _columns(comparison)
    width = _image_width_mm(comparison, area.width)
    high = (area.height / math.ceil(len(comparison.recordings) / columns)) - 8.0
    for k, recording in enumerate(comparison.recordings):
        row, column = divmod(k, columns)
        rows, wide = recording.mean_image.shape
        scale = min(width / wide, high / rows)
        axes = area.axes(column * (width + 4.0), row * (high + 8.0) + 5.0, scale * wide, scale * rows)
        _show_matches(axes, comparison, k)


def _show_matches(axes: Axes, comparison: Comparison, k: int) -> None:
    recording = comparison.recordings[k]
    image = recording.mean_image
    seen = image[np.isfinite(image)]
    low, high = np.percentile(seen, (1.0, 99.8)) if seen.size else (0.0, 1.0)
    axes.imshow(image, cmap="gray_r", vmin=low, vmax=max(high, low + 1e-9), interpolation="nearest", aspect="auto")
    axes.set_xticks([])
    axes.set_yticks([])
    position = recording.position_px
    alone = comparison.matches.unmatched(k, len(position))
    if alone.size:
        axes.plot(position[alone, 1], position[alone, 0], "x", color=MUTED, markersize=4)
    for row, there in enumerate(comparison.matches.row[:, k]):
        if there < 0:
            continue
        everywhere = bool((comparison.matches.row[row] >= 0).all())
        colour = SERIES[0] if everywhere else MUTED
        y, x = position[there]
        axes.plot(x, y, "o", markersize=7, markerfacecolor="none", color=colour, linestyle="none")
        axes.annotate(
            str(comparison.recordings[0].bouton[row]), (x, y), xytext=(4.5, 3.5), textcoords="offset points",
            fontsize=SMALL, color=colour, clip_on=True,
        )  # fmt: skip
    axes.set_title(recording.name[:60], loc="left", pad=2.5)


def draw_release(area: Area, comparison: Comparison) -> None:
    """Draw each bouton's release probability over the recordings, with intervals."""
    axes = area.axes(13.0, 6.0, area.width - 15.0, area.height - 19.0)
    plot_release(axes, comparison)
    axes.legend(
        handles=recording_handles(comparison), loc="lower left", bbox_to_anchor=(0.0, 1.01),
        ncols=min(len(comparison.recordings), 4),
    )  # fmt: skip


def plot_release(axes: Axes, comparison: Comparison) -> None:
    """Plot each bouton's release probability over the recordings; boutons stand at 0, 1, ... in their order."""
    conditions, ids = comparison.conditions, values(comparison.joint, "bouton")
    n = len(comparison.recordings)
    for row, bouton in enumerate(ids):
        mine = conditions[values(conditions, "bouton") == bouton]
        at = [row + 0.5 * (_order(comparison, name) - (n - 1) / 2) / n for name in mine["recording"]]
        p = values(mine, "p_release_own")
        axes.plot(at, p, "-", color=NULL, linewidth=0.8, zorder=1)
        for x, k, lo, hi, value in zip(
            at, (_order(comparison, name) for name in mine["recording"]), values(mine, "p_release_own_lo"),
            values(mine, "p_release_own_hi"), p, strict=True,
        ):  # fmt: skip
            axes.plot([x, x], [lo, hi], color=_colour(k), linewidth=1.1)
            axes.plot(x, value, _marker(k), color=_colour(k), markersize=4.5)
    axes.set_ylim(-0.03, 1.03)
    axes.set_ylabel("p_release")
    _name_boutons(axes, ids)


def changes_mm(comparison: Comparison) -> float:
    """Height that the changes need, mm."""
    return 18.0 + 4.2 * max(len(comparison.changes), 3)


def draw_changes(area: Area, comparison: Comparison) -> None:
    """Draw change of p_release, ratio of q and ratio of PPR: a row a bouton and pair of recordings."""
    changes = comparison.changes
    panels = (
        ("p_release_change", "change of p_release", 0.0, False),
        ("q_ratio", "ratio of q", 1.0, True),
        ("ppr_ratio", "ratio of paired-pulse ratios", 1.0, True),
    )
    left, gap = 24.0, 6.0
    width = (area.width - left - 2 * gap) / 3
    for index, (column, title, none, logarithmic) in enumerate(panels):
        axes = area.axes(left + index * (width + gap), 6.0, width, area.height - 18.0)
        _forest(axes, changes, column, none=none, logarithmic=logarithmic)
        axes.set_xlabel(title)
        axes.set_ylim(len(changes) - 0.4, -0.6)
        if index:
            axes.set_yticks([])
            continue
        several = len(comparison.recordings) > 2
        labels = [
            f"{bouton:g}" + (f"  {a[:9]} → {b[:9]}" if several else "")
            for bouton, a, b in zip(
                values(changes, "bouton"), changes["recording_a"], changes["recording_b"], strict=True
            )
        ]
        axes.set_yticks(range(len(changes)), labels)
        axes.tick_params(axis="y", length=0)
        if not several:
            axes.set_ylabel("bouton")


def _forest(axes: Axes, changes: pd.DataFrame, column: str, *, none: float, logarithmic: bool) -> None:
    value, lo, hi = (values(changes, column + end) for end in ("", "_lo", "_hi"))
    known = np.isfinite(value) & ((value > 0) if logarithmic else True)
    if not known.any():
        say_nothing_to_show(axes, "No bouton has both.")
        return
    axes.axvline(none, color=MUTED, linewidth=0.7, zorder=1)
    lowest, highest = (0.1, 10.0) if logarithmic else (-1.0, 1.0)
    for row in np.flatnonzero(known):
        ends = np.nan_to_num([lo[row], hi[row]], nan=0.0)
        ends[1] = highest * 2 if not np.isfinite(hi[row]) else ends[1]
        clear = bool(lo[row] > none or hi[row] < none)
        axes.plot(np.maximum(ends, lowest / 2) if logarithmic else ends, [row, row], color=EVOKED, linewidth=1.1)
        axes.plot(value[row], row, "o", color=EVOKED, markerfacecolor=EVOKED if clear else "white", markersize=4.5)
    if logarithmic:
        axes.set_xscale("log", base=2)
        reach = float(np.nanmax(np.abs(np.log(np.concatenate([value[known], [1.4]])))))
        reach = max(reach, *(abs(math.log(end)) for end in (*lo[known], *hi[known]) if 0.1 < end < 10.0))
        axes.set_xlim(math.exp(-1.1 * reach), math.exp(1.1 * reach))
        ticks = [t for t in (0.125, 0.25, 0.5, 0.7, 1, 1.4, 2, 4, 8) if abs(math.log(t)) <= 1.1 * reach]
        axes.set_xticks(ticks, [f"{tick:g}" for tick in ticks])
        axes.minorticks_off()
    else:
        axes.set_xlim(-1.0, 1.0)


def draw_sites(area: Area, comparison: Comparison) -> None:
    """Draw the numbers of sites that are not excluded: all recordings together beside the first alone."""
    axes = area.axes(13.0, 6.0, area.width - 15.0, area.height - 19.0)
    if plot_sites(axes, comparison):
        axes.legend(handles=sites_handles(), loc="lower left", bbox_to_anchor=(0.0, 1.01), ncols=2)


def plot_sites(axes: Axes, comparison: Comparison) -> bool:
    """Plot the numbers of sites as `draw_sites` does, boutons at 0, 1, ...; tell whether there was any."""
    joint, first = comparison.joint, comparison.recordings[0]
    ids = values(joint, "bouton")
    drawn = False
    for table, shift, (_, colour, marker) in zip((first.boutons, joint), (-0.17, 0.17), _SITES, strict=True):
        best, lo, hi = (values(table, "n_sites" + end) for end in ("", "_lo", "_hi"))
        known = np.isfinite(best)
        drawn |= bool(known.any())
        for row in np.flatnonzero(known):
            axes.plot([row + shift] * 2, [lo[row], hi[row]], color=colour, linewidth=2.2, solid_capstyle="round")
        axes.plot(np.flatnonzero(known) + shift, best[known], marker, color=colour, markersize=5, linestyle="none")
    if not drawn:
        say_nothing_to_show(axes, "No bouton releases.")
        return False
    axes.set_ylim(0.4, comparison.settings.n_max + 0.6)
    axes.set_yticks(range(1, comparison.settings.n_max + 1))
    axes.grid(axis="y", color=HAIRLINE, linewidth=0.5)
    axes.set_ylabel("n_sites")
    _name_boutons(axes, ids)
    return True


def sites_handles(*, most_letters: int = 40) -> list[Line2D]:
    """Return what the marks of `plot_sites` mean, for a legend; names end after so many letters."""
    return [Line2D([], [], color=colour, marker=marker, label=name[:most_letters]) for name, colour, marker in _SITES]


def draw_inverse_cv2(area: Area, comparison: Comparison) -> None:
    """Draw the ratio of 1/CV² against that of the means: along the diagonal release changed, along 1 the vesicle."""
    side = min(area.height - 19.0, 60.0)
    axes = area.axes(16.0, 5.0, side, side)
    changes = comparison.changes
    x, y = values(changes, "amplitude_ratio"), values(changes, "inverse_cv2_ratio")
    known = np.isfinite(x) & np.isfinite(y) & (x > 0) & (y > 0)
    words = area.part(side + 26.0, 5.0, area.width - side - 26.0, side)
    words.paragraph(
        0.0, 0.0, words.width,
        "A change of the vesicle's size alone leaves 1/CV² as it was: points on the level line. A change of the number "
        "of sites moves both alike: points on the diagonal. A change of release probability moves 1/CV² at least as "
        "much as the mean: points at or beyond the diagonal. It holds if sites are alike and the reporter is linear.",
        color=MUTED,
    )  # fmt: skip
    if not known.any():
        say_nothing_to_show(axes, "No bouton has a 1/CV² in two recordings.")
        return
    limits = [
        (values(changes, name + "_lo"), values(changes, name + "_hi"))
        for name in ("amplitude_ratio", "inverse_cv2_ratio")
    ]
    reach = max(1.5, float(np.exp(np.abs(np.log(np.concatenate([x[known], y[known]]))).max())) * 1.6)
    axes.plot([1 / reach, reach], [1.0, 1.0], color=MUTED, linewidth=0.7)
    axes.plot([1 / reach, reach], [1 / reach, reach], color=MUTED, linewidth=0.7)
    for row in np.flatnonzero(known):
        (x_lo, x_hi), (y_lo, y_hi) = ((lo[row], hi[row]) for lo, hi in limits)
        axes.plot(_within(x_lo, x_hi, reach), [y[row]] * 2, color=NULL, linewidth=0.7)
        axes.plot([x[row]] * 2, _within(y_lo, y_hi, reach), color=NULL, linewidth=0.7)
        axes.plot(x[row], y[row], "o", color=EVOKED, markersize=4.5)
        axes.annotate(f"{values(changes, 'bouton')[row]:g}", (x[row], y[row]), xytext=(3.5, 3.0),
                      textcoords="offset points", fontsize=SMALL, color=INK)  # fmt: skip
    for scale, limit in ((axes.set_xscale, axes.set_xlim), (axes.set_yscale, axes.set_ylim)):
        scale("log")
        limit(1 / reach, reach)
    axes.set_xlabel("mean amplitude, later / earlier")
    axes.set_ylabel("1/CV², later / earlier")


def parabolas_mm(comparison: Comparison) -> float:
    """Height that the parabolas need, mm."""
    shown = min(len(_with_parabola(comparison)), _MOST_PARABOLAS)
    return 8.0 + 44.0 * max(math.ceil(shown / _PARABOLAS_A_ROW), 1)


def draw_parabolas(area: Area, comparison: Comparison) -> None:
    """Draw variance against mean with the fitted parabola, a panel a bouton that has one."""
    rows = _with_parabola(comparison)[:_MOST_PARABOLAS]
    if not rows:
        say_nothing_to_show(area.axes(13.0, 4.0, area.width - 15.0, 30.0), "No bouton has enough conditions.")
        return
    width = area.width / _PARABOLAS_A_ROW
    for index, row in enumerate(rows):
        line, column = divmod(index, _PARABOLAS_A_ROW)
        axes = area.axes(column * width + 11.0, line * 44.0 + 6.0, width - 14.0, 27.0)
        _parabola(axes, comparison, row)
        if column == 0:
            axes.set_ylabel("variance (dF/F)²")
        if index >= len(rows) - _PARABOLAS_A_ROW:
            axes.set_xlabel("mean (dF/F)")


def _with_parabola(comparison: Comparison) -> list[int]:
    return [row for row, one in enumerate(comparison.fits) if np.isfinite(one.variance_mean.q.value)]


def _parabola(axes: Axes, comparison: Comparison, row: int) -> None:
    one = comparison.fits[row]
    fit = one.variance_mean
    for k, recording in enumerate(one.there):
        mine = (fit.recording == k) & np.isfinite(fit.mean) & np.isfinite(fit.variance)
        if mine.any():
            axes.errorbar(
                fit.mean[mine], fit.variance[mine], xerr=fit.mean_se[mine], yerr=fit.variance_se[mine],
                color=_colour(recording), marker=_marker(recording), markersize=4, linestyle="none", linewidth=0.8,
            )  # fmt: skip
    top = 1.25 * float(np.nanmax(fit.mean))
    mean = np.linspace(0.0, max(top, 1e-9), 60)
    factor = 1.0 + comparison.settings.q_cv**2
    bend = 0.0 if fit.n_sites is None else 1.0 / fit.n_sites
    axes.plot(mean, fit.q.value * factor * mean - bend * mean**2, color=FIT, linewidth=1.0)
    axes.set_xlim(0.0, max(top, 1e-9))
    axes.set_ylim(bottom=min(0.0, float(np.nanmin(fit.variance - fit.variance_se))))
    number = "n open" if fit.n_sites is None else f"n {fit.n_sites:.1f}"
    axes.set_title(f"bouton {comparison.recordings[0].bouton[row]}: q {fit.q.value:.2f}, {number}", loc="left", pad=2.5,
                   fontsize=SMALL)  # fmt: skip


def draw_intervals(area: Area, comparison: Comparison) -> None:
    """Draw the paired-pulse ratio against the interval, all boutons, with each chosen curve."""
    axes = area.axes(13.0, 6.0, area.width - 15.0, area.height - 19.0)
    intervals, recovery = comparison.intervals, comparison.recovery
    gap, ratio = values(intervals, "interval_s"), values(intervals, "ppr")
    axes.axhline(1.0, color=MUTED, linewidth=0.7)
    axes.plot(1e3 * gap, ratio, "o", color=EVOKED, markersize=3.5, alpha=0.8)
    smooth = np.geomspace(gap.min() / 1.5, gap.max() * 1.5, 120)
    for row in range(len(recovery)):
        axes.plot(1e3 * smooth, _curve(recovery, row, smooth), color=FIT, linewidth=0.8, alpha=0.7)
    axes.set_xscale("log")
    axes.set_xlabel("pulse interval (ms)")
    axes.set_ylabel("paired-pulse ratio")
    axes.set_ylim(bottom=0.0)


def _curve(recovery: pd.DataFrame, row: int, gap: Floats) -> Floats:
    if recovery["model"].iloc[row] == "none":
        return np.full(gap.shape, np.nan)
    names = ("facilitation", "facilitation_s", "depression", "depression_s")
    return ratio_curve({name: float(values(recovery, name)[row]) for name in names}, gap)


def _within(low: float, high: float, reach: float) -> list[float]:
    return [low if low > 1 / reach else 1 / reach, high if high < reach else reach]


def _order(comparison: Comparison, name: str) -> int:
    return [recording.name for recording in comparison.recordings].index(name)


def _colour(k: int) -> str:
    return SERIES[k % len(SERIES)]


def _marker(k: int) -> str:
    return MARKERS[k % len(MARKERS)]


def _name_boutons(axes: Axes, ids: Sequence[float] | Floats) -> None:
    step = max(1, -(-len(ids) // 30))
    axes.set_xticks(range(0, len(ids), step), [f"{bouton:g}" for bouton in ids[::step]])
    axes.tick_params(axis="x", length=0)
    axes.set_xlim(-0.6, len(ids) - 0.4)
    axes.set_xlabel("bouton of the first recording")


def recording_handles(comparison: Comparison, *, most_letters: int = 40) -> list[Line2D]:
    """Return what the marks of `plot_release` mean, for a legend; names end after so many letters."""
    return [
        Line2D([], [], color=_colour(k), marker=_marker(k), linestyle="none", label=recording.name[:most_letters])
        for k, recording in enumerate(comparison.recordings)
    ]


def _columns(comparison: Comparison) -> int:
    tall = max(one.mean_image.shape[0] / one.mean_image.shape[1] for one in comparison.recordings)
    return 1 if tall < 0.25 else min(2, len(comparison.recordings))


def _image_width_mm(comparison: Comparison, width_mm: float) -> float:
    columns = _columns(comparison)
    return (width_mm - 4.0 * (columns - 1)) / columns
