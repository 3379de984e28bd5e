"""How the docks show tables of results."""

from __future__ import annotations

from typing import TYPE_CHECKING

from qtpy.QtCore import QItemSelectionModel, Qt
from qtpy.QtWidgets import QAbstractItemView, QTableView

if TYPE_CHECKING:
    from ..analysis.column_types import TableDefinition
    from .table_model import TableModel

_ROW_PX = 22


def table_view(rows: TableModel, definition: TableDefinition, *, first: tuple[str, ...] = ()) -> QTableView:
    """Return a view of a table that can be sorted, with some columns first."""
    view = QTableView()
    view.setModel(rows)
    view.setSelectionBehavior(QAbstractItemView.SelectionBehavior.SelectRows)
    view.setEditTriggers(QAbstractItemView.EditTrigger.NoEditTriggers)
    view.setHorizontalScrollMode(QAbstractItemView.ScrollMode.ScrollPerPixel)
    view.setTabKeyNavigation(False)  # Tab leads on to the buttons
    view.verticalHeader().setVisible(False)
    view.verticalHeader().setDefaultSectionSize(_ROW_PX)
    header = view.horizontalHeader()
    header.setSectionsMovable(True)
    for place, column in enumerate(first):
        header.moveSection(header.visualIndex(definition.names.index(column)), place)
    header.setSortIndicatorShown(True)
    header.setSortIndicator(-1, Qt.SortOrder.AscendingOrder)
    view.setSortingEnabled(True)
    return view


def select_rows(view: QTableView, rows: list[int]) -> None:
    """Select some rows, and no others, and bring the first into sight."""
    selection = view.selectionModel()
    selection.clearSelection()
    flags = QItemSelectionModel.SelectionFlag.Select | QItemSelectionModel.SelectionFlag.Rows
    for row in rows:
        selection.select(view.model().index(row, 0), flags)
    if rows:
        view.scrollTo(view.model().index(rows[0], max(view.columnAt(0), 0)))
