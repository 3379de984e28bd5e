"""The Boutons dock: finding boutons, a look at other cuts, changing them by hand, and the axon's course."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING

import numpy as np
from qtpy.QtCore import Qt
from qtpy.QtGui import QKeySequence, QShortcut
from qtpy.QtWidgets import (
    QCheckBox,
    QGroupBox,
    QHBoxLayout,
    QLabel,
    QPushButton,
    QSlider,
    QSpinBox,
    QVBoxLayout,
    QWidget,
)
from superqt import QFlowLayout

from ..analysis.bouton_edits import merge_boutons
from ..errors import InputError
from ..reports.words import counted, short
from .axon_layer import axon_layer_of
from .bouton_layers import bouton_layers_of
from .bouton_list import WAYS, BoutonList, BoutonTrace
from .layers import movie_layer
from .panel import Panel, sentence_label
from .picture_layers import EVIDENCE, MEAN, PASSING, PictureLayers
from .settings_form import Row, SettingsForm
from .worker import ProgressRow

if TYPE_CHECKING:
    import napari

NO_RECORDING = "Choose a movie and give the stimulus times in the Recording dock first."
_ROWS = (
    Row(step="detection", name="bouton_um", words="Width of a bouton"),
    Row(step="detection", name="spacing_um", words="Smallest distance"),
    Row(step="responses", name="background_um", words="Background within"),
    Row(step="detection", name="footprint", words="Footprint"),
    Row(step="detection", name="shape_candidates", words="Also spots that do not respond"),
)
_LEAST, _MOST, _STEPS = 0.001, 0.5, 100
_HINTS = {
    "select": "Click a mark to select it, with Shift to select more; drag it to move it.",
    "add": "Click in the image to add a bouton.",
    "pan_zoom": "",
}


class BoutonsDock(Panel):
    """Second step: where the boutons are."""

    def __init__(self, napari_viewer: napari.viewer.Viewer) -> None:
        super().__init__(napari_viewer)
        self.layers = bouton_layers_of(self.viewer)
        self.axon = axon_layer_of(self.viewer)
        self.pictures = PictureLayers(self.viewer)
        self._filling = False
        self._add_finding()
        self._add_editing()
        self._add_list()
        self._add_axon()
        self._add_settings()
        self.column.addStretch(1)
        for signal, slot in (
            (self.model.recording_changed, self._new_recording),
            (self.model.settings_changed, self._show),
            (self.model.edits_changed, self._show),
            (self.model.traced_changed, self._new_traces),
            (self.model.measured_changed, self._show),
            (self.model.selection_changed, self._show_selection),
            (self.layers.changed, self._show),
            (self.axon.changed, self._show_axon),
            (self.viewer.layers.events.removed, self._show),
        ):
            self.link(signal, slot)
        self._show()

    # building

    def _add_finding(self) -> None:
        self.find = QPushButton("Find boutons")
        self.find.setToolTip("Look for places that respond to the stimuli; what was changed by hand stays.")
        self.find.clicked.connect(self._find)
        self.message = sentence_label()
        self.progress = ProgressRow(self.runner, self)
        self.false_share = QSlider(Qt.Orientation.Horizontal)
        self.false_share.setRange(0, _STEPS)
        self.false_share.setAccessibleName("False ones accepted (%)")
        meaning = "Expected share of false ones among boutons found by their responses"
        self.false_share.setToolTip(meaning)
        self.false_share.valueChanged.connect(self._choose_share)
        self.share_words = QLabel()
        self.share_words.setToolTip(meaning)
        self.preview = QCheckBox("Show evidence and what would be found")
        self.preview.setToolTip(
            "The evidence of release at every pixel, and squares around its maxima that this share of false ones lets "
            "pass. Nothing is computed anew: what strong boutons hide or feign beside them is settled by Find."
        )
        self.preview.toggled.connect(self._show_preview)
        self.preview_words = sentence_label()
        self.mean = QCheckBox("Show the mean image")
        self.mean.setToolTip("The mean of all frames, movement taken out, above the movie")
        self.mean.toggled.connect(self._show_pictures)
        row = QHBoxLayout()
        row.addWidget(QLabel("False ones"))
        row.addWidget(self.false_share, 1)
        row.addWidget(self.share_words)
        self.column.addWidget(self.find)
        self.column.addWidget(self.progress)
        self.column.addWidget(self.message)
        self.column.addLayout(row)
        self.column.addWidget(self.preview)
        self.column.addWidget(self.preview_words)
        self.column.addWidget(self.mean)

    def _add_editing(self) -> None:
        self.tools = QGroupBox("Change by hand")
        self.modes = {
            "select": _button("Select, move", "Click marks to select them; drag them to move them", checkable=True),
            "add": _button("Add", "Click in the image to add boutons", checkable=True),
        }
        for mode, button in self.modes.items():
            button.clicked.connect(lambda on, mode=mode: self._set_mode(mode if on else "pan_zoom"))
        self.delete = _button("Delete", "Take the selected boutons away (Delete key)")
        self.delete.clicked.connect(self.layers.delete_selected)
        self.merge = _button("Merge", "Make one bouton of those selected, at their mean")
        self.merge.clicked.connect(self._merge)
        self.redraw = _button("Redraw", "Paint the footprint of the selected bouton")
        self.redraw.clicked.connect(self._redraw)
        self.undo = _button("Undo", "Take the last change by hand back (Ctrl+Z)")
        self.undo.clicked.connect(self.model.undo)
        self.redo = _button("Redo", "Make it again (Ctrl+Shift+Z)")
        self.redo.clicked.connect(self.model.redo)
        self.hint = sentence_label()
        buttons = QWidget()
        flow = QFlowLayout(buttons)
        flow.setContentsMargins(0, 0, 0, 0)
        for button in (*self.modes.values(), self.delete, self.merge, self.redraw, self.undo, self.redo):
            flow.addWidget(button)
        self.painting = QWidget()
        self.brush = QSpinBox()
        self.brush.setRange(1, 40)
        self.brush.setPrefix("brush ")
        self.brush.setSuffix(" px")
        self.brush.setToolTip("Width of the brush")
        self.brush.valueChanged.connect(self._set_brush)
        self.erase = _button("Erase", "Erase instead of painting", checkable=True)
        self.erase.toggled.connect(self._set_erasing)
        self.done = _button("Done", "Take the footprint as painted (Enter)")
        self.done.clicked.connect(self.layers.finish_redrawing)
        self.leave = _button("Cancel", "Leave the footprint as it was (Escape)")
        self.leave.clicked.connect(self.layers.cancel_redrawing)
        row = QFlowLayout(self.painting)
        row.setContentsMargins(0, 0, 0, 0)
        for widget in (self.brush, self.erase, self.done, self.leave):
            row.addWidget(widget)
        inside = QVBoxLayout(self.tools)
        for part in (buttons, self.painting, self.hint):
            inside.addWidget(part)
        self.column.addWidget(self.tools)
        for key, act in (
            (QKeySequence.StandardKey.Undo, self.model.undo),
            (QKeySequence.StandardKey.Redo, self.model.redo),
        ):
            shortcut = QShortcut(QKeySequence(key), self)
            shortcut.setContext(Qt.ShortcutContext.WidgetWithChildrenShortcut)
            shortcut.activated.connect(act)

    def _add_list(self) -> None:
        self.table = BoutonList(self.layers.delete_selected)
        self.table.itemSelectionChanged.connect(self._select_rows)
        self.trace = BoutonTrace(self)
        self.column.addWidget(self.table)
        self.column.addWidget(self.trace)

    def _add_axon(self) -> None:
        box = QGroupBox("Course of the axon")
        self.draw_axon = _button(
            "Draw", "Click along the axon; a double click ends it. Boutons are then numbered along it.", checkable=True
        )
        self.draw_axon.clicked.connect(self._draw_axon)
        self.clear_axon = _button("Clear", "Take the axon's course away")
        self.clear_axon.clicked.connect(self.axon.clear)
        self.follow = QCheckBox("Follow the light between clicks")
        self.follow.setToolTip("Trace the axon along its ridge of light in the mean image; else, straight lines.")
        self.follow.setChecked(self.axon.follow_light)
        self.follow.toggled.connect(self._set_following)
        self.axon_words = sentence_label()
        row = QHBoxLayout()
        row.addWidget(self.draw_axon)
        row.addWidget(self.clear_axon)
        row.addStretch(1)
        inside = QVBoxLayout(box)
        inside.addLayout(row)
        inside.addWidget(self.follow)
        inside.addWidget(self.axon_words)
        self.column.addWidget(box)

    def _add_settings(self) -> None:
        box = QGroupBox("How they are found and read")
        self.form = SettingsForm(self, _ROWS)
        inside = QVBoxLayout(box)
        inside.addWidget(self.form)
        self.column.addWidget(box)

    # what the model says

    def _new_recording(self) -> None:
        self.preview.setChecked(False)
        self.mean.setChecked(False)
        self.pictures.remove()
        self._show()

    def _new_traces(self) -> None:
        self._show_pictures()
        self._show_preview()
        self._show()

    def _show(self, *_: object) -> None:
        ready, found = self.model.pipeline is not None, len(self.layers.marks.bouton)
        looked = self.layers.points is not None
        self.find.setEnabled(ready)
        self.find.setText("Find again" if self.model.traced is not None else "Find boutons")
        self.message.setText(NO_RECORDING if not ready else self._in_words())
        self._filling = True
        share = self.model.settings.detection.false_discovery
        self.false_share.setValue(round(_STEPS * math.log(share / _LEAST) / math.log(_MOST / _LEAST)))
        self._filling = False
        self.share_words.setText(f"{short(100 * share)} %")
        for box in (self.preview, self.mean):
            box.setEnabled(self.model.traced is not None)
        self._follow_pictures()
        self.tools.setEnabled(looked)
        redrawing = self.layers.redrawing is not None
        selected = len(self.layers.selected)
        for button in (*self.modes.values(), self.undo, self.redo):
            button.setEnabled(not redrawing)
        self.undo.setEnabled(self.model.can_undo and not redrawing)
        self.redo.setEnabled(self.model.can_redo and not redrawing)
        self.delete.setEnabled(selected > 0 and not redrawing)
        self.merge.setEnabled(selected > 1 and not redrawing)
        self.redraw.setEnabled(selected == 1 and not redrawing)
        self.painting.setVisible(redrawing)
        mode = str(getattr(self.layers.points, "mode", "pan_zoom"))
        for name, button in self.modes.items():
            button.setChecked(name == mode and not redrawing)
        self.hint.setText(
            f"Paint the footprint of bouton {self.layers.redrawing} in the image."
            if redrawing
            else _HINTS.get(mode, "")
        )
        self.hint.setVisible(bool(self.hint.text()))
        self._fill_list()
        self.table.setVisible(found > 0)
        self.trace.setVisible(found > 0)
        self._show_axon()

    def _in_words(self) -> str:
        marks, sites = self.layers.marks, self.model.sites()
        if sites is None or self.layers.points is None:
            return ""
        if not len(marks.bouton):
            return "No bouton was found: accept more false ones and find again, or add boutons by hand."
        ways = [(way, sites.found_by.count(way)) for way in WAYS]
        parts = ", ".join(f"{count} by {WAYS[way]}" for way, count in ways if count)
        words = f"{counted(len(marks.bouton), 'bouton')}: {parts}."
        if np.isfinite(sites.expected_false):
            words += f" Of those that respond, {short(sites.expected_false)} are expected to be false."
        return words

    def _fill_list(self) -> None:
        self._filling = True
        self.table.fill(self.layers.marks.features)
        self._filling = False
        self._show_selection()

    def _show_selection(self) -> None:
        self._filling = True
        self.table.select_rows(np.flatnonzero(np.isin(self.layers.marks.bouton, self.layers.selected)).tolist())
        self._filling = False
        self.trace.refresh()

    def _show_axon(self) -> None:
        self.draw_axon.setEnabled(self.model.pipeline is not None)
        self.draw_axon.setChecked(self.axon.drawing)
        has_path = self.axon.path_px is not None
        self.clear_axon.setEnabled(has_path)
        if self.axon.drawing:
            self.axon_words.setText("Click along the axon; a double click ends it.")
        else:
            self.axon_words.setText("Boutons are numbered along it." if has_path else "Boutons run top to bottom.")

    # what the person does

    def _find(self) -> None:
        if movie_layer(self.viewer) is None:
            self.message.setText(NO_RECORDING)
            return
        self.layers.measure()

    def _choose_share(self, step: int) -> None:
        if not self._filling:
            share = _LEAST * (_MOST / _LEAST) ** (step / _STEPS)
            self.model.choose("detection", false_discovery=float(f"{min(share, _MOST):.2g}"))
            self._show_preview()

    def _show_preview(self, *_: object) -> None:
        shown = self.preview.isChecked() and self.model.traced is not None
        self.pictures.show_evidence(shown)
        passing = self.pictures.show_passing(self.model.settings.detection.false_discovery if shown else None)
        if not shown:
            self.preview_words.setText("")
        elif passing is None:
            self.preview_words.setText("There is no evidence: boutons were given, or too few stimuli were recorded.")
        else:
            self.preview_words.setText(
                f"{counted(passing[0], 'maximum', 'maxima')} pass a cut of {short(passing[1])} nats."
            )
        self.preview_words.setVisible(bool(self.preview_words.text()))

    def _show_pictures(self, *_: object) -> None:
        self.pictures.show_mean(self.mean.isChecked())

    def _follow_pictures(self) -> None:
        """Uncheck what was taken out of the list of layers."""
        self.preview_words.setVisible(bool(self.preview_words.text()))
        for box, name in ((self.mean, MEAN), (self.preview, EVIDENCE)):
            layers = (name, PASSING) if box is self.preview else (name,)
            if box.isChecked() and self.model.traced is not None and not any(map(self.pictures.layer, layers)):
                box.setChecked(False)

    def _set_mode(self, mode: str) -> None:
        self.axon.end()
        self.layers.set_mode(mode)
        self._show()

    def _merge(self) -> None:
        try:
            self.model.select(bouton=merge_boutons(self.model, self.layers.selected))
        except InputError as error:
            self.message.setText(str(error))

    def _redraw(self) -> None:
        selected = self.layers.selected
        if len(selected) == 1:
            self.layers.begin_redrawing(selected[0])
            labels = self.layers.footprints
            if labels is not None:
                self.brush.setValue(int(labels.brush_size))
            self.erase.setChecked(False)

    def _set_brush(self, width: int) -> None:
        labels = self.layers.footprints
        if labels is not None and self.layers.redrawing is not None:
            labels.brush_size = width

    def _set_erasing(self, on: bool) -> None:
        labels = self.layers.footprints
        if labels is not None and self.layers.redrawing is not None:
            labels.mode = "erase" if on else "paint"

    def _select_rows(self) -> None:
        if not self._filling:
            ids = self.layers.marks.bouton
            self.layers.select(tuple(int(ids[row]) for row in sorted(self.table.rows()) if row < len(ids)))

    def _draw_axon(self, on: bool) -> None:
        if on:
            self.axon.begin()
        else:
            self.axon.end()
        self._show()

    def _set_following(self, on: bool) -> None:
        self.axon.follow_light = on

    def closing(self) -> None:
        """Take the previews away and stop drawing."""
        if self.layers.redrawing is not None:
            self.layers.cancel_redrawing()
        self.pictures.remove()


def _button(text: str, meaning: str, *, checkable: bool = False) -> QPushButton:
    button = QPushButton(text)
    button.setToolTip(meaning)
    button.setCheckable(checkable)
    return button
