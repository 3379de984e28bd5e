"""The map: where the boutons are, coloured by release probability, and the evidence that found them."""

from __future__ import annotations

import math
from typing import Any

import numpy as np
from matplotlib.axes import Axes
from matplotlib.cm import ScalarMappable
from matplotlib.colors import Normalize, PowerNorm
from matplotlib.figure import Figure
from numpy.typing import NDArray

from ..analysis.results import AnalysisResult
from .facts import pixel_size_um, texts, values
from .figures_page import Area, blank_figure
from .figures_style import EVOKED, FIT, INK, MUTED, SMALL, say_nothing_to_show, sequential, styled

_EVIDENCE_TICKS = (0, *(digit * 10.0**power for power in range(6) for digit in (1, 2, 5)))
_BAR_UM = (0.5, 1, 2, 5, 10, 20, 50, 100, 200)
_RING, _LABEL_POINTS, _CROWD = 80.0, 10.5, 20


@styled
def figure_map(result: AnalysisResult) -> Figure:
    """Draw the boutons on the mean image, coloured by p_release."""
    height, width = result.mean_image.shape
    figure = blank_figure(180.0, min(max(150.0 * height / width, 30.0), 180.0) + 15.0)
    draw_map(Area.of(figure, margin=4.0), result)
    return figure


def draw_map(area: Area, result: AnalysisResult) -> None:
    """Draw the map as large as the area allows: image, ids, colour bar, scale bar."""
    bar_mm, foot_mm = 22.0, 7.0
    axes = _image_axes(area, result.mean_image, right_mm=bar_mm, foot_mm=foot_mm)
    if not _show(axes, result.mean_image, percentiles=(1.0, 99.8)):
        say_nothing_to_show(axes, "The mean image is empty.")
        return
    p_release = values(result.boutons, "p_release")
    colours = ScalarMappable(Normalize(0.0, 1.0), sequential())
    _draw_rings(axes, result, colours.to_rgba(p_release), np.isfinite(p_release))
    _draw_ids(axes, result)
    _draw_scale_bar(area, axes, result)
    bar = area.figure.colorbar(colours, cax=_bar_axes(area, axes), label="p_release", ticks=[0, 0.25, 0.5, 0.75, 1])
    bar.outline.set_visible(False)


def draw_evidence(area: Area, result: AnalysisResult) -> None:
    """Draw the detection evidence on a scale that starts at none, with the boutons that were kept."""
    axes = _image_axes(area, result.evidence, right_mm=22.0, foot_mm=7.0)
    seen, cut = result.evidence[np.isfinite(result.evidence)], result.evidence_cut
    if not seen.any() or not cut > 0:
        say_nothing_to_show(axes, "There is no evidence map.")
        return
    # The top never falls near the cut, or noise would look like evidence where nothing releases.
    scale = PowerNorm(0.5, vmin=0.0, vmax=max(float(np.percentile(seen, 99.8)), 4.0 * cut), clip=True)
    _frame(axes)
    image = axes.imshow(result.evidence, cmap="gray_r", norm=scale, interpolation="nearest", aspect="auto")
    by_shape = np.array([way == "shape" for way in texts(result.boutons, "found_by")], dtype=bool)
    y, x = values(result.boutons, "y_px"), values(result.boutons, "x_px")
    for kept, line in ((~by_shape, "-"), (by_shape, "--")):
        if kept.any():
            axes.scatter(
                x[kept], y[kept], s=1.5 * _ring_size(result), facecolors="none", edgecolors=EVOKED, linewidths=0.9,
                linestyles=line,
            )  # fmt: skip
    _draw_ids(axes, result)
    _draw_scale_bar(area, axes, result)
    bar = area.figure.colorbar(
        image, cax=_bar_axes(area, axes), label="log-likelihood ratio", ticks=_apart(_EVIDENCE_TICKS, scale)
    )
    bar.outline.set_visible(False)
    bar.ax.axhline(cut, color=FIT, linewidth=1.4)


def _apart(ticks: tuple[float, ...], scale: Normalize) -> list[float]:
    """Those ticks that lie on the scale and far enough apart to be read, from the top down."""
    kept: list[float] = []
    for tick in sorted(ticks, reverse=True):
        if tick <= (scale.vmax or 0.0) and all(abs(scale(tick) - scale(other)) > 0.12 for other in kept):
            kept.append(tick)
    return kept


def _bar_axes(area: Area, image: Axes) -> Axes:
    """Axes of a colour bar at the right of an image."""
    box = image.get_position()
    height = area.figure.get_figheight() * box.height * 25.4
    top = (1.0 - box.y1) * area.figure.get_figheight() * 25.4 - area.top
    left = box.x1 * area.figure.get_figwidth() * 25.4 - area.left + 3.0
    length = min(height, 45.0)
    return area.axes(left, top + (height - length) / 2, 2.6, length)


def _image_axes(area: Area, image: NDArray[np.float64], *, right_mm: float, foot_mm: float) -> Axes:
    """Axes of the image's aspect at the top of the area, centred in what bars and labels leave."""
    height, width = image.shape
    scale = min((area.width - right_mm) / width, (area.height - foot_mm) / height)
    wide, high = scale * width, scale * height
    return area.axes((area.width - right_mm - wide) / 2, 0.0, wide, high)


def _show(axes: Axes, image: NDArray[np.float64], *, percentiles: tuple[float, float]) -> bool:
    """Show an image with light on dark turned to ink on paper; return whether it holds anything."""
    seen = image[np.isfinite(image)]
    if not seen.size:
        return False
    low, high = np.percentile(seen, percentiles)
    axes.imshow(image, cmap="gray_r", vmin=low, vmax=max(high, low + 1e-9), interpolation="nearest", aspect="auto")
    _frame(axes)
    return True


def _frame(axes: Axes) -> None:
    axes.set_xticks([])
    axes.set_yticks([])
    for spine in axes.spines.values():
        spine.set_visible(True)
        spine.set_color("#b9c2ca")


def _ring_size(result: AnalysisResult) -> float:
    return _RING if len(result.boutons) <= _CROWD else 0.5 * _RING


def _draw_rings(axes: Axes, result: AnalysisResult, colours: Any, known: NDArray[np.bool_]) -> None:
    """Ring each bouton, so that the bouton itself stays visible; dashed where there is no number."""
    y, x = values(result.boutons, "y_px"), values(result.boutons, "x_px")
    size = _ring_size(result)

    def ring(kept: NDArray[np.bool_], colour: Any, width: float, line: str = "-") -> None:
        if kept.any():
            axes.scatter(
                x[kept], y[kept], s=size, facecolors="none", edgecolors=colour, linewidths=width, linestyles=line
            )

    ring(known, INK, 3.0)
    ring(known, colours[known], 2.0)
    ring(~known, "white", 2.4)
    ring(~known, MUTED, 1.1, "--")


def _draw_ids(axes: Axes, result: AnalysisResult) -> None:
    """Write each id beside its bouton, on the side of the axon where there is more room."""
    y, x = values(result.boutons, "y_px"), values(result.boutons, "x_px")
    for row, bouton in enumerate(values(result.boutons, "bouton")):
        dx, dy = _label_offset(row, y, x, axes)
        axes.annotate(
            f"{bouton:g}",
            (float(x[row]), float(y[row])),
            xytext=(dx, dy),
            textcoords="offset points",
            ha="center",
            va="center",
            fontsize=SMALL + 0.6,
            fontweight="bold",
            bbox={"boxstyle": "round,pad=0.12", "facecolor": "white", "alpha": 0.75, "linewidth": 0},
        )


def _label_offset(row: int, y: NDArray[np.float64], x: NDArray[np.float64], axes: Axes) -> tuple[float, float]:
    """Offset in points across the line of neighbours, turned back where it would leave the image."""
    before, after = max(row - 1, 0), min(row + 1, len(y) - 1)
    along_x, along_y = float(x[after] - x[before]), float(y[after] - y[before])
    length = math.hypot(along_x, along_y) or 1.0
    across = (along_y / length, along_x / length) if along_x or along_y else (0.0, 1.0)
    if across[1] < 0:
        across = (-across[0], -across[1])
    crowded = any(
        math.hypot(x[row] - x[other], y[row] - y[other]) < 0.04 * abs(axes.get_xlim()[1] - axes.get_xlim()[0])
        for other in (row - 1, row + 1)
        if 0 <= other < len(y)
    )
    side = -1.0 if crowded and row % 2 else 1.0
    height, width = abs(axes.get_ylim()[0] - axes.get_ylim()[1]), abs(axes.get_xlim()[1] - axes.get_xlim()[0])
    if y[row] < 0.08 * height:
        side = -1.0 if across[1] > 0.3 else side
    if y[row] > 0.92 * height:
        side = 1.0
    dx, dy = side * across[0] * _LABEL_POINTS, side * across[1] * _LABEL_POINTS
    if (x[row] < 0.03 * width and dx < 0) or (x[row] > 0.97 * width and dx > 0):
        dx = -dx
    return dx, dy


def _draw_scale_bar(area: Area, axes: Axes, result: AnalysisResult) -> None:
    """Draw a bar of a round length below the image, where it covers nothing."""
    size_um = pixel_size_um(result)
    box = axes.get_position()
    page_width, page_height = area.figure.get_figwidth() * 25.4, area.figure.get_figheight() * 25.4
    left, below = box.x0 * page_width - area.left, (1.0 - box.y0) * page_height - area.top
    n_columns = abs(axes.get_xlim()[1] - axes.get_xlim()[0])
    mm_per_px = box.width * page_width / n_columns
    if size_um is None:
        area.text(left, below + 1.6, f"{n_columns:g} px wide; pixel size unknown", size=SMALL, color=MUTED)
        return
    wanted = 0.2 * n_columns * size_um
    length_um = max((length for length in _BAR_UM if length <= wanted), default=_BAR_UM[0])
    length_mm = length_um / size_um * mm_per_px
    area.rule(left, below + 2.6, length_mm, color=INK, weight=1.6)
    area.text(left + length_mm + 1.5, below + 2.6, f"{length_um:g} µm", size=SMALL, va="center")
