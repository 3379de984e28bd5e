"""A pandas table as Qt shows it: sorted by any column, with the data dictionary in its tooltips."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np
from qtpy.QtCore import QAbstractTableModel, QModelIndex, Qt

from ..flags import FLAGS

if TYPE_CHECKING:
    import pandas as pd

    from ..analysis.column_types import TableDefinition

_ROLE = Qt.ItemDataRole
_RIGHT = int(Qt.AlignmentFlag.AlignRight | Qt.AlignmentFlag.AlignVCenter)


class TableModel(QAbstractTableModel):
    """Rows of one table, in the order in which they are sorted.

    Parameters
    ----------
    definition : TableDefinition
        What its columns mean.
    """

    def __init__(self, definition: TableDefinition) -> None:
        super().__init__()
        self._definition = definition
        self._whole: pd.DataFrame | None = None
        self._order: tuple[str, bool] | None = None
        self.frame: pd.DataFrame | None = None

    def show(self, frame: pd.DataFrame | None) -> None:
        """Take another table; it is sorted as the one before was."""
        self.beginResetModel()
        self._whole = frame
        self._arrange()
        self.endResetModel()

    def rows_where(self, **values: int | None) -> list[int]:
        """Return the rows that hold these values; columns that the table lacks and values None do not count."""
        if self.frame is None:
            return []
        there = np.ones(len(self.frame), dtype=bool)
        for name, value in values.items():
            if value is not None and name in self.frame.columns:
                there &= self.frame[name].to_numpy() == value
        return [int(row) for row in np.flatnonzero(there)]

    def row(self, row: int) -> dict[str, Any]:
        """Return one row as shown, by column."""
        return {} if self.frame is None else dict(self.frame.iloc[row])

    def as_text(self, rows: list[int] | None = None) -> str:
        """Return rows, or all, as text for a spreadsheet: a tab between cells, the header first."""
        if self.frame is None:
            return ""
        frame = self.frame if not rows else self.frame.iloc[rows]
        return str(frame.to_csv(sep="\t", index=False, lineterminator="\n"))

    # what Qt asks for

    def rowCount(self, parent: QModelIndex | None = None) -> int:
        """Return the number of rows."""
        return 0 if self.frame is None or (parent is not None and parent.isValid()) else len(self.frame)

    def columnCount(self, parent: QModelIndex | None = None) -> int:
        """Return the number of columns."""
        return 0 if parent is not None and parent.isValid() else len(self._definition.columns)

    def data(self, index: QModelIndex, role: int = _ROLE.DisplayRole) -> Any:
        """Return the text of a cell, its alignment, or what its flags mean."""
        if self.frame is None or not index.isValid():
            return None
        column = self._definition.columns[index.column()]
        if role == _ROLE.TextAlignmentRole and column.type != "string":
            return _RIGHT
        if role not in (_ROLE.DisplayRole, _ROLE.ToolTipRole):
            return None
        value = self.frame[column.name].iat[index.row()]
        text = cell_text(value)
        if role == _ROLE.DisplayRole:
            return text
        return flags_in_words(text) if column.name == "flags" else None

    def headerData(self, section: int, orientation: Qt.Orientation, role: int = _ROLE.DisplayRole) -> Any:
        """Return a column's name, with its unit and meaning as tooltip."""
        if orientation != Qt.Orientation.Horizontal:
            return None
        column = self._definition.columns[section]
        if role == _ROLE.DisplayRole:
            return column.name
        if role == _ROLE.ToolTipRole:
            return f"{column.meaning} ({column.unit})" if column.unit else column.meaning
        return None

    def sort(self, column: int, order: Qt.SortOrder = Qt.SortOrder.AscendingOrder) -> None:
        """Sort by a column; empty cells come last either way."""
        if not 0 <= column < len(self._definition.columns):
            return
        self.beginResetModel()
        self._order = (self._definition.columns[column].name, order == Qt.SortOrder.AscendingOrder)
        self._arrange()
        self.endResetModel()

    def _arrange(self) -> None:
        self.frame = self._whole
        if self._whole is not None and self._order is not None:
            name, ascending = self._order
            self.frame = self._whole.sort_values(name, ascending=ascending, kind="stable", na_position="last")


def cell_text(value: Any) -> str:
    """Return what a cell shows: four significant digits, nothing where there is no value."""
    if value is None or (isinstance(value, (float, np.floating)) and not np.isfinite(value)):
        return ""
    if isinstance(value, (bool, np.bool_)):
        return str(int(value))
    if isinstance(value, (int, np.integer)):
        return str(value)
    if isinstance(value, (float, np.floating)):
        number = float(value)
        return f"{number:.0f}" if number.is_integer() and abs(number) < 1e6 else f"{number:.4g}"
    text = str(value)
    return "" if text in ("<NA>", "nan") else text


def flags_in_words(codes: str) -> str:
    """Say what flags mean and what to do, a line each."""
    known = [FLAGS[code] for code in codes.split(";") if code in FLAGS]
    return "\n".join(f"{one.code}: {one.meaning} {one.advice}" for one in known)
