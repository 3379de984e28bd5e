"""What takes longer than a picture waits until the threshold rests."""

from __future__ import annotations

from collections.abc import Callable
from typing import TYPE_CHECKING

from qtpy.QtCore import QObject, QTimer

if TYPE_CHECKING:
    from ..analysis.model import AnalysisModel

CALM_MS = 60
"""The threshold rests when it has not moved for as long."""


class WhenCalm(QTimer):
    """Shows new results at once, but once only after many changes of the threshold, which come with every mouse move.

    Parameters
    ----------
    model : AnalysisModel
        Whose results.
    show : callable
        Shows them.
    parent : QObject, optional
        Ends the waiting when it goes.
    """

    def __init__(self, model: AnalysisModel, show: Callable[[], object], parent: QObject | None = None) -> None:
        super().__init__(parent)
        self._model = model
        self._show = show
        self._release: object = None
        self.setSingleShot(True)
        self.setInterval(CALM_MS)
        self.timeout.connect(self._rested)

    def follow(self) -> None:
        """Show what was measured, later if nothing but calls can differ from what was measured before."""
        measured = self._model.measured
        before, self._release = self._release, None if measured is None else measured.release
        if measured is not None and measured.release is before:
            self.start()
        else:
            self.stop()
            self._show()

    def _rested(self) -> None:
        self._show()
