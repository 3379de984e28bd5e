"""A field for one number that knows its name, its unit, and where its value came from."""

from __future__ import annotations

import math

from qtpy.QtCore import Signal
from qtpy.QtWidgets import QLabel, QLineEdit, QSizePolicy

from ..errors import InputError

TYPED = "typed here"
_WIDTH_PX = 84


class NumberField(QLineEdit):
    """One number, or nothing.

    Parameters
    ----------
    name : str
        What it is called in the form and in messages.
    unit : str
        Shown with the name.
    meaning : str
        Tooltip.
    whole : bool
        Whether only whole numbers are meant.

    Signals
    -------
    entered
        A person has changed the number and left the field.
    """

    entered = Signal()

    def __init__(self, name: str, unit: str, meaning: str, *, whole: bool = False) -> None:
        super().__init__()
        self.name = name
        self.label = QLabel(f"{name} ({unit})" if unit else name)
        self.label.setToolTip(meaning)
        self.label.setBuddy(self)
        self.origin = QLabel()
        self.origin.setWordWrap(True)
        self.origin.setSizePolicy(QSizePolicy.Policy.Ignored, QSizePolicy.Policy.Preferred)
        self.setToolTip(meaning)
        self.setAccessibleName(self.label.text())
        self.setFixedWidth(_WIDTH_PX)
        self._whole = whole
        self._stated = False
        self._text = ""
        self.editingFinished.connect(self._finish)

    def fill(self, value: float | None, *, origin: str = "", details: str = "", stated: bool = True) -> None:
        """Show a value, where it comes from, and whether the protocol states it or the movie's own file does."""
        self._text = "" if value is None else f"{value:.10g}"
        self._stated = stated and value is not None
        self.setText(self._text)
        self.setCursorPosition(0)
        self.origin.setText(origin)
        self.origin.setToolTip(details)

    def stated(self) -> float | None:
        """Return the number that the protocol states; None where the field is empty or shows the movie's own value.

        Raises
        ------
        InputError
            If the text is no such number.
        """
        return self.number() if self._stated or self.text() != self._text else None

    def number(self) -> float | None:
        """Return the number in the field, None if it is empty.

        Raises
        ------
        InputError
            If the text is no such number.
        """
        text = self.text().strip().replace(",", ".").replace("\N{MINUS SIGN}", "-")
        if not text:
            return None
        try:
            value = int(text) if self._whole else float(text)
        except ValueError as error:
            kind = "a whole number" if self._whole else "a number"
            raise InputError(f"{self.name} must be {kind}, without a unit (given {self.text().strip()}).") from error
        if not math.isfinite(value):
            raise InputError(f"{self.name} must be a finite number (given {text}).")
        return value

    def _finish(self) -> None:
        if self.text() != self._text:
            self._text = self.text()
            self._stated = bool(self._text.strip())
            self.origin.setText(TYPED if self._stated else "")
            self.origin.setToolTip("")
            self.entered.emit()
