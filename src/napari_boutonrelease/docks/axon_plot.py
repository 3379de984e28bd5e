"""Any number of the table of boutons along the axon, with its interval where there is one; a click selects."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING, Any

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.lines import Line2D
from numpy.typing import NDArray

from ..analysis.column_types import Column
from ..analysis.columns import BOUTONS
from ..reports.facts import texts, values
from .bouton_marks import FOUND_BY, colour_range, is_probability, sequential
from .panel import Panel
from .plots import Palette, Plot, say

if TYPE_CHECKING:
    import pandas as pd

COLUMNS = {column.name: column for column in BOUTONS.columns}
_NOT_NUMBERS_OF_BOUTONS = frozenset({"bouton", "y_px", "x_px", "y_um", "x_um", "axon_um"})
_MARKERS = {"disc": "o", "diamond": "D", "square": "s", "triangle_up": "^", "star": "*"}
_WORDS = {"both": "responses and shape", "shape": "shape alone"}
_CLICK_PX = 12.0
_ENTRY_PX = 115  # width of one entry of the legend
_UNMEASURED = 0.03  # of the axes' height: where boutons without a number stand


def choices(table: pd.DataFrame) -> list[str]:
    """Return the columns with a number to show, those with an interval first."""
    numeric = [
        column.name
        for column in BOUTONS.columns
        if column.type != "string"
        and column.name not in _NOT_NUMBERS_OF_BOUTONS
        and not column.name.endswith(("_lo", "_hi"))
        and column.name in table
        and np.isfinite(values(table, column.name)).any()
    ]
    return sorted(numeric, key=lambda name: (name != "p_release", f"{name}_lo" not in table))


def title(column: Column) -> str:
    """Name of a column with its unit."""
    return f"{column.name} ({column.unit})" if column.unit else column.name


class AxonPlot(Plot):
    """The plot of the Axon dock."""

    def __init__(self, panel: Panel) -> None:
        super().__init__(panel, self._draw_column, height_px=130)
        self.model = panel.model
        self.column = "p_release"
        self.sentence = "Nothing measured yet: press Analyse in the Recording dock, or Find boutons."
        self._axes: Axes | None = None
        self._bouton = np.empty(0, dtype=np.int64)
        self._at = np.empty((0, 2))
        self.mpl_connect("button_press_event", self._pick)

    def screen_px(self, bouton: int) -> tuple[float, float]:
        """Return where a bouton's point is, in px from the lower left corner."""
        assert self._axes is not None
        at = self._at[np.flatnonzero(self._bouton == bouton)[0]]
        x, y = self._axes.transData.transform(at)
        return float(x), float(y)

    def _draw_column(self, figure: Figure, palette: Palette) -> None:
        axes = figure.add_subplot()
        self._axes, self._bouton, self._at = axes, np.empty(0, dtype=np.int64), np.empty((0, 2))
        table = None if self.model.measured is None else self.model.table("boutons")
        if table is None or not len(table):
            say(axes, self.sentence if table is None else "There are no boutons to show.", palette)
            return
        on_path = bool(np.isfinite(values(table, "axon_um")).any())
        where = values(table, "axon_um") if on_path else values(table, "bouton")
        value = values(table, self.column)
        silent = np.array(["silent" in flags.split(";") for flags in texts(table, "flags")], dtype=bool)
        self._draw_points(axes, table, where, value, silent, palette)
        span = float(np.nanmax(where) - np.nanmin(where)) or 1.0
        axes.set_xlim(float(np.nanmin(where)) - 0.04 * span, float(np.nanmax(where)) + 0.04 * span)
        axes.set_xlabel("distance along the axon (µm)" if on_path else "bouton")
        axes.set_ylabel(title(COLUMNS[self.column]))
        if is_probability(self.column):
            axes.set_ylim(-0.04, 1.04)
        self._bouton = table["bouton"].to_numpy(dtype=np.int64)
        low, high = axes.get_ylim()
        missing = ~np.isfinite(value)
        stand = low + _UNMEASURED * (high - low)
        axes.plot(where[missing], np.full(missing.sum(), stand), "+", color=palette.muted, ms=7, mew=1.4)
        axes.set_ylim(low, high)
        self._at = np.column_stack([where, np.where(missing, stand, value)])
        self._draw_selected(axes, palette)
        self._legend(figure, table, silent, missing, palette)

    def _draw_points(
        self,
        axes: Axes,
        table: pd.DataFrame,
        where: NDArray[np.float64],
        value: NDArray[np.float64],
        silent: NDArray[np.bool_],
        palette: Palette,
    ) -> None:
        names = [f"{self.column}_lo", f"{self.column}_hi"]
        limits = np.array([values(table, name) if name in table else np.full(len(table), np.nan) for name in names])
        low, high = colour_range(self.column, value)
        colours = sequential().map((value - low) / (high - low))
        for row, way in enumerate(texts(table, "found_by")):
            if not math.isfinite(value[row]):
                continue
            if np.isfinite(limits[:, row]).all():
                axes.plot([where[row]] * 2, limits[:, row], color=palette.muted, lw=1.0, zorder=1)
            marker = "x" if silent[row] else _MARKERS[FOUND_BY.get(way, FOUND_BY["hand"])[1]]
            edge = palette.muted if silent[row] else palette.ink
            look: dict[str, Any] = {"mec": edge, "mew": 1.6 if silent[row] else 0.6, "mfc": colours[row]}
            axes.plot(where[row], value[row], marker, ms=6, zorder=2, **look)
        known = value[np.isfinite(value)]
        if known.size and not is_probability(self.column):
            shown = np.concatenate([known, limits[np.isfinite(limits)]])
            # One interval without an end must not make a line of all others.
            top = min(shown.max(), known.max() + 3 * (np.ptp(known) or abs(known.max()) or 1.0))
            bottom = max(shown.min(), known.min() - 3 * (np.ptp(known) or abs(known.max()) or 1.0))
            room = 0.06 * ((top - bottom) or 1.0)
            axes.set_ylim(bottom - room, top + room)

    def _draw_selected(self, axes: Axes, palette: Palette) -> None:
        for at, bouton in zip(self._at, self._bouton, strict=True):
            if bouton == self.model.selection.bouton:
                axes.plot(*at, "o", ms=13, mfc="none", mec=palette.fit, mew=1.6, zorder=3)
                axes.annotate(
                    f"{bouton}", tuple(at), xytext=(8, 8), textcoords="offset points", color=palette.fit, weight="bold"
                )

    def _legend(
        self,
        figure: Figure,
        table: pd.DataFrame,
        silent: NDArray[np.bool_],
        missing: NDArray[np.bool_],
        palette: Palette,
    ) -> None:
        ways = [way for way in FOUND_BY if way in set(texts(table, "found_by"))]
        handles = [
            Line2D([], [], ls="none", marker=_MARKERS[FOUND_BY[way][1]], mfc=palette.muted, mec=palette.ink, mew=0.6)
            for way in ways
        ]
        labels = [_WORDS.get(way, way) for way in ways]
        for there, marker, words in ((silent, "x", "no release seen"), (missing, "+", "no number")):
            if there.any():
                handles.append(Line2D([], [], ls="none", marker=marker, color=palette.muted, mew=1.4))
                labels.append(words)
        figure.legend(
            handles,
            labels,
            loc="outside upper center",
            ncols=max(min(len(labels), round(self.width() / _ENTRY_PX)), 1),
            handletextpad=0.2,
        )

    def _pick(self, event: Any) -> None:
        """Select the bouton whose point was clicked."""
        if self._axes is None or not len(self._at):
            return
        points = self._axes.transData.transform(self._at)
        distance = np.hypot(points[:, 0] - event.x, points[:, 1] - event.y)
        nearest = int(np.nanargmin(distance))
        if distance[nearest] <= _CLICK_PX * self.device_pixel_ratio:
            self.model.select(bouton=int(self._bouton[nearest]))
