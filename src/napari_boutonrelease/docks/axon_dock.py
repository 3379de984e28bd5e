"""The Axon dock: the map coloured by any number, that number along the axon, the population, other recordings."""

from __future__ import annotations

from html import escape
from types import SimpleNamespace
from typing import TYPE_CHECKING, Any

from qtpy.QtCore import Qt
from qtpy.QtGui import QResizeEvent
from qtpy.QtWidgets import (
    QBoxLayout,
    QCheckBox,
    QComboBox,
    QHBoxLayout,
    QPushButton,
    QScrollArea,
    QVBoxLayout,
    QWidget,
)

from ..analysis.selection import measure_selection, selection_summary
from ..reports.together_words import together_facts
from ..reports.words import headlines
from .axon_plot import COLUMNS, AxonPlot, choices, title
from .bouton_layers import bouton_layers_of
from .calm import WhenCalm
from .comparison_part import ComparisonPart
from .pages import Pages
from .panel import Panel, sentence_label
from .worker import ProgressRow

if TYPE_CHECKING:
    import napari

    from ..analysis.measured import Measured
    from ..analysis.progress import Progress

_WIDE_PX, _TEXT_PX = 640, 90
_STALE = "Boutons or settings have changed since these numbers were measured."


class AxonDock(Panel):
    """Fifth step: all boutons of the axon together."""

    def __init__(self, napari_viewer: napari.viewer.Viewer) -> None:
        super().__init__(napari_viewer)
        self.layers = bouton_layers_of(self.viewer)
        self._filling = False
        self.shown = QComboBox()
        self.shown.setAccessibleName("Number shown")
        self.shown.setSizeAdjustPolicy(QComboBox.SizeAdjustPolicy.AdjustToMinimumContentsLengthWithIcon)
        self.shown.setMinimumContentsLength(14)
        self.shown.currentIndexChanged.connect(self._choose)
        self.colour = QCheckBox("Colour the marks")
        self.colour.setToolTip("Colour the marks in the image by this number, with a colour bar; else by how found.")
        self.colour.setChecked(self.layers.column is not None)
        self.colour.toggled.connect(self._colour)
        self.meaning = sentence_label()
        row = QHBoxLayout()
        row.addWidget(self.shown)
        row.addWidget(self.colour)
        row.addStretch(1)
        self.plot = AxonPlot(self)
        self.words = sentence_label()
        self.words.setTextFormat(Qt.TextFormat.RichText)
        self.stale = sentence_label(_STALE)
        self.missed = QPushButton("Look for missed boutons")
        self.missed.setToolTip(
            "Simulate boutons in the noise of this recording, and see which the detection would have missed: "
            "corrects mean p_release for them."
        )
        self.missed.clicked.connect(self._look_for_missed)
        alone = QWidget()
        column = QVBoxLayout(alone)
        column.setContentsMargins(0, 4, 0, 0)
        column.addLayout(row)
        column.addWidget(self.meaning)
        text = QWidget()
        beside = QVBoxLayout(text)
        beside.setContentsMargins(0, 0, 0, 0)
        beside.addWidget(self.stale)
        beside.addWidget(self.words)
        beside.addWidget(self.missed)
        beside.addStretch(1)
        self.text = QScrollArea()  # of its own: sentences must not make the plot higher than the dock
        self.text.setWidget(text)
        self.text.setWidgetResizable(True)
        self.text.setFrameShape(QScrollArea.Shape.NoFrame)
        self.text.setMinimumHeight(_TEXT_PX)
        self.parts = QBoxLayout(QBoxLayout.Direction.TopToBottom)
        self.parts.addWidget(self.plot, 2)
        self.parts.addWidget(self.text, 1)
        column.addLayout(self.parts, 1)
        self.comparison = ComparisonPart(self)
        self.tabs = Pages()
        self.tabs.add(alone, "This recording", "Boutons along the axon, and what they say together")
        self.tabs.add(self.comparison, "Comparison", "The same boutons in several recordings")
        self.column.addWidget(self.tabs, 1)
        self.progress = ProgressRow(self.runner, self)
        self.column.addWidget(self.progress)
        self._calm = WhenCalm(self.model, self._show_when_seen, self)
        self.link(self.model.recording_changed, self._calm.follow)
        self.link(self.model.measured_changed, self._calm.follow)
        self.link(self.model.summary_changed, self._show_words)
        self.link(self.model.selection_changed, self.plot.refresh)
        self.link(self.model.settings_changed, self._show_state)
        self.link(self.model.edits_changed, self._show_state)
        self.link(self.runner.changed, self._show_state)
        self._show()

    def resizeEvent(self, event: QResizeEvent) -> None:
        """Put the words beside the plot where there is room, else below."""
        super().resizeEvent(event)
        wide = event.size().width() > _WIDE_PX
        self.parts.setDirection(QBoxLayout.Direction.LeftToRight if wide else QBoxLayout.Direction.TopToBottom)

    def _show_when_seen(self) -> None:
        self.when_seen(self._show)

    def _show(self) -> None:
        measured = self.model.measured
        self._filling = True
        names = [] if measured is None else choices(self.model.table("boutons"))
        wanted = self.layers.column or self.plot.column
        if names != [self.shown.itemData(i) for i in range(self.shown.count())]:
            self.shown.clear()
            for name in names:
                self.shown.addItem(title(COLUMNS[name]), name)
        if names:
            self.shown.setCurrentIndex(names.index(wanted) if wanted in names else 0)
        self._filling = False
        self.shown.setEnabled(bool(names))
        self.colour.setEnabled(bool(names))
        self._choose()
        self._show_words()

    def _show_state(self, *_: object) -> None:
        self.stale.setVisible(self.model.stale)
        known = self.model.measured is not None and "selection" in self.model.summary()
        self.missed.setVisible(self.model.measured is not None and not known)
        self.missed.setEnabled(not self.runner.busy)

    def _show_words(self) -> None:
        measured = self.model.measured
        self.words.setText("" if measured is None else self._population())
        self.text.setVisible(measured is not None)
        self._show_state()

    def _population(self) -> str:
        summary = self.model.summary()
        result: Any = SimpleNamespace(boutons=self.model.table("boutons"), summary=summary)
        facts = together_facts(result) if summary["heterogeneity"]["boutons"] > 1 else []
        parts = [escape(" ".join(headlines(result)))]
        parts += [f"<b>{escape(title)}</b><br>{escape(sentence)}" for title, sentence in facts]
        return "".join(f'<p style="margin:0 0 6px 0">{part}</p>' for part in parts)

    def _look_for_missed(self) -> None:
        """Measure which boutons the detection would have missed, in another thread."""
        measured = self.model.measured
        if measured is None:
            return

        def work(progress: Progress) -> tuple[Measured, dict[str, Any]]:
            progress(0, 0)
            return measured, selection_summary(measure_selection(measured))

        self.runner.run(work, self._take_missed, words="Looking for missed boutons", kind="selection")

    def _take_missed(self, outcome: tuple[Measured, dict[str, Any]]) -> None:
        self.model.accept_selection(*outcome)

    def _choose(self, *_: object) -> None:
        if self._filling:
            return
        name = self.shown.currentData()
        if name is not None:
            self.plot.column = name
            self.meaning.setText(COLUMNS[name].meaning)
            self.meaning.setToolTip(COLUMNS[name].meaning)
            if self.colour.isChecked():
                self.layers.colour_by(name)
        self.plot.refresh()

    def _colour(self, on: bool) -> None:
        self.layers.colour_by(self.plot.column if on else None)
