"""Plots side by side where there is room, else below one another."""

from __future__ import annotations

from collections.abc import Sequence

from qtpy.QtCore import QSize
from qtpy.QtGui import QResizeEvent
from qtpy.QtWidgets import QGridLayout, QSizePolicy, QWidget


class PlotGrid(QWidget):
    """A grid whose number of columns follows its width.

    Parameters
    ----------
    plots : sequence of (QWidget, int)
        Each with its share of the width where all stand in one row. The last one takes what is left of its row.
    least_px : int
        Width that a column needs on average.
    last_px : int
        Width that the last plot needs for all to stand in one row.
    """

    def __init__(self, plots: Sequence[tuple[QWidget, int]], *, least_px: int, last_px: int = 0) -> None:
        super().__init__()
        self._least_px, self._last_px = least_px, last_px
        self._plots = tuple(plots)
        self._left_out: set[QWidget] = set()
        self._grid = QGridLayout(self)
        self._grid.setContentsMargins(0, 0, 0, 0)
        self._grid.setSpacing(4)
        self.setSizePolicy(QSizePolicy.Policy.Expanding, QSizePolicy.Policy.Expanding)
        self._now: tuple[int, int] = (0, 0)
        self._arrange()

    def offer(self, plot: QWidget, there: bool) -> None:
        """Show one of the plots, or leave no room for it."""
        if there == (plot in self._left_out):
            self._left_out ^= {plot}
            self._now = (0, 0)
            self._arrange()

    def minimumSizeHint(self) -> QSize:
        """Need no more width than one column: in less width there will be fewer of them."""
        widths = [plot.minimumSizeHint().expandedTo(plot.minimumSize()).width() for plot, _ in self._plots]
        return QSize(max(widths, default=0), self._grid.minimumSize().height())

    def sizeHint(self) -> QSize:
        """Ask for no more than needed: plots grow into whatever there is."""
        return self.minimumSizeHint()

    def resizeEvent(self, event: QResizeEvent) -> None:
        """Choose as many columns as are wide enough: all plots in one row, or half of them, or one."""
        super().resizeEvent(event)
        self._arrange()

    def _arrange(self) -> None:
        shown = [(plot, share) for plot, share in self._plots if plot not in self._left_out]
        n = len(shown)
        columns = max(next((one for one in (n, -(-n // 2), -(-n // 3)) if self._has_room(one, shown)), 1), 1)
        if (n, columns) == self._now:
            return
        self._now = (n, columns)
        while self._grid.count():
            self._grid.takeAt(0)
        for column in range(len(self._plots)):
            self._grid.setColumnStretch(column, 0)
        for plot in self._left_out:
            plot.hide()
        for place, (plot, share) in enumerate(shown):
            row, column = divmod(place, columns)
            free = columns - column if place == n - 1 else 1  # the last one takes what is left of its row
            self._grid.addWidget(plot, row, column, 1, free)
            self._grid.setColumnStretch(column, share if columns == n else 1)
            plot.show()
        self.updateGeometry()  # fewer rows need less height

    def _has_room(self, columns: int, shown: Sequence[tuple[QWidget, int]]) -> bool:
        shares = [share for _, share in shown]
        last_px = self.width() * shares[-1] / sum(shares) if shares else 0
        enough = columns < len(shown) or last_px >= self._last_px
        return enough and self.width() >= columns * self._least_px
