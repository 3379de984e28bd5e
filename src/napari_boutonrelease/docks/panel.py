"""What all docks share: the state of their viewer, links to it that end with the dock, and room to scroll."""

from __future__ import annotations

from collections.abc import Callable
from contextlib import suppress
from typing import TYPE_CHECKING, Any
from weakref import WeakKeyDictionary

from qtpy.QtCore import QEvent, Qt
from qtpy.QtGui import QKeyEvent
from qtpy.QtWidgets import QDockWidget, QFrame, QLabel, QScrollArea, QSizePolicy, QVBoxLayout, QWidget

from ..analysis.model import AnalysisModel
from .binding import warn_of_binding
from .worker import runner_of

if TYPE_CHECKING:
    import napari

_MODELS: WeakKeyDictionary[Any, AnalysisModel] = WeakKeyDictionary()
_PANELS: WeakKeyDictionary[AnalysisModel, int] = WeakKeyDictionary()

_GAP_PX = 6


def bare_viewer(viewer: Any) -> Any:
    """Return the viewer itself where napari has handed out a stand-in."""
    return getattr(viewer, "__wrapped__", viewer)


def model_of(viewer: Any) -> AnalysisModel:
    """Return the analysis that belongs to a viewer; it holds no reference to the viewer."""
    viewer = bare_viewer(viewer)  # a stand-in dies with its panel
    model = _MODELS.get(viewer)
    if model is None:
        model = _MODELS[viewer] = AnalysisModel()
    return model


class Panel(QScrollArea):
    """Base of every dock: scrolls instead of overflowing, and forgets its viewer when it is closed.

    Subclasses fill `column` and call `link` for every signal of the model or the viewer that they watch.

    Attributes
    ----------
    viewer, model, runner
        What the panel shows, and what works for it.
    body : QWidget
        What scrolls.
    column : QVBoxLayout
        Its layout, from top to bottom.
    """

    def __init__(self, napari_viewer: napari.viewer.Viewer) -> None:
        super().__init__()
        warn_of_binding()
        self.viewer = bare_viewer(napari_viewer)
        self.model = model_of(self.viewer)
        self.runner = runner_of(self.model)
        self._links: list[tuple[Any, Callable[..., Any]]] = []
        self._open = True
        self._in_sight = True
        self._missed: dict[str, Callable[[], object]] = {}
        _PANELS[self.model] = _PANELS.get(self.model, 0) + 1
        self.body = QWidget()
        self.column = QVBoxLayout(self.body)
        self.column.setContentsMargins(_GAP_PX, _GAP_PX, _GAP_PX, _GAP_PX)
        self.column.setSpacing(_GAP_PX)
        self.setWidget(self.body)
        self.setWidgetResizable(True)
        self.setFrameShape(QFrame.Shape.NoFrame)
        self.setHorizontalScrollBarPolicy(Qt.ScrollBarPolicy.ScrollBarAsNeeded)

    def link(self, signal: Any, slot: Callable[..., Any]) -> None:
        """Connect a signal of the model, a layer or the viewer to a method of this panel, until it is closed."""
        signal.connect(slot)
        self._links.append((signal, slot))

    def when_seen(self, show: Callable[[], object]) -> None:
        """Call a method of this panel now, or, while another dock's tab hides it, once as soon as it is seen again."""
        if self._in_sight:
            show()
        else:
            self._missed[show.__name__] = show

    def _sight(self, visible: bool) -> None:
        self._in_sight = visible
        if visible and self._open:
            missed, self._missed = self._missed, {}
            for show in missed.values():
                show()

    def unlink(self, *_: object) -> None:
        """Let go of everything watched; the work that only this analysis' last panel waits for ends."""
        while self._links:
            signal, slot = self._links.pop()
            with suppress(ValueError, TypeError, RuntimeError, KeyError):  # its sender may be gone already
                signal.disconnect(slot)
        if self._open:
            self._open = False
            _PANELS[self.model] -= 1
            if not _PANELS[self.model]:
                self.runner.cancel()
            self.closing()

    def closing(self) -> None:
        """Put back what the panel has changed in the viewer; called once."""

    def event(self, event: QEvent) -> bool:
        """Notice when the dock around the panel is closed."""
        if event.type() == QEvent.Type.ParentChange:
            dock = self.parent()
            if dock is not None:
                dock.destroyed.connect(self.unlink)  # the window was closed
                if isinstance(dock, QDockWidget):
                    dock.visibilityChanged.connect(self._sight)
            else:
                self.unlink()  # the x of the dock was clicked
        return bool(super().event(event))

    def keyPressEvent(self, event: QKeyEvent) -> None:
        """Keep keys that delete things from reaching the viewer's layers."""
        if event.key() not in (Qt.Key.Key_Delete, Qt.Key.Key_Backspace):
            super().keyPressEvent(event)


def sentence_label(text: str = "") -> QLabel:
    """Make a label for sentences: they wrap, and can be selected."""
    label = QLabel(text)
    label.setWordWrap(True)
    label.setTextInteractionFlags(Qt.TextInteractionFlag.TextSelectableByMouse)
    label.setSizePolicy(QSizePolicy.Policy.Ignored, QSizePolicy.Policy.Preferred)
    return label
