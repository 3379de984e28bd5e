"""All docks at once: the steps as tabs on the right, the plots along the bottom."""

from __future__ import annotations

from importlib import import_module
from itertools import pairwise
from typing import TYPE_CHECKING, Any

from napari.settings import get_settings
from qtpy.QtCore import Qt, QTimer
from qtpy.QtWidgets import QVBoxLayout, QWidget

from .panel import Panel, bare_viewer, sentence_label

if TYPE_CHECKING:
    import napari

DOCKS = {
    # title: (module, class, area)
    "Recording": ("recording_dock", "RecordingDock", "right"),
    "Boutons": ("boutons_dock", "BoutonsDock", "right"),
    "Axon": ("axon_dock", "AxonDock", "right"),
    "Results": ("results_dock", "ResultsDock", "right"),
    "Responses": ("responses_dock", "ResponsesDock", "bottom"),
    "Quantal": ("quantal_dock", "QuantalDock", "bottom"),
}
_RIGHT_PX, _BOTTOM_SHARE = 400, 0.42


def dock_name(title: str) -> str:
    """Return the name that napari's menu gives a dock, so that both ways lead to the same one."""
    return f"{title} (Bouton release)"


def open_dock(viewer: Any, title: str, *, tabify: bool = False) -> Any:
    """Open one dock, or bring the one that is open to the front; return what napari puts around it."""
    viewer = bare_viewer(viewer)
    module, name, area = DOCKS[title]
    inner = viewer.window.dock_widgets.get(dock_name(title))
    if inner is None:
        make = getattr(import_module(f".{module}", __package__), name)
        places = getattr(get_settings().application, "plugin_widget_positions", {})
        return viewer.window.add_dock_widget(
            make(viewer), name=dock_name(title), area=places.get(dock_name(title), area), tabify=tabify
        )
    dock = getattr(inner, "native", inner).parent()
    dock.show()
    dock.raise_()
    return dock


def open_all(viewer: Any) -> None:
    """Open all docks in their usual places, the first step in front."""
    viewer = bare_viewer(viewer)
    docks: dict[str, Any] = {}
    areas: set[str] = set()
    for title, (_, _, area) in DOCKS.items():
        docks[title] = open_dock(viewer, title, tabify=area in areas)
        areas.add(area)
    window = docks["Recording"].window()
    for place in ("right", "bottom"):
        together = [docks[title] for title, (_, _, area) in DOCKS.items() if area == place]
        for before, after in pairwise(together):
            window.tabifyDockWidget(before, after)
    # The plots lie below the movie alone: the columns beside it are too high for small screens to be shortened.
    window.setCorner(Qt.Corner.BottomRightCorner, Qt.DockWidgetArea.RightDockWidgetArea)
    window.setCorner(Qt.Corner.BottomLeftCorner, Qt.DockWidgetArea.LeftDockWidgetArea)
    for title in ("Responses", "Recording"):
        docks[title].show()
        docks[title].raise_()
    window.resizeDocks([docks["Recording"]], [_RIGHT_PX], Qt.Orientation.Horizontal)
    window.resizeDocks([docks["Responses"]], [round(_BOTTOM_SHARE * window.height())], Qt.Orientation.Vertical)


def open_all_docks(viewer: napari.viewer.Viewer) -> None:
    """Open all docks; napari's menu gives the viewer."""
    open_all(viewer)


class AllDocks(QWidget):
    """Opens all docks and goes away."""

    def __init__(self, napari_viewer: napari.viewer.Viewer) -> None:
        super().__init__()
        self._viewer = bare_viewer(napari_viewer)
        column = QVBoxLayout(self)
        column.addWidget(sentence_label("Opening the docks."))
        self._timer = QTimer(self)
        self._timer.setSingleShot(True)
        self._timer.timeout.connect(self._open)
        self._timer.start(0)

    def _open(self) -> None:
        viewer = self._viewer
        open_all(viewer)
        viewer.window.remove_dock_widget(self)


def panels(viewer: Any) -> list[Panel]:
    """Return our docks that are open."""
    inner = (getattr(one, "native", one) for one in viewer.window.dock_widgets.values())
    return [one for one in inner if isinstance(one, Panel)]
