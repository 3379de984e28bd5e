"""The Responses dock: one bouton's trace and trials, calls of all, the threshold, and trials left out by hand."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
from qtpy.QtCore import QEvent, Qt
from qtpy.QtGui import QKeySequence, QShortcut
from qtpy.QtWidgets import (
    QComboBox,
    QDoubleSpinBox,
    QHBoxLayout,
    QLabel,
    QPushButton,
    QSpinBox,
    QVBoxLayout,
    QWidget,
)
from superqt import QFlowLayout

from ..reports.words import counted, expected_count, fixed
from .amplitude_plot import AmplitudePlot
from .layers import current_frame, show_frame
from .panel import Panel, sentence_label
from .plot_grid import PlotGrid
from .raster_plot import RasterPlot
from .shown_bouton import ShownBouton, shown_bouton
from .trace_plot import TracePlot
from .trial_plot import TrialPlot
from .worker import ProgressRow, run_analysis_step

if TYPE_CHECKING:
    import napari

NOTHING_YET = "Nothing measured yet: press Analyse in the Recording dock."
NO_BOUTON = "No bouton was found: lower the cut in the Boutons dock, or add boutons there by hand."
_REASONS = ("failed stimulus", "movement", "out of focus", "artefact")
_NO_REASON = "by hand"
_LEAST_SD = 0.1
_COLUMN_PX = 250
_WIDEST_COSTS = "000 of 000 called  ·  <0.01 by noise  ·  <0.01 missed"
_THRESHOLD_TIP = "Amplitude above which a response counts as a release, for all boutons"
_HELP = (
    "Keys: ↑ ↓ bouton, ← → trial, X leave the trial out or take it back.  "
    "Drag the dashed line to move the threshold.  Trace: wheel zooms, drag moves along, double-click shows all."
)


class ResponsesDock(Panel):
    """Traces, trials, calls and the threshold."""

    def __init__(self, napari_viewer: napari.viewer.Viewer) -> None:
        super().__init__(napari_viewer)
        self._filling = False
        self.message = sentence_label(NOTHING_YET)
        self.content = QWidget()
        self.trace = TracePlot(self, on_click=self._go_to_time)
        self.trials = TrialPlot(self, on_click=self._go_to_trial)
        self.amplitudes = AmplitudePlot(self, on_click=self._go_to_trial, on_drag=self._drag_threshold)
        self.raster = RasterPlot(self, on_click=self._go_to_call)
        self._add_controls()
        self.plots = PlotGrid(
            [(self.trace, 5), (self.trials, 3), (self.amplitudes, 4), (self.raster, 4)], least_px=_COLUMN_PX
        )
        inside = QVBoxLayout(self.content)
        inside.setContentsMargins(0, 0, 0, 0)
        inside.setSpacing(4)
        inside.addWidget(self.controls)
        inside.addWidget(self.plots, 1)
        self.help = sentence_label(_HELP)
        self.help.setStyleSheet("font-size: 8pt;")
        inside.addWidget(self.help)
        self.column.addWidget(self.message)
        self.column.addWidget(self.content, 1)
        self.column.addWidget(ProgressRow(self.runner, self))
        self._add_shortcuts()
        self.link(self.model.recording_changed, self._follow)
        self.link(self.model.measured_changed, self._follow)
        self.link(self.model.selection_changed, self._follow)
        self.link(self.model.settings_changed, self._show_state)
        self.link(self.model.edits_changed, self._follow)
        self.link(self.viewer.dims.events.current_step, self._follow_frame)
        self._show()

    def _add_controls(self) -> None:
        self.bouton = QComboBox()
        self.bouton.setToolTip("Bouton shown (keys ↑ and ↓)")
        self.bouton.currentIndexChanged.connect(self._choose_bouton)
        self.trial = QSpinBox()
        self.trial.setSpecialValueText("–")
        self.trial.setToolTip("Trial lifted out (keys ← and →); the viewer goes to its stimulus")
        self.trial.valueChanged.connect(self._choose_trial)
        self.pulse = QComboBox()
        self.pulse.setToolTip("Pulse whose amplitudes and calls are shown")
        self.pulse.currentIndexChanged.connect(self._choose_pulse)
        self.pulse_label = QLabel("Pulse")
        self.threshold = _KeenSpinBox()
        self.threshold.setRange(_LEAST_SD, 20.0)
        self.threshold.setSingleStep(0.1)
        self.threshold.setDecimals(2)
        self.threshold.setSuffix(" noise_sd")
        self.threshold.setKeyboardTracking(False)
        self.threshold.setToolTip(_THRESHOLD_TIP)
        self.threshold.valueChanged.connect(self._choose_threshold)
        self.costs = QLabel()
        # Room for the longest numbers, so that nothing jumps while the line is dragged.
        self.costs.setMinimumWidth(self.costs.fontMetrics().horizontalAdvance(_WIDEST_COSTS))
        self.costs.setToolTip(
            "Called: amplitudes above the threshold. By noise: calls to expect if nothing were released. "
            "Missed: releases that the fitted model expects to stay below it."
        )
        self.reason = QComboBox()
        self.reason.setEditable(True)
        self.reason.addItems(_REASONS)
        self.reason.setCurrentText("")
        self.reason.lineEdit().setPlaceholderText("reason")
        self.reason.setToolTip("Why the trial is left out (choose or type); it is written into the table of responses")
        self.exclude = QPushButton()
        self.exclude.setToolTip("Leave the trial out of every estimate, or take it back (key X). Can be undone.")
        self.exclude.clicked.connect(self.toggle_excluded)
        self.leave_out = QPushButton()
        self.leave_out.setToolTip(
            "Leave out the trials marked ▼, in which a stimulus seems to have reached no bouton, with that reason. "
            "Can be undone; each can be taken back."
        )
        self.leave_out.clicked.connect(self.model.exclude_suspected_trials)
        self.again = QPushButton("Analyse again")
        self.again.setToolTip("Bring all numbers up to date, where trials, boutons or settings have changed since")
        self.again.clicked.connect(self._analyse_again)
        self.bouton.setMaximumWidth(70)
        self.pulse.setMaximumWidth(60)
        self.trial.setMaximumWidth(120)
        self.threshold.setMaximumWidth(150)
        self.reason.setMaximumWidth(120)
        self.controls = QWidget()
        row = QFlowLayout(self.controls)
        row.setContentsMargins(0, 0, 0, 0)
        for group in (
            (QLabel("Bouton"), self.bouton),
            (QLabel("Trial"), self.trial),
            (self.pulse_label, self.pulse),
            (QLabel("Threshold"), self.threshold),
            (self.costs,),
            (self.reason, self.exclude),
            (self.leave_out,),
            (self.again,),
        ):
            row.addWidget(_together(*group))

    def _add_shortcuts(self) -> None:
        for key, slot in (
            ("Down", self.next_bouton),
            ("Up", self.previous_bouton),
            ("Right", self.next_trial),
            ("Left", self.previous_trial),
            ("X", self.toggle_excluded),
        ):
            shortcut = QShortcut(QKeySequence(key), self)
            shortcut.setContext(Qt.ShortcutContext.WidgetWithChildrenShortcut)
            shortcut.activated.connect(slot)

    # what the model says

    def _follow(self) -> None:
        self.when_seen(self._show)

    def _show(self) -> None:
        shown = shown_bouton(self.model)
        self.message.setText(NOTHING_YET if self.model.measured is None else NO_BOUTON)
        self.message.setVisible(shown is None)
        self.content.setVisible(shown is not None)
        for plot in (self.trace, self.trials, self.amplitudes, self.raster):
            plot.show_bouton(shown)
        if shown is not None:
            self._show_choices(shown)
            self._show_costs(shown)
        self._show_state()
        self._follow_frame()

    def _show_choices(self, shown: ShownBouton) -> None:
        self._filling = True
        ids = [str(one) for one in shown.measured.places.bouton]
        fill_choices(self.bouton, ids, shown.row)
        n_pulses = shown.stimulus_s.shape[1]
        fill_choices(self.pulse, [str(one + 1) for one in range(n_pulses)], shown.pulse)
        self.pulse.setVisible(n_pulses > 1)
        self.pulse_label.setVisible(n_pulses > 1)
        self.trial.setRange(0, shown.n_trials)
        self.trial.setValue(0 if shown.trial is None else shown.trial + 1)
        self.trial.setSuffix(f" of {shown.n_trials}" if shown.trial is not None else "")
        if np.isfinite(shown.threshold / shown.noise_sd):
            self.threshold.setValue(shown.threshold / shown.noise_sd)
        left_out = shown.trial is not None and shown.trial in shown.excluded
        self.exclude.setEnabled(shown.trial is not None)
        self.reason.setEnabled(shown.trial is not None and not left_out)
        if shown.trial is None:
            self.exclude.setText("Leave trial out")
        else:
            self.exclude.setText(
                f"Take trial {shown.trial + 1} back" if left_out else f"Leave trial {shown.trial + 1} out"
            )
        reason = shown.excluded[shown.trial] if left_out and shown.trial is not None else "reason"
        self.reason.lineEdit().setPlaceholderText(reason)
        self._filling = False

    def _show_costs(self, shown: ShownBouton) -> None:
        counts, at = shown.measured.counts, (shown.row, shown.pulse)
        missed = counts.missed_expected[at]
        words = [
            f"{counts.calls.n_called[at]} of {counts.calls.n_trials[at]} called",
            f"{expected_count(float(counts.calls.false_calls_expected[at]))} by noise",
        ]
        if np.isfinite(missed):
            words.append(f"{expected_count(float(missed))} missed")
        self.threshold.setToolTip(f"{_THRESHOLD_TIP}: {fixed(shown.threshold, decimals=3)} dF/F for this one")
        self.costs.setText("  ·  ".join(words))

    def _show_state(self) -> None:
        self.again.setEnabled(self.model.stale)
        n = len(self.model.suspected_trials)
        self.leave_out.setText(f"Leave out {counted(n, 'suspected failure')}")
        self.leave_out.parentWidget().setVisible(n > 0)

    def _follow_frame(self, *_: object) -> None:
        self.trace.show_frame(current_frame(self.viewer))

    # what the person does

    def _choose_bouton(self, index: int) -> None:
        if not self._filling and self.model.measured is not None and index >= 0:
            self.model.select(bouton=int(self.model.measured.places.bouton[index]))

    def _choose_trial(self, trial: int) -> None:
        if not self._filling:
            self.model.select(trial=trial or None)
            self._show_stimulus()

    def _choose_pulse(self, index: int) -> None:
        if not self._filling and index >= 0:
            self.model.select(pulse=index + 1)
            self._show_stimulus()

    def _choose_threshold(self, threshold_sd: float) -> None:
        if not self._filling:
            self.model.set_threshold(threshold_sd)

    def _drag_threshold(self, amplitude: float) -> None:
        shown = shown_bouton(self.model)
        if shown is not None and shown.noise_sd > 0:
            self.model.set_threshold(max(amplitude / shown.noise_sd, _LEAST_SD))

    def _go_to_time(self, time_s: float) -> None:
        """Show the frame at a time, and select the trial that it belongs to."""
        measured = self.model.measured
        if measured is None:
            return
        first = measured.timing.stimulus_s[:, 0]
        begun = np.flatnonzero(first <= time_s)
        if begun.size:
            self.model.select(trial=int(begun[np.argmax(first[begun])]) + 1)
        self._show_time(time_s)

    def _go_to_trial(self, trial: int) -> None:
        self.model.select(trial=trial + 1)
        self._show_stimulus()

    def _go_to_call(self, row: int, trial: int) -> None:
        if self.model.measured is not None:
            self.model.select(bouton=int(self.model.measured.places.bouton[row]), trial=trial + 1)
            self._show_stimulus()

    def next_bouton(self) -> None:
        """Select the next bouton."""
        self.model.step_bouton(1)

    def previous_bouton(self) -> None:
        """Select the bouton before."""
        self.model.step_bouton(-1)

    def next_trial(self) -> None:
        """Select the next trial and go to its stimulus."""
        self.model.step_trial(1)
        self._show_stimulus()

    def previous_trial(self) -> None:
        """Select the trial before and go to its stimulus."""
        self.model.step_trial(-1)
        self._show_stimulus()

    def toggle_excluded(self) -> None:
        """Leave the selected trial out, or take it back."""
        shown = shown_bouton(self.model)
        if shown is None or shown.trial is None:
            return
        edits, trial = self.model.edits, shown.trial + 1
        if shown.trial in shown.excluded:
            self.model.edit(edits.include(trial))
        else:
            reason = self.reason.currentText().strip() or _NO_REASON
            self.reason.setCurrentText("")  # it holds for this trial, not for the next
            self.model.edit(edits.exclude(trial, reason))

    def _analyse_again(self) -> None:
        run_analysis_step(self.model)

    def _show_stimulus(self) -> None:
        """Move the viewer to the frame in which the selected stimulus falls."""
        shown = shown_bouton(self.model)
        if shown is not None and shown.trial is not None:
            self._show_time(float(shown.stimulus_s[shown.trial, shown.pulse]))

    def _show_time(self, time_s: float) -> None:
        measured = self.model.measured
        if measured is not None and np.isfinite(time_s):
            frame = int(np.searchsorted(measured.timing.frame_start_s, time_s, side="right")) - 1
            show_frame(self.viewer, max(frame, 0))


class _KeenSpinBox(QDoubleSpinBox):
    """A spin box that keeps ↑ and ↓ to itself although they are shortcuts of the dock."""

    def event(self, event: QEvent) -> bool:
        if event.type() == QEvent.Type.ShortcutOverride and event.key() in (Qt.Key.Key_Up, Qt.Key.Key_Down):
            event.accept()
            return True
        return bool(super().event(event))


def _together(*widgets: QWidget) -> QWidget:
    """Keep widgets on one line."""
    group = QWidget()
    row = QHBoxLayout(group)
    row.setContentsMargins(0, 0, 0, 0)
    row.setSpacing(4)
    for widget in widgets:
        row.addWidget(widget)
    return group


def fill_choices(box: QComboBox, entries: list[str], index: int) -> None:
    """Offer these entries, one of them chosen."""
    if [box.itemText(i) for i in range(box.count())] != entries:
        box.clear()
        box.addItems(entries)
    box.setCurrentIndex(index)
