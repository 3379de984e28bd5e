"""The list of boutons in their dock, and the trace of the selected one as soon as it is read."""

from __future__ import annotations

from collections.abc import Callable, Iterable
from typing import TYPE_CHECKING, Any

import numpy as np
from matplotlib.figure import Figure
from qtpy.QtCore import Qt
from qtpy.QtGui import QKeyEvent
from qtpy.QtWidgets import QAbstractItemView, QHeaderView, QTableWidget, QTableWidgetItem

from ..reports.words import fixed
from .panel import Panel
from .plots import Palette, Plot, envelope, say

if TYPE_CHECKING:
    import pandas as pd

WAYS = {
    "responses": "responses",
    "shape": "shape alone",
    "both": "responses and shape",
    "hand": "hand",
    "file": "file",
}
"""How a bouton was found, in words."""

_LEFT_PX, _TOP_PX, _RIGHT_PX, _BOTTOM_PX = 54, 6, 10, 34


class BoutonList(QTableWidget):
    """A row a bouton; several can be selected, and Delete takes them away.

    Parameters
    ----------
    delete : callable
        What Delete does.
    """

    def __init__(self, delete: Callable[[], object]) -> None:
        super().__init__(0, 3)
        self._delete = delete
        self.setHorizontalHeaderLabels(["Bouton", "Found by", "p_release"])
        self.verticalHeader().setVisible(False)
        self.setSelectionBehavior(QAbstractItemView.SelectionBehavior.SelectRows)
        self.setSelectionMode(QAbstractItemView.SelectionMode.ExtendedSelection)
        self.setEditTriggers(QAbstractItemView.EditTrigger.NoEditTriggers)
        self.horizontalHeader().setSectionResizeMode(QHeaderView.ResizeMode.ResizeToContents)
        self.horizontalHeader().setSectionResizeMode(1, QHeaderView.ResizeMode.Stretch)
        self.setMinimumHeight(120)
        self.setMaximumHeight(260)
        self.setToolTip("Select boutons here or in the image; Delete takes them away, Ctrl+Z brings them back.")

    def fill(self, features: pd.DataFrame) -> None:
        """Show the features of the marks."""
        self.setRowCount(len(features))
        p_release = features["p_release"] if "p_release" in features else [np.nan] * len(features)
        for row, (bouton, way, p) in enumerate(zip(features["bouton"], features["found_by"], p_release, strict=True)):
            for column, text in enumerate((str(bouton), WAYS.get(way, way), fixed(p))):
                item = self.item(row, column)
                if item is None:
                    item = QTableWidgetItem()
                    item.setFlags(Qt.ItemFlag.ItemIsSelectable | Qt.ItemFlag.ItemIsEnabled)
                    self.setItem(row, column, item)
                item.setText(text)

    def rows(self) -> set[int]:
        """Return the selected rows."""
        return {index.row() for index in self.selectedIndexes()}

    def select_rows(self, rows: Iterable[int]) -> None:
        """Select rows, and bring the first of them into sight."""
        wanted = sorted(rows)
        if set(wanted) == self.rows():
            return
        self.clearSelection()
        for row in wanted:
            for column in range(self.columnCount()):
                item = self.item(row, column)
                if item is not None:
                    item.setSelected(True)
        if wanted and self.item(wanted[0], 0) is not None:
            self.scrollToItem(self.item(wanted[0], 0))

    def keyPressEvent(self, event: QKeyEvent) -> None:
        """Take the selected boutons away on Delete."""
        if event.key() in (Qt.Key.Key_Delete, Qt.Key.Key_Backspace):
            self._delete()
        else:
            super().keyPressEvent(event)


class BoutonTrace(Plot):
    """Brightness of the selected bouton over the whole movie, before anything is measured of it."""

    def __init__(self, panel: Panel) -> None:
        super().__init__(panel, self._draw_trace, height_px=96)
        self._panel: Any = panel
        self.setMaximumHeight(130)

    def _draw_trace(self, figure: Figure, palette: Palette) -> None:
        figure.set_layout_engine("none")  # which would take longer than the rest
        width, height = max(self.width(), 1), max(self.height(), 1)
        axes = figure.add_axes(
            (
                _LEFT_PX / width,
                _BOTTOM_PX / height,
                max(1 - (_LEFT_PX + _RIGHT_PX) / width, 0.1),
                max(1 - (_TOP_PX + _BOTTOM_PX) / height, 0.1),
            )
        )
        model = self._panel.model
        traced, bouton = model.traced, model.selection.bouton
        at = np.flatnonzero(traced.places.bouton == bouton) if traced is not None else np.empty(0, dtype=np.intp)
        if traced is None or not at.size:
            waiting = self._panel.runner.busy and bouton is not None
            say(axes, "Being read" if waiting else "Select a bouton", palette)
            return
        axes.plot(*envelope(traced.recording.timing.frame_start_s, traced.f[at[0]]), color=palette.evoked, lw=0.6)
        axes.set_xlabel("time (s)")
        axes.set_ylabel(f"bouton {bouton}\nF (counts)")
        axes.margins(x=0.0)
