"""A form of some settings: each field's kind, range, unit and meaning come from the settings' own definition."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any, Literal, get_args, get_origin

from pydantic import ValidationError
from pydantic.fields import FieldInfo
from qtpy.QtCore import Qt
from qtpy.QtGui import QWheelEvent
from qtpy.QtWidgets import QCheckBox, QComboBox, QDoubleSpinBox, QFormLayout, QWidget

from ..analysis.model import AnalysisModel
from ..analysis.settings import Settings
from .panel import Panel

_UNITS = {"um": "µm", "px": "px", "s": "s", "sd": "noise_sd"}
_LARGEST = 1e6


@dataclass(frozen=True, slots=True, kw_only=True)
class Row:
    """One setting in a form.

    Attributes
    ----------
    step, name : str
        Where it stands in the settings.
    words : str
        Its label, without the unit.
    """

    step: str
    name: str
    words: str

    @property
    def field(self) -> FieldInfo:
        """Its definition."""
        step: Any = Settings.model_fields[self.step].annotation
        found: FieldInfo = step.model_fields[self.name]
        return found

    @property
    def label(self) -> str:
        """Label with unit."""
        unit = _UNITS.get(self.name.rsplit("_", 1)[-1])
        return f"{self.words} ({unit})" if unit else self.words


class SettingsForm(QWidget):
    """Shows settings of the model and changes them there.

    Parameters
    ----------
    panel : Panel
        The dock it belongs to.
    rows : sequence of Row
        From top to bottom.

    Attributes
    ----------
    fields : dict of str to QWidget
        Editor of each setting by its name.
    """

    def __init__(self, panel: Panel, rows: Sequence[Row]) -> None:
        super().__init__()
        self._model: AnalysisModel = panel.model
        self._rows = tuple(rows)
        self._filling = False
        self.fields: dict[str, QWidget] = {}
        form = QFormLayout(self)
        form.setContentsMargins(0, 0, 0, 0)
        form.setRowWrapPolicy(QFormLayout.RowWrapPolicy.WrapLongRows)
        form.setFieldGrowthPolicy(QFormLayout.FieldGrowthPolicy.FieldsStayAtSizeHint)
        for row in self._rows:
            editor = self._editor(row)
            meaning = (row.field.description or "").strip()
            editor.setToolTip(meaning)
            editor.setAccessibleName(row.label)
            self.fields[row.name] = editor
            if isinstance(editor, QCheckBox):
                editor.setText(row.label)
                form.addRow(editor)
            else:
                form.addRow(row.label, editor)
                form.labelForField(editor).setToolTip(meaning)
        panel.link(panel.model.settings_changed, self.fill)
        self.fill()

    def fill(self) -> None:
        """Show what the model holds."""
        self._filling = True
        for row in self._rows:
            value, editor = getattr(getattr(self._model.settings, row.step), row.name), self.fields[row.name]
            if isinstance(editor, QCheckBox):
                editor.setChecked(bool(value))
            elif isinstance(editor, QComboBox):
                editor.setCurrentText(str(value))
            else:
                editor.setValue(float(value))
        self._filling = False

    def _editor(self, row: Row) -> Any:
        kind: Any = row.field.annotation
        if kind is bool:
            box = QCheckBox()
            box.toggled.connect(lambda on: self._choose(row, on))
            return box
        if get_origin(kind) is Literal:
            choice = _Choice()
            choice.addItems([str(one) for one in get_args(kind)])
            choice.currentTextChanged.connect(lambda text: self._choose(row, text))
            return choice
        spin = _Spin()
        spin.setDecimals(3)
        spin.setRange(*_range(row.field))
        spin.setSingleStep(_step(float(row.field.default)))
        spin.setKeyboardTracking(False)
        spin.valueChanged.connect(lambda value: self._choose(row, value))
        return spin

    def _choose(self, row: Row, value: Any) -> None:
        if self._filling:
            return
        try:
            self._model.choose(row.step, **{row.name: value})
        except ValidationError:
            self.fill()


class _Spin(QDoubleSpinBox):
    """A number that the wheel changes only where it was clicked before: a dock is scrolled over it."""

    def __init__(self) -> None:
        super().__init__()
        self.setFocusPolicy(Qt.FocusPolicy.StrongFocus)

    def textFromValue(self, value: float) -> str:
        return f"{value:g}"

    def wheelEvent(self, event: QWheelEvent) -> None:
        if self.hasFocus():
            super().wheelEvent(event)
        else:
            event.ignore()


class _Choice(QComboBox):
    """A choice that the wheel changes only where it was clicked before."""

    def __init__(self) -> None:
        super().__init__()
        self.setFocusPolicy(Qt.FocusPolicy.StrongFocus)

    def wheelEvent(self, event: QWheelEvent) -> None:
        if self.hasFocus():
            super().wheelEvent(event)
        else:
            event.ignore()


def _range(field: FieldInfo) -> tuple[float, float]:
    """Range of a field; an end that does not belong to it is left out by the smallest step."""
    low, high = -_LARGEST, _LARGEST
    for limit in field.metadata:
        low = float(limit.gt) + 0.001 if getattr(limit, "gt", None) is not None else low
        low = float(limit.ge) if getattr(limit, "ge", None) is not None else low
        high = float(limit.lt) - 0.001 if getattr(limit, "lt", None) is not None else high
        high = float(limit.le) if getattr(limit, "le", None) is not None else high
    return low, high


def _step(value: float) -> float:
    return float(10.0 ** math.floor(math.log10(abs(value) or 1.0) - 0.5))
