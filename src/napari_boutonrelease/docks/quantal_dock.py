"""The Quantal dock: histograms with the fitted model, every estimate side by side, pulse pair and train."""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING

from qtpy.QtCore import Qt, QTimer
from qtpy.QtWidgets import (
    QAbstractItemView,
    QComboBox,
    QHBoxLayout,
    QHeaderView,
    QLabel,
    QScrollArea,
    QSizePolicy,
    QTableWidget,
    QTableWidgetItem,
    QTabWidget,
    QVBoxLayout,
    QWidget,
)

from ..analysis.fitted_curves import train_curve
from ..analysis.pulse_intervals import interval_groups
from ..analysis.summary import estimates_table
from ..analysis.trains import train_patterns
from .calm import CALM_MS
from .histogram_plot import HistogramPlot
from .panel import Panel, sentence_label
from .plot_grid import PlotGrid
from .pulse_plot import PulsePairPlot
from .quantal_words import doubts, estimate_rows, headline, pair_rows, recovery_rows, train_rows
from .responses_dock import NO_BOUTON, NOTHING_YET, fill_choices
from .shown_bouton import ShownBouton, shown_bouton
from .sites_plot import SitesPlot
from .train_plot import CumulativePlot, IntervalPlot, TrainPlot, numbers_of, train_words

if TYPE_CHECKING:
    import napari

_COLUMN_PX, _TABLE_PX = 190, 400
_TRAIN = 3  # pulses from which a train is drawn


class QuantalDock(Panel):
    """Quanta of the selected bouton."""

    def __init__(self, napari_viewer: napari.viewer.Viewer) -> None:
        super().__init__(napari_viewer)
        self._filling = False
        self.message = sentence_label(NOTHING_YET)
        self.histogram = HistogramPlot(self)
        self.sites = SitesPlot(self)
        self.pair = PulsePairPlot(self)
        self.amplitude_train = TrainPlot(self, quantity="amplitude")
        self.release_train = TrainPlot(self, quantity="p_release")
        self.train = QWidget()
        trains = QVBoxLayout(self.train)
        trains.setContentsMargins(0, 0, 0, 0)
        trains.addWidget(self.amplitude_train)
        trains.addWidget(self.release_train)
        self.cumulative = CumulativePlot(self)
        self.intervals = IntervalPlot(self)
        self.content = PlotGrid(
            [
                (self._make_words(), 4),
                (self.histogram, 5),
                (self.sites, 3),
                (self.pair, 4),
                (self.train, 4),
                (self.cumulative, 4),
                (self.intervals, 4),
                (self._make_tables(), 9),
            ],
            least_px=_COLUMN_PX,
            last_px=_TABLE_PX,
        )
        self.column.addWidget(self.message)
        self.column.addWidget(self.content, 1)
        self._calm = QTimer(self)
        self._calm.setSingleShot(True)
        self._calm.setInterval(CALM_MS)
        self._calm.timeout.connect(self._write)
        for signal in (self.model.recording_changed, self.model.measured_changed, self.model.selection_changed):
            self.link(signal, self._follow)
        self.link(self.model.settings_changed, self._show_state)
        self.link(self.model.edits_changed, self._show_state)
        self._show()

    def _make_words(self) -> QWidget:
        self.bouton = QComboBox()
        self.bouton.setToolTip("Bouton shown")
        self.bouton.setMaximumWidth(70)
        self.bouton.currentIndexChanged.connect(self._choose_bouton)
        self.pulse_label = QLabel("Pulse")
        self.pulse = QComboBox()
        self.pulse.setToolTip("Pulse whose amplitudes the histogram shows")
        self.pulse.setMaximumWidth(60)
        self.pulse.currentIndexChanged.connect(self._choose_pulse)
        self.words = sentence_label()
        self.words.setTextFormat(Qt.TextFormat.RichText)
        self.words.setAlignment(Qt.AlignmentFlag.AlignTop)
        scroll = QScrollArea()
        scroll.setWidget(self.words)
        scroll.setWidgetResizable(True)
        scroll.setFrameShape(QScrollArea.Shape.NoFrame)
        scroll.setMinimumHeight(90)
        choices = QHBoxLayout()
        for widget in (QLabel("Bouton"), self.bouton, self.pulse_label, self.pulse):
            choices.addWidget(widget)
        choices.addStretch(1)
        group = QWidget()
        column = QVBoxLayout(group)
        column.setContentsMargins(0, 0, 0, 0)
        column.addLayout(choices)
        column.addWidget(scroll, 1)
        return group

    def _make_tables(self) -> QWidget:
        self.estimates = _table("quantity", "value (95 % interval)", "method")
        self.estimates.setToolTip("Every estimate of the same quantity, from pulse 1")
        self.pairs = _table("pulse pair", "value (95 % interval)")
        self.tables = QTabWidget()
        self.tables.addTab(self.estimates, "Estimates")
        self.tables.addTab(self.pairs, "Pulse pair")
        self.train_table = _table("train", "value (95 % interval)")
        self.interval_table = _table("pulse intervals", "value (95 % interval)")
        self.tables.addTab(self.train_table, "Train")
        self.tables.addTab(self.interval_table, "Intervals")
        self.tables.setMinimumHeight(130)
        return self.tables

    # what the model says

    def _follow(self) -> None:
        self.when_seen(self._show)

    def _show(self) -> None:
        shown = shown_bouton(self.model)
        self.message.setText(NOTHING_YET if self.model.measured is None else NO_BOUTON)
        self.message.setVisible(shown is None)
        self.content.setVisible(shown is not None)
        for plot in (self.histogram, self.sites, self.pair):
            plot.show_bouton(shown)
        if shown is not None:
            self._show_choices(shown)
        self._calm.start()

    def _show_choices(self, shown: ShownBouton) -> None:
        self._filling = True
        n_pulses = shown.stimulus_s.shape[1]
        fill_choices(self.bouton, [str(one) for one in shown.measured.places.bouton], shown.row)
        fill_choices(self.pulse, [str(one + 1) for one in range(n_pulses)], shown.pulse)
        self.pulse.setVisible(n_pulses > 1)
        self.pulse_label.setVisible(n_pulses > 1)
        self.content.offer(self.pair, n_pulses > 1)
        self.content.offer(self.train, n_pulses >= _TRAIN)
        is_train, several = bool(train_patterns(shown.measured)), bool(interval_groups(shown.measured))
        self.content.offer(self.cumulative, is_train)
        self.content.offer(self.intervals, several)
        for tab, there in enumerate((n_pulses > 1, is_train, several), start=1):
            self.tables.setTabVisible(tab, there)
        self._filling = False

    def _show_state(self) -> None:
        self.when_seen(self._calm.start)

    def _write(self) -> None:
        """Write what takes longer than a picture: sentences and tables."""
        shown = shown_bouton(self.model)
        if shown is None:
            return
        measured, row = shown.measured, shown.row
        self.words.setText(self._sentences(shown))
        _fill_table(self.estimates, _without_repeats(estimate_rows(estimates_table(measured, row=row))))
        n_pulses = shown.stimulus_s.shape[1]
        if n_pulses > 1:
            _fill_table(self.pairs, pair_rows(measured, row))
        if n_pulses >= _TRAIN:
            self._write_train(shown)
        if interval_groups(measured):
            intervals = self.model.table("intervals")
            recovery, words = numbers_of(self.model.table("recovery"), shown.bouton)
            mine = intervals[intervals["bouton"] == shown.bouton]
            self.intervals.show_intervals(mine, recovery, words.get("model", ""))
            _fill_table(self.interval_table, recovery_rows(recovery, words))

    def _write_train(self, shown: ShownBouton) -> None:
        pulses = self.model.table("pulses")
        mine = pulses[pulses["bouton"] == shown.bouton]
        patterns = train_patterns(shown.measured)
        train, words = numbers_of(self.model.table("trains"), shown.bouton)
        curve = train_curve(train, patterns[0].pulse_s) if patterns and train else None
        self.amplitude_train.show_pulses(mine, curve=curve, words=train_words(train))
        self.release_train.show_pulses(mine)
        if patterns:
            self.cumulative.show_train(mine, train, words.get("note", ""))
            _fill_table(self.train_table, train_rows(train, words.get("note", "")))

    def _sentences(self, shown: ShownBouton) -> str:
        parts = [headline(shown.measured, shown.row)]
        if self.model.stale:
            parts.insert(0, "<i>Settings, boutons or trials have changed since: analyse again.</i>")
        flags = str(self.model.table("boutons")["flags"].iloc[shown.row])
        parts += [f"<b>{code}</b>: {meaning} {advice}" for code, meaning, advice in doubts(flags)]
        return "".join(f'<p style="margin:0 0 4px 0">{part}</p>' for part in parts)

    # what the person does

    def _choose_bouton(self, index: int) -> None:
        if not self._filling and self.model.measured is not None and index >= 0:
            self.model.select(bouton=int(self.model.measured.places.bouton[index]))

    def _choose_pulse(self, index: int) -> None:
        if not self._filling and index >= 0:
            self.model.select(pulse=index + 1)


def _table(*heads: str) -> QTableWidget:
    table = QTableWidget(0, len(heads))
    table.setHorizontalHeaderLabels(heads)
    table.verticalHeader().hide()
    table.verticalHeader().setDefaultSectionSize(20)
    table.setEditTriggers(QAbstractItemView.EditTrigger.NoEditTriggers)
    table.setSelectionMode(QAbstractItemView.SelectionMode.ContiguousSelection)
    table.setSizePolicy(QSizePolicy.Policy.Expanding, QSizePolicy.Policy.Expanding)
    header = table.horizontalHeader()
    header.setSectionResizeMode(QHeaderView.ResizeMode.ResizeToContents)
    header.setSectionResizeMode(len(heads) - 1, QHeaderView.ResizeMode.Stretch)
    return table


def _fill_table(table: QTableWidget, rows: Sequence[tuple[str, ...]]) -> None:
    table.setRowCount(len(rows))
    for line, row in enumerate(rows):
        for column, text in enumerate(row):
            item = QTableWidgetItem(text)
            item.setToolTip(text)
            table.setItem(line, column, item)


def _without_repeats(rows: list[tuple[str, str, str]]) -> list[tuple[str, ...]]:
    """Name a quantity in the first of its rows only."""
    names = [""] + [name for name, *_ in rows[:-1]]
    return [("" if row[0] == before else row[0], *row[1:]) for row, before in zip(rows, names, strict=True)]
