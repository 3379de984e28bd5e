"""The stimulation protocol as a form: calibration, stimulus times, and a fixed response shape where one is wanted."""

from __future__ import annotations

import re
from collections.abc import Callable
from dataclasses import replace
from pathlib import Path
from typing import TYPE_CHECKING

from qtpy.QtCore import Signal
from qtpy.QtWidgets import (
    QCheckBox,
    QComboBox,
    QGridLayout,
    QHBoxLayout,
    QLabel,
    QPushButton,
    QSizePolicy,
    QStackedWidget,
    QVBoxLayout,
    QWidget,
)

from ..errors import InputError
from ..recording import Protocol, RegularStimuli, StimulusTable, read_stimulus_table
from ..response_shape import ResponseShape
from .number_field import NumberField

if TYPE_CHECKING:
    from ..recording import Movie, Timing

_CALIBRATION = {
    "frame_interval_s": ("Frame interval", "s", "From the start of a frame to the start of the next."),
    "pixel_size_um": ("Pixel size", "µm", "Width of a pixel in the sample."),
    "exposure_s": ("Exposure", "s", "How long a pixel collects light in each frame. Empty: the whole frame interval."),
    "row_time_s": (
        "Row delay",
        "s",
        "How much later each row is exposed than the row above: rolling shutter, line scan. Empty: all rows at once.",
    ),
    "camera_offset": ("Camera offset", "counts", "What a pixel reads without light. Empty: unknown."),
}
_STIMULI = {
    "first_s": ("First pulse", "s", "From the start of the movie; of each file, where a trial is a file.", False),
    "trials": ("Trials", "", "How many times the stimulus was repeated.", True),
    "trial_interval_s": ("Between trials", "s", "From the first pulse of a trial to the first of the next.", False),
    "pulses": ("Pulses a trial", "", "1: single pulses, 2: pairs, more: trains.", True),
    "pulse_interval_s": ("Between pulses", "s", "From one pulse of a trial to the next.", False),
}
_SHAPE = {
    "rise_s": ("Rise", "s", "Time constant of the rise."),
    "decay_s": ("Decay", "s", "Time constant of the decay."),
    "latency_s": ("Latency", "s", "From the stimulus to the start of the response."),
}
_REGULAR, _TABLE = 0, 1
_NAMES = {key: about[0] for section in (_CALIBRATION, _STIMULI, _SHAPE) for key, about in section.items()}
# `trials` and `pulses` are everyday words as well
_KEY = re.compile(r"\b(\w+_(?:s|um)|camera_offset)\b|\b(?:trials|pulses)\b(?= (?:=|must|is missing))")


class ProtocolForm(QWidget):
    """Shows a protocol and makes one of what is entered.

    Signals
    -------
    changed
        A person has changed something.
    """

    changed = Signal()

    def __init__(self) -> None:
        super().__init__()
        self.calibration = {key: NumberField(*about) for key, about in _CALIBRATION.items()}
        self.stimuli = {key: NumberField(*about[:3], whole=about[3]) for key, about in _STIMULI.items()}
        self.shape = {key: NumberField(*about) for key, about in _SHAPE.items()}
        self.table: StimulusTable | None = None
        self._protocol: Protocol | None = None
        self.kind = QComboBox()
        self.kind.addItems(["at regular intervals", "from a table of times"])
        self.kind.setToolTip("A table is a CSV file with the columns trial, pulse and time_s.")
        self.kind.activated.connect(self._choose_kind)
        self.table_button = QPushButton("Choose the table...")
        self.table_words = QLabel()
        self.table_words.setWordWrap(True)
        self.table_words.setSizePolicy(QSizePolicy.Policy.Ignored, QSizePolicy.Policy.Preferred)
        self.fixed_shape = QCheckBox("Fixed response shape")
        self.fixed_shape.setToolTip("State the time course of a response instead of measuring it in the recording.")
        self.fixed_shape.clicked.connect(self._choose_shape)
        self._lay_out()
        for field in (*self.calibration.values(), *self.stimuli.values(), *self.shape.values()):
            field.entered.connect(self.changed)

    def _lay_out(self) -> None:
        self._pages = QStackedWidget()
        self._pages.addWidget(_grid(list(self.stimuli.values()), origins=False))
        table = QWidget()
        row = QHBoxLayout(table)
        row.setContentsMargins(0, 0, 0, 0)
        row.addWidget(self.table_button)
        row.addWidget(self.table_words, 1)
        self._pages.addWidget(table)
        self._shape_grid = _grid(list(self.shape.values()), origins=False)
        self._shape_grid.setVisible(False)
        heading = QHBoxLayout()
        heading.addWidget(QLabel("Stimuli"))
        heading.addWidget(self.kind, 1)
        column = QVBoxLayout(self)
        column.setContentsMargins(0, 0, 0, 0)
        column.setSpacing(6)
        column.addWidget(_grid(list(self.calibration.values()), origins=True))
        column.addLayout(heading)
        column.addWidget(self._pages)
        column.addWidget(self.fixed_shape)
        column.addWidget(self._shape_grid)
        self._show_page(_REGULAR)

    def show_protocol(self, protocol: Protocol | None, movie: Movie | None, *, origin: str = "") -> None:
        """Fill the form.

        Parameters
        ----------
        protocol : Protocol or None
            None empties the stimuli.
        movie : Movie or None
            Shows its own calibration where the protocol states none.
        origin : str
            Where the protocol comes from, in words.
        """
        self._protocol = protocol
        for key, field in self.calibration.items():
            value = getattr(protocol, key, None)
            if value is not None:
                field.fill(value, origin="protocol", details=origin)
            else:
                field.fill(getattr(movie, key, None), origin=_origin_in(movie, key), stated=False)
        stimuli = getattr(protocol, "stimuli", None)
        regular = stimuli if isinstance(stimuli, RegularStimuli) else None
        for key, field in self.stimuli.items():
            field.fill(getattr(regular, key, None))
        self.show_table(stimuli if isinstance(stimuli, StimulusTable) else None)
        self._show_page(_REGULAR if self.table is None else _TABLE)
        reporter = getattr(protocol, "reporter", None)
        for key, field in self.shape.items():
            field.fill(getattr(reporter, key, None))
        self.fixed_shape.setChecked(reporter is not None)
        self._shape_grid.setVisible(reporter is not None)

    def show_table(self, table: StimulusTable | None) -> None:
        """Take a table of times."""
        self.table = table
        words = "trial, pulse, time_s"
        if table is not None:
            words = f"{len(table.time_s)} pulses in {table.trials} trials, from {Path(table.source).name}"
        self.table_words.setText(words)

    def read_table(self, path: str | Path) -> None:
        """Read a table of times from a CSV file.

        Raises
        ------
        ProtocolError
            If it is no such table.
        """
        self.show_table(read_stimulus_table(Path(path)))
        self._show_page(_TABLE)
        self.changed.emit()

    def show_timing(self, timing: Timing, movie: Movie) -> None:
        """Say beside each calibration where it was found, with what the movie says otherwise."""
        for key, field in self.calibration.items():
            found = timing.found_in.get(key, "")
            if field.stated() is None:
                field.origin.setText(found)
                continue
            origin = field.origin.text().partition("; ")[0]
            own = getattr(movie, key, None)
            differs = own is not None and found != "protocol"
            field.origin.setText(f"{origin}; {_origin_in(movie, key)} says {own:g}" if differs else origin)

    @property
    def empty(self) -> bool:
        """Whether nothing about the stimuli is entered yet."""
        if self.kind.currentIndex() == _TABLE:
            return self.table is None
        return not any(field.text().strip() for field in self.stimuli.values())

    def protocol(self) -> Protocol:
        """Make the protocol that is entered.

        Raises
        ------
        InputError
            If something is missing, no number, out of range or contradictory; the message names the field.
        """
        stated = {key: field.stated() for key, field in self.calibration.items()}
        path = None if self._protocol is None else self._protocol.path
        return _named(lambda: Protocol(**stated, stimuli=self._stimuli(), reporter=self._reporter(), path=path))

    def _stimuli(self) -> RegularStimuli | StimulusTable:
        if self.kind.currentIndex() == _TABLE:
            if self.table is None:
                raise InputError("Choose the table of stimulus times: a CSV file with trial, pulse and time_s.")
            return self.table
        values = {key: field.number() for key, field in self.stimuli.items()}
        for key in ("first_s", "trials"):
            if values[key] is None:
                raise InputError(f"{self.stimuli[key].name} is missing: give when the axon was stimulated.")
        if values["pulses"] is None:
            values["pulses"] = 1
        return RegularStimuli(**values)  # type: ignore[arg-type]

    def _reporter(self) -> ResponseShape | None:
        if not self.fixed_shape.isChecked():
            return None
        values = {key: field.number() for key, field in self.shape.items()}
        for key in ("rise_s", "decay_s"):
            if values[key] is None:
                raise InputError(f"{self.shape[key].name} is missing: give it in s, or do not fix the response shape.")
        known = {key: 0.0 if value is None else value for key, value in values.items()}
        before = None if self._protocol is None else self._protocol.reporter
        return ResponseShape(**known) if before is None else replace(before, **known)

    def _choose_kind(self, page: int) -> None:
        self._show_page(page)
        self.changed.emit()

    def _show_page(self, page: int) -> None:
        self.kind.setCurrentIndex(page)
        self._pages.setCurrentIndex(page)
        for k in range(self._pages.count()):  # the hidden page must not take room
            policy = QSizePolicy.Policy.Preferred if k == page else QSizePolicy.Policy.Ignored
            self._pages.widget(k).setSizePolicy(policy, policy)
        self._pages.adjustSize()

    def _choose_shape(self, fixed: bool) -> None:
        self._shape_grid.setVisible(fixed)
        self.changed.emit()


def in_words(message: str) -> str:
    """Call the fields of the form by their names in a message that speaks of the protocol's keys.

    Examples
    --------
    >>> in_words("[stimuli] trial_interval_s must be greater than 0 (given -1).")
    '“Between trials” must be greater than 0 (given -1).'
    """
    message = re.sub(r"\[(stimuli|recording|reporter)\] ", "", message)
    message = message.replace(" to [recording] of the protocol", "").replace(" = ...", "")
    return _KEY.sub(lambda found: f"“{_NAMES.get(found[0], found[0])}”", message)


def _named(make: Callable[[], Protocol]) -> Protocol:
    try:
        return make()
    except InputError as error:
        raise InputError(in_words(str(error))) from error


def _origin_in(movie: Movie | None, key: str) -> str:
    return "" if movie is None else movie.found_in.get(key, "")


def _grid(fields: list[NumberField], *, origins: bool) -> QWidget:
    """Lay fields out with their names, and where their values came from."""
    widget = QWidget()
    grid = QGridLayout(widget)
    grid.setContentsMargins(0, 0, 0, 0)
    grid.setHorizontalSpacing(6)
    grid.setVerticalSpacing(4)
    for k, field in enumerate(fields):
        grid.addWidget(field.label, k, 0)
        grid.addWidget(field, k, 1)
        if origins:
            grid.addWidget(field.origin, k, 2)
    grid.setColumnStretch(2, 1)
    return widget
