"""Several plots that want to be drawn at once take turns, so that together they do not block the window."""

from __future__ import annotations

import time
from typing import Any
from weakref import WeakSet

from qtpy.compat import isalive
from qtpy.QtCore import QTimer

_TURN_S = 0.03
"""A plot does not begin to draw once others have drawn for as long in the same turn of the event loop."""


class Turns:
    """Says which plots may draw now; the others are painted anew in a next turn of the event loop."""

    def __init__(self) -> None:
        self._begun_s: float | None = None
        self._waiting: WeakSet[Any] = WeakSet()

    def may_draw(self, plot: Any) -> bool:
        """Tell whether a plot may draw now; if not, it is asked to paint itself again soon."""
        now = time.monotonic()
        if self._begun_s is None:
            self._begun_s = now
            QTimer.singleShot(0, self._end)
        if now - self._begun_s < _TURN_S:
            return True
        self._waiting.add(plot)
        return False

    def _end(self) -> None:
        self._begun_s = None
        waiting, self._waiting = self._waiting, WeakSet()
        for plot in waiting:
            if isalive(plot):
                plot.update()


TURNS = Turns()
"""All plots share the window's time."""
