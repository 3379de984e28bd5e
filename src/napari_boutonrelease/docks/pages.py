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

    def _ask_for_room(self, *_: object) -> None:
        for index in range(self.count()):
            front = index == self.currentIndex()
            policy = QSizePolicy.Policy.Preferred if front else QSizePolicy.Policy.Ignored
            self.widget(index).setSizePolicy(policy, policy)
        self.updateGeometry()
