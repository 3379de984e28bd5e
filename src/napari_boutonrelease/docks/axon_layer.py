"""The layer "axon": a person clicks along the axon, the path follows its light, and the model puts boutons in order."""

from __future__ import annotations

from functools import partial
from typing import TYPE_CHECKING, Any
from weakref import WeakKeyDictionary, WeakMethod, ref

import numpy as np
from napari.utils import notifications
from numpy.typing import NDArray
from psygnal import Signal
from qtpy.QtCore import QTimer

from ..analysis.model import Request, follow_axon
from ..errors import InputError
from .layers import movie_layer, on_plane
from .panel import bare_viewer, model_of
from .worker import runner_of

if TYPE_CHECKING:
    from napari.layers import Shapes

_COLOUR = "#ff8a5c"
_WIDTH_FWHM = 0.25
_DRAWING = "add_polyline"

_OF_VIEWERS: WeakKeyDictionary[Any, AxonLayer] = WeakKeyDictionary()


def axon_layer_of(viewer: Any) -> AxonLayer:
    """Return what keeps the axon's layer of a viewer up to date; all docks share it, and it outlives them."""
    viewer = bare_viewer(viewer)
    if viewer not in _OF_VIEWERS:
        _OF_VIEWERS[viewer] = AxonLayer(viewer)
    return _OF_VIEWERS[viewer]


class AxonLayer:
    """The axon's path in one viewer, both ways.

    Signals
    -------
    changed
        Drawing began or ended, or another path was drawn.

    Attributes
    ----------
    follow_light : bool
        Whether a drawn line is traced along the ridge of light between its points.
    """

    changed = Signal()

    def __init__(self, viewer: Any) -> None:
        self._viewer = ref(viewer)
        self.model = model_of(viewer)
        self.follow_light = True
        self._layer: Any = None
        self._quiet = False
        self.model.recording_changed.connect(self._forget)
        self.model.traced_changed.connect(self._show_given)

    @property
    def layer(self) -> Shapes | None:
        """The layer, if it is in the viewer."""
        layer, viewer = None if self._layer is None else self._layer(), self._viewer()
        return layer if layer is not None and viewer is not None and layer in viewer.layers else None

    @property
    def drawing(self) -> bool:
        """Whether clicks in the image add points of the axon."""
        layer = self.layer
        return layer is not None and str(layer.mode) == _DRAWING

    @property
    def path_px(self) -> NDArray[np.float64] | None:
        """The path that the model has, (k, 2) in px, where it was drawn."""
        axon = None if self.model.pipeline is None else self.model.pipeline.axon
        return axon if isinstance(axon, np.ndarray) else None

    def begin(self) -> None:
        """Let clicks draw the axon; a double click ends it. A new line takes the place of the old one."""
        viewer = self._viewer()
        movie = None if viewer is None else movie_layer(viewer)
        if viewer is None or movie is None:
            notifications.show_info("There is no movie yet: choose one in the Recording dock first.")
            return
        layer = self.layer or self._add(viewer, movie)
        viewer.layers.selection.active = layer
        layer.mode = _DRAWING
        self.changed.emit()

    def end(self) -> None:
        """Stop drawing; a line that was not ended is taken as it is."""
        layer = self.layer
        if layer is not None and str(layer.mode) == _DRAWING:
            layer.mode = "pan_zoom"
        self.changed.emit()

    def clear(self) -> None:
        """Take the axon away."""
        layer = self.layer
        if layer is not None:
            self._put(None)
        self.model.draw_axon(None)
        self.changed.emit()

    def take(self, clicks: NDArray[np.float64]) -> None:
        """Take points along the axon, (k, 2) in px: as they are, or traced along the light in the worker."""
        request = self._request()
        if request is None:
            return
        if self.follow_light:
            runner_of(self.model).run(
                partial(_traced, request, clicks),
                partial(_call_weakly, WeakMethod(self._take_path)),
                words="Following the axon",
                kind="axon",
            )
        else:
            self._take_path((request, clicks))

    def _take_path(self, outcome: tuple[Request, NDArray[np.float64]]) -> None:
        request, path = outcome
        if request.pipeline is self.model.pipeline:
            self.end()
            self._put(path)
            self.model.draw_axon(path)
            self.changed.emit()

    def _request(self) -> Request | None:
        try:
            return self.model.request()
        except InputError as error:
            notifications.show_info(str(error))
            return None

    def _add(self, viewer: Any, movie: Any) -> Shapes:
        from napari.layers import Shapes

        layer = Shapes(ndim=2, name="axon", edge_color=_COLOUR, face_color="transparent", **on_plane(movie))
        detection = self.model.settings.detection
        pixel_um = float(movie.scale[-1]) if str(movie.units[-1]) == "micrometer" else 0.16
        layer.current_edge_width = max(_WIDTH_FWHM * detection.bouton_um / pixel_um, 0.5)
        viewer.add_layer(layer)
        layer.events.data.connect(self._changed_by_hand)
        layer.events.mode.connect(self._tell)
        self._layer = ref(layer)
        return layer

    def _changed_by_hand(self, event: Any) -> None:
        action = str(event.action)
        if not self._quiet and action in ("added", "changed", "removed"):
            # The layer is still busy with the line that it tells of.
            QTimer.singleShot(0, partial(_call_weakly, WeakMethod(self._take_lines), action))

    def _take_lines(self, action: str) -> None:
        layer = self.layer
        if layer is None:
            return
        # A line of a single point, ended by its second click, is none.
        lines = [np.asarray(line, dtype=np.float64)[:, -2:] for line in layer.data if len(line) > 1]
        lines = [line for line in lines if np.any(line != line[0])]
        if not lines:
            self._put(None)
            self.model.draw_axon(None)
            self.changed.emit()
            return
        if action == "added":
            layer.mode = "pan_zoom"
            self.take(_apart(lines[-1]))
        else:  # vertices dragged, or one of several lines taken away: as it was drawn
            self._take_drawn(_apart(lines[-1]))

    def _take_drawn(self, path: NDArray[np.float64]) -> None:
        self.model.draw_axon(path)
        self.changed.emit()

    def _put(self, path: NDArray[np.float64] | None) -> None:
        """Show a path and nothing else."""
        layer = self.layer
        if layer is None:
            return
        self._quiet = True
        try:
            layer.data = []
            if path is not None:
                layer.add_paths(
                    [path], edge_color=_COLOUR, face_color="transparent", edge_width=layer.current_edge_width
                )
            layer.selected_data = set()
        finally:
            self._quiet = False

    def _show_given(self) -> None:
        """Show a path that came with the model, for example out of a saved analysis."""
        viewer, path = self._viewer(), self.path_px
        movie = None if viewer is None else movie_layer(viewer)
        if viewer is not None and path is not None and movie is not None and self.layer is None:
            active = viewer.layers.selection.active
            self._add(viewer, movie)
            self._put(path)
            viewer.layers.selection.active = active
            self.changed.emit()

    def _forget(self) -> None:
        viewer, layer = self._viewer(), self.layer
        if viewer is not None and layer is not None and self.path_px is None:
            viewer.layers.remove(layer)
        self.changed.emit()

    def _tell(self, *_: object) -> None:
        self.changed.emit()


def _traced(request: Request, clicks: NDArray[np.float64], progress: Any) -> tuple[Request, NDArray[np.float64]]:
    return request, follow_axon(request, clicks, progress=progress)


def _apart(line: NDArray[np.float64]) -> NDArray[np.float64]:
    """Leave out points clicked twice, as the double click that ends a line does."""
    apart = np.append(True, np.any(np.diff(line, axis=0) != 0, axis=1))
    return np.asarray(line[apart])


def _call_weakly(method: WeakMethod[Any], argument: Any) -> None:
    there = method()
    if there is not None:
        there(argument)
