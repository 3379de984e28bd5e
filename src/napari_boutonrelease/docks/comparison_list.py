"""The list of recordings that are compared: added, named, ordered and taken out."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path
from typing import TYPE_CHECKING

from napari.utils import notifications
from qtpy.QtCore import Qt
from qtpy.QtGui import QDragEnterEvent, QDragMoveEvent, QDropEvent
from qtpy.QtWidgets import (
    QAbstractItemView,
    QFileDialog,
    QHBoxLayout,
    QHeaderView,
    QMenu,
    QPushButton,
    QTableWidget,
    QTableWidgetItem,
    QToolButton,
    QVBoxLayout,
    QWidget,
)

from ..errors import InputError
from .compared import Entry, compared_of

if TYPE_CHECKING:
    from .panel import Panel

_ROW_PX = 22
_PRESENT = "this window"


class ComparisonList(QWidget):
    """The recordings with the buttons that change their list.

    Parameters
    ----------
    panel : Panel
        The dock it belongs to.
    """

    def __init__(self, panel: Panel) -> None:
        super().__init__()
        self.model, self.compared = panel.model, compared_of(panel.model)
        self._filling = False
        self.table = RecordingTable(self.add)
        self.table.cellChanged.connect(self._rename)
        self.table.itemSelectionChanged.connect(self._show_state)
        self.add_button = QPushButton("Add results...")
        self.add_button.setToolTip("Add a recording that was analysed before. Folders can be dropped on the list, too.")
        self.menu = QMenu(self.add_button)
        self.menu.addAction("Folder of results...", self._ask_folder)
        self.menu.addAction("analysis.json...", self._ask_file)
        self.present_action = self.menu.addAction("Analysis in this window", self._add_present)
        self.menu.aboutToShow.connect(self._show_state)
        self.add_button.setMenu(self.menu)
        self.remove_button = tool_button("✕", "Take the selected recording out of the list.", self._remove)
        self.up_button = tool_button("▲", "Move the selected recording up.", self._up)
        self.down_button = tool_button("▼", "Move the selected recording down.", self._down)
        row = QHBoxLayout()
        row.addWidget(self.add_button)
        row.addStretch(1)
        for button in (self.up_button, self.down_button, self.remove_button):
            row.addWidget(button)
        column = QVBoxLayout(self)
        column.setContentsMargins(0, 0, 0, 0)
        column.addWidget(self.table, 1)
        column.addLayout(row)
        panel.link(self.compared.entries_changed, self._show)
        panel.link(self.model.measured_changed, self._follow_present)
        panel.link(self.model.recording_changed, self._follow_present)
        self._show()
        self._follow_present()

    def near(self) -> Path:
        """Return where to look for files: beside the last results, else beside the movie."""
        folders = [entry.folder for entry in self.compared.entries if entry.folder is not None]
        files = () if self.model.movie is None else self.model.movie.files
        return folders[-1].parent if folders else files[0].parent if files else Path.cwd()

    def add(self, path: str) -> None:
        """Add results, or say why that cannot be done."""
        try:
            self.compared.add_folder(path)
        except InputError as error:
            notifications.show_error(str(error))

    def _follow_present(self) -> None:
        if self.model.measured is None:
            self.compared.drop_present()
        elif self.model.movie is not None:
            self.compared.offer_present(self.model.movie.name)

    def _show(self) -> None:
        self._filling = True
        self.table.show_entries(self.compared.entries)
        self._filling = False
        self._show_state()

    def _show_state(self) -> None:
        n, index = len(self.compared.entries), self.table.currentRow()
        chosen = 0 <= index < n and bool(self.table.selectedItems())
        self.remove_button.setEnabled(chosen)
        self.up_button.setEnabled(chosen and index > 0)
        self.down_button.setEnabled(chosen and index < n - 1)
        self.present_action.setEnabled(self.model.measured is not None and not self.compared.has_present)

    def _ask_folder(self) -> None:
        path = QFileDialog.getExistingDirectory(self, "Folder of results", str(self.near()))
        if path:
            self.add(path)

    def _ask_file(self) -> None:
        path, _ = QFileDialog.getOpenFileName(self, "Saved analysis", str(self.near()), "Analyses (analysis.json)")
        if path:
            self.add(path)

    def _add_present(self) -> None:
        if self.model.movie is not None:
            self.compared.add_present(self.model.movie.name)

    def _remove(self) -> None:
        self.compared.remove(self.table.currentRow())

    def _up(self) -> None:
        self._move(-1)

    def _down(self) -> None:
        self._move(1)

    def _move(self, by: int) -> None:
        index = self.table.currentRow()
        self.compared.move(index, by)
        self.table.selectRow(index + by)

    def _rename(self, row: int, column: int) -> None:
        if not self._filling and column == 0:
            self.compared.rename(row, self.table.item(row, 0).text())
            self._show()  # an empty name is not taken


class RecordingTable(QTableWidget):
    """Names, which can be edited, and where each recording comes from; folders can be dropped on it.

    Parameters
    ----------
    on_drop : callable
        Called with the path of each folder or file that was dropped.
    """

    def __init__(self, on_drop: Callable[[str], None]) -> None:
        super().__init__(0, 2)
        self._on_drop = on_drop
        self.setHorizontalHeaderLabels(["recording", "from"])
        self.horizontalHeader().setSectionResizeMode(0, QHeaderView.ResizeMode.Interactive)
        self.horizontalHeader().resizeSection(0, 130)
        self.horizontalHeader().setStretchLastSection(True)
        self.verticalHeader().hide()
        self.verticalHeader().setDefaultSectionSize(_ROW_PX)
        self.setSelectionBehavior(QAbstractItemView.SelectionBehavior.SelectRows)
        self.setSelectionMode(QAbstractItemView.SelectionMode.SingleSelection)
        self.setTextElideMode(Qt.TextElideMode.ElideLeft)  # the end of a path tells most
        self.setWordWrap(False)
        self.setTabKeyNavigation(False)
        self.setMinimumHeight(4 * _ROW_PX)
        self.setMaximumHeight(7 * _ROW_PX)
        self.setAcceptDrops(True)
        self.setToolTip("Recordings of the same boutons, in order. Double-click a name to change it.")

    def show_entries(self, entries: tuple[Entry, ...]) -> None:
        """Show a list of recordings; the selected row stays selected."""
        row = self.currentRow() if self.selectedItems() else -1
        self.setRowCount(len(entries))
        for index, entry in enumerate(entries):
            name = QTableWidgetItem(entry.name)
            source = QTableWidgetItem(_PRESENT if entry.folder is None else "/".join(entry.folder.parts[-2:]))
            source.setFlags(source.flags() & ~Qt.ItemFlag.ItemIsEditable)
            source.setToolTip("The analysis in this window" if entry.folder is None else str(entry.folder))
            self.setItem(index, 0, name)
            self.setItem(index, 1, source)
        if 0 <= row < len(entries):
            self.selectRow(row)
        else:
            self.clearSelection()

    def dragEnterEvent(self, event: QDragEnterEvent) -> None:
        """Take folders and files."""
        if event.mimeData().hasUrls():
            event.acceptProposedAction()

    def dragMoveEvent(self, event: QDragMoveEvent) -> None:
        """Take them anywhere on the list."""
        event.acceptProposedAction()

    def dropEvent(self, event: QDropEvent) -> None:
        """Add what was dropped."""
        event.acceptProposedAction()
        for url in event.mimeData().urls():
            self._on_drop(url.toLocalFile())


def tool_button(text: str, tip: str, on_click: Callable[[], object]) -> QToolButton:
    """Make a small button."""
    button = QToolButton()
    button.setText(text)
    button.setToolTip(tip)
    button.clicked.connect(on_click)
    return button
