"""Tabs that need no more room than the page in front."""

from __future__ import annotations

from qtpy.QtWidgets import QSizePolicy, QTabWidget, QWidget


class Pages(QTabWidget):
    """Tabs for whole pages of a dock: pages at the back ask for no room."""

    def __init__(self) -> None:
        super().__init__()
        self.setDocumentMode(True)
        self.currentChanged.connect(self._ask_for_room)

    def add(self, page: QWidget, title: str, tip: str) -> None:
        """Add a page at the end."""
        self.setTabToolTip(self.addTab(page, title), tip)
        self._ask_for_room()

    def hasHeightForWidth(self) -> bool:
        """Ask for the same height at any width."""
        return False  # sentences that wrap in several pages would drive a dock's scroll bars on and off for ever

    def heightForWidth(self, width: int) -> int:  # noqa: ARG002
        """There is none."""
        return -1

    def _ask_for_room(self, *_: object) -> None:
        for index in range(self.count()):
            front = index == self.currentIndex()
            policy = QSizePolicy.Policy.Preferred if front else QSizePolicy.Policy.Ignored
            self.widget(index).setSizePolicy(policy, policy)
        self.updateGeometry()
