"""The Recording dock: which movie, its frames and pixels, when the axon was stimulated, and how good it is."""

from __future__ import annotations

import html
from pathlib import Path
from typing import TYPE_CHECKING

from qtpy.QtCore import Qt
from qtpy.QtWidgets import (
    QCheckBox,
    QComboBox,
    QFileDialog,
    QHBoxLayout,
    QLabel,
    QPushButton,
    QSizePolicy,
    QWidget,
)

from ..errors import InputError
from ..recording import Protocol, read_protocol, resolve_timing, write_protocol
from .layers import (
    add_movie,
    current_frame,
    image_layers,
    movie_layer,
    movie_of_layer,
    recalibrate,
    set_movie_layer,
    text_overlay,
)
from .number_field import NumberField
from .open_movie import OpenMovieButton
from .panel import Panel, sentence_label
from .protocol_form import ProtocolForm, in_words
from .quality import findings
from .stimulus_plot import StimulusPlot, frame_in_words
from .worker import ANALYSIS, ProgressRow, run_analysis_step

if TYPE_CHECKING:
    import napari
    from napari.layers import Image

    from ..analysis.measured import Measured
    from ..recording import Movie, Timing
    from .open_movie import OpenedMovie

_PROTOCOL_FILES = "Protocols (*.toml)"


class RecordingDock(Panel):
    """First step: what was recorded."""

    def __init__(self, napari_viewer: napari.viewer.Viewer) -> None:
        super().__init__(napari_viewer)
        self.timing: Timing | None = None
        self._movie: Movie | None = None
        self._origin = ""
        self._overlay: tuple[bool, str] | None = None
        self._build()
        layers = self.viewer.layers.events
        for name in ("inserted", "removed", "reordered", "renamed"):
            if hasattr(layers, name):
                self.link(getattr(layers, name), self._list_layers)
        self.link(self.viewer.dims.events.point, self._show_frame)
        self.link(self.model.recording_changed, self._follow_model)
        self.link(self.model.measured_changed, self._show_measured)
        self.link(self.model.settings_changed, self._show_settings)
        self.link(self.model.edits_changed, self._show_state)
        self._list_layers()
        self._show_settings()
        if self.model.protocol is not None:
            self._follow_model()

    def _build(self) -> None:
        self.movies = QComboBox()
        self.movies.setToolTip("The image layer to analyse: a movie, (frame, y, x).")
        self.movies.setAccessibleName("Movie")
        self.movies.setSizeAdjustPolicy(QComboBox.SizeAdjustPolicy.AdjustToMinimumContentsLengthWithIcon)
        self.movies.setSizePolicy(QSizePolicy.Policy.Expanding, QSizePolicy.Policy.Fixed)
        self.movies.setPlaceholderText("no movie yet")
        self.movies.activated.connect(self._choose_listed)
        self.open_button = OpenMovieButton(self.runner)
        self.open_button.opened.connect(self._take_opened)
        self.column.addLayout(_row(self.movies, self.open_button))
        self.about = sentence_label("Open a movie, drop one on the viewer, or take one from File > Open Sample.")
        self.column.addWidget(self.about)
        self.analyse_button = QPushButton("Analyse")
        self.analyse_button.setToolTip("Find the boutons, measure every response, and fit release and quanta.")
        self.analyse_button.clicked.connect(self.analyse)
        self.column.addWidget(self.analyse_button)  # near the top: in sight however low the dock is
        self.progress = ProgressRow(self.runner)
        self.column.addWidget(self.progress)
        self.state = sentence_label()
        self.column.addWidget(self.state)

        self.form = ProtocolForm()
        self.form.changed.connect(self._apply)
        self.form.table_button.clicked.connect(self._ask_table)
        self.column.addWidget(self.form)
        self.load_button = QPushButton("Load protocol...")
        self.load_button.setToolTip("Read calibration and stimulus times from a protocol file (TOML).")
        self.load_button.clicked.connect(self._ask_protocol)
        self.save_button = QPushButton("Save protocol...")
        self.save_button.setToolTip("Write them to a protocol file, which the command line reads as well.")
        self.save_button.clicked.connect(self._ask_save)
        self.column.addLayout(_row(self.load_button, self.save_button))
        self.error = sentence_label()
        self.error.setVisible(False)
        self.column.addWidget(self.error)

        self.plot = StimulusPlot(self)
        self.column.addWidget(self.plot)
        self.frame_words = sentence_label()
        self.column.addWidget(self.frame_words)

        self.follow = QCheckBox("Follow the sample's movement, at most")
        self.follow.setToolTip("Boutons are followed from frame to frame; the movie itself is not changed.")
        self.follow.clicked.connect(self._choose_movement)
        self.max_shift = NumberField("Largest movement", "px", "How far the sample may have moved from its mean place.")
        self.max_shift.setFixedWidth(48)
        self.max_shift.entered.connect(self._choose_movement)
        row = _row(self.follow, self.max_shift, QLabel("px"))
        row.addStretch(1)
        self.column.addLayout(row)

        self.quality = sentence_label()
        self.quality.setTextFormat(Qt.TextFormat.RichText)
        self.column.addWidget(self.quality)
        self.column.addStretch(1)
        self.runner.changed.connect(self._show_state)
        self._show_state()

    # the movie

    def _take_opened(self, opened: OpenedMovie) -> None:
        self.model.choose("recording", channel=opened.channel)
        self.choose_layer(add_movie(self.viewer, opened.movie, **opened.layer_settings))

    def choose_layer(self, layer: Image) -> None:
        """Take a layer as the movie to analyse, with the protocol that comes with it."""
        try:
            movie = movie_of_layer(layer)
        except InputError as error:
            self._show_error(str(error))
            self._list_layers()
            return
        set_movie_layer(self.viewer, layer)
        self._list_layers()
        if movie is not self._movie:
            self._movie = movie
            protocol, origin = _protocol_with(layer, movie)
            self._take_protocol(protocol, origin=origin)

    def _list_layers(self, *_: object) -> None:
        chosen, listed = movie_layer(self.viewer), image_layers(self.viewer)
        self.movies.clear()
        self.movies.addItems([layer.name for layer in listed])
        self.movies.setCurrentIndex(listed.index(chosen) if chosen in listed else -1)
        if chosen is None and listed and self.model.movie is None:
            self.choose_layer(listed[-1])

    def _choose_listed(self, index: int) -> None:
        self.choose_layer(image_layers(self.viewer)[index])

    # the protocol

    def load_protocol(self, path: str | Path) -> None:
        """Fill the form from a protocol file."""
        try:
            protocol = read_protocol(path)
        except InputError as error:
            self._show_error(str(error))
            return
        self._take_protocol(protocol, origin=f"from {Path(path).name}")

    def save_protocol(self, path: str | Path) -> None:
        """Write what the form says to a protocol file."""
        try:
            write_protocol(self.form.protocol(), path)
        except InputError as error:
            self._show_error(str(error))

    def _ask_protocol(self) -> None:
        path, _ = QFileDialog.getOpenFileName(self, "Load a protocol", self._beside(), _PROTOCOL_FILES)
        if path:
            self.load_protocol(path)

    def _ask_save(self) -> None:
        name = "recording" if self._movie is None else self._movie.name
        path, _ = QFileDialog.getSaveFileName(
            self, "Save the protocol", str(Path(self._beside()) / f"{name}.protocol.toml"), _PROTOCOL_FILES
        )
        if path:
            self.save_protocol(path if path.endswith(".toml") else f"{path}.toml")

    def _ask_table(self) -> None:
        path, _ = QFileDialog.getOpenFileName(self, "Table of stimulus times", self._beside(), "Tables (*.csv)")
        if path:
            try:
                self.form.read_table(path)
            except InputError as error:
                self._show_error(str(error))

    def _beside(self) -> str:
        return str(self._movie.files[0].parent) if self._movie is not None and self._movie.files else ""

    def _take_protocol(self, protocol: Protocol | None, *, origin: str) -> None:
        self._origin = origin
        self.form.show_protocol(protocol, self._movie, origin=origin)
        self._apply()

    def _apply(self) -> None:
        """Take what the form says into the analysis, or say why that cannot be."""
        movie = self._movie
        self.timing = None
        if movie is None or self.form.empty:
            self._show_error("")
            if movie is not None and self.model.movie not in (None, movie):
                self.model.close()
            self._show_recording()
            return
        try:
            protocol = self.form.protocol()
            self.timing = resolve_timing(movie, protocol)
        except InputError as error:
            self._show_error(in_words(str(error)))
            if self.model.movie is not None:
                self.model.close()
            self._show_recording()
            return
        self._show_error("")
        self.form.show_timing(self.timing, movie)
        layer = movie_layer(self.viewer)
        if layer is not None:
            recalibrate(self.viewer, layer, self.timing)
        if self.model.movie is not movie or self.model.protocol != protocol:
            before = self.model.pipeline
            if before is not None and before.movie is movie:
                self.model.open(movie, protocol, boutons=before.boutons, axon=before.axon)
            else:
                self.model.open(movie, protocol)
        self._show_recording()

    def _follow_model(self) -> None:
        """Show the recording that the analysis holds, where something else than this form has changed it."""
        movie, protocol = self.model.movie, self.model.protocol
        if movie is None or protocol is None:
            self._show_recording()
            return
        try:
            shown = self._movie is movie and not self.form.empty and self.form.protocol() == protocol
        except InputError:
            shown = False
        if not shown:
            self._movie = movie
            self._list_layers()
            origin = "from the analysis" if protocol.path is None else f"from {protocol.path.name}"
            self._take_protocol(protocol, origin=origin)
        self._show_recording()

    # movement

    def _choose_movement(self, *_: object) -> None:
        try:
            most = self.max_shift.number()
            if most is None or most <= 0:
                raise InputError("The largest movement must be greater than 0 px.")
        except InputError as error:
            self._show_error(str(error))
            return
        self.model.choose("recording", correct_motion=self.follow.isChecked(), max_shift_px=most)

    def _show_settings(self) -> None:
        chosen = self.model.settings.recording
        self.follow.setChecked(chosen.correct_motion)
        self.max_shift.fill(chosen.max_shift_px)
        self.max_shift.setEnabled(chosen.correct_motion)
        self._show_state()

    # the analysis

    def analyse(self) -> None:
        """Run the whole analysis."""
        run_analysis_step(self.model)

    def _show_measured(self) -> None:
        self._show_recording()

    def _show_recording(self) -> None:
        movie, measured = self._movie, self.model.measured
        if movie is not None:
            n_frames, height, width = movie.shape
            size = f"{n_frames} frames of {height} × {width} px, {movie.dtype}"
            files = f", {len(movie.file_frames)} files" if len(movie.file_frames) > 1 else ""
            length = "" if self.timing is None else f", {n_frames * self.timing.frame_interval_s:.4g} s"
            protocol = f"; protocol {self._origin}" if self._origin else ""
            self.about.setText(size + files + length + protocol)
        if measured is None:
            self.quality.setText("")
            self.plot.show_recording(self.timing)
        else:
            light, used = measured.recording.light, measured.drift.used
            self.quality.setText(_as_html(measured))
            self.plot.show_recording(self.timing, light.frame_mean, ~used)
        self._show_state()
        self._show_frame()

    def _show_state(self, *_: object) -> None:
        analysing = self.runner.busy and self.runner.kind == ANALYSIS
        self.analyse_button.setEnabled(self.timing is not None and self.model.movie is not None and not analysing)
        if self.model.measured is None:
            words = ""
            if self._movie is not None and self.form.empty and not self.error.isVisibleTo(self.body):
                words = "Give the stimulus times above, or load them from a protocol file."
        elif self.model.stale:
            words = "Something has changed since the analysis: analyse again."
        else:
            words = ""
        self.state.setText(words)
        self.state.setVisible(bool(words))

    def _show_error(self, sentence: str) -> None:
        self.error.setText(f"✗ {sentence}" if sentence else "")
        self.error.setVisible(bool(sentence))

    # the frame that is shown

    def _show_frame(self, *_: object) -> None:
        frame = current_frame(self.viewer)
        if frame is None or self.timing is None or frame >= len(self.timing.frame_start_s):
            self.frame_words.setText("")
            self._put_overlay_back()
            return
        words = frame_in_words(self.timing, frame)
        self.frame_words.setText(words)
        self.plot.show_frame(frame)
        overlay = text_overlay(self.viewer)
        if self._overlay is None:
            self._overlay = (overlay.visible, overlay.text)
        overlay.text = words
        overlay.visible = True

    def _put_overlay_back(self) -> None:
        if self._overlay is not None:
            overlay = text_overlay(self.viewer)
            overlay.visible, overlay.text = self._overlay
            self._overlay = None

    def closing(self) -> None:
        """Take the words off the viewer."""
        self._put_overlay_back()


def _protocol_with(layer: Image, movie: Movie) -> tuple[Protocol | None, str]:
    """Return the protocol that comes with a movie, in the layer's metadata or beside the file, and its origin."""
    carried = layer.metadata.get("protocol")
    if isinstance(carried, Protocol):
        return carried, "from the layer"
    if movie.files:
        first = movie.files[0]
        places = (first.with_name(f"{movie.name}.protocol.toml"), first.parent.with_name(f"{movie.name}.protocol.toml"))
        for path in places:
            if path.is_file():
                try:
                    return read_protocol(path), f"from {path.name}"
                except InputError:
                    continue
    return None, ""


def _as_html(measured: Measured) -> str:
    rows = [
        f"<p style='margin:2px 0'>{'✓' if one.good else '⚠'} <b>{one.title}</b>: {html.escape(one.sentence)}</p>"
        for one in findings(measured)
    ]
    return "".join(rows)


def _row(*widgets: QWidget) -> QHBoxLayout:
    row = QHBoxLayout()
    row.setSpacing(6)
    for widget in widgets:
        row.addWidget(widget)
    return row
