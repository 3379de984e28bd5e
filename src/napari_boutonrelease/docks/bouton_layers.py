"""The layers "boutons" and "footprints" of a viewer: what the model knows of places, and edits by hand back to it."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from contextlib import contextmanager
from functools import partial
from typing import TYPE_CHECKING, Any
from weakref import WeakKeyDictionary, WeakMethod, ref

import numpy as np
from napari.utils import notifications
from numpy.typing import NDArray
from psygnal import Signal
from qtpy.QtCore import QTimer

from ..analysis.bouton_edits import add_bouton, delete_boutons, move_boutons, redraw_bouton
from ..analysis.model import Request, trace
from ..analysis.pipeline import Traced
from ..errors import InputError
from .bouton_marks import Marks, marks_of, show_marks, shows
from .calm import WhenCalm
from .layers import movie_layer, on_plane
from .panel import bare_viewer, model_of
from .worker import ANALYSIS, runner_of

if TYPE_CHECKING:
    from napari.layers import Labels, Layer, Points

    from ..analysis.progress import Progress

_LEAST_MOVE_PX = 0.1  # a hand that trembles during a click does not move a bouton
_BRUSH_PX = 3

_OF_VIEWERS: WeakKeyDictionary[Any, BoutonLayers] = WeakKeyDictionary()


def bouton_layers_of(viewer: Any) -> BoutonLayers:
    """Return what keeps the bouton layers of a viewer up to date; all docks share it, and it outlives them."""
    viewer = bare_viewer(viewer)
    if viewer not in _OF_VIEWERS:
        _OF_VIEWERS[viewer] = BoutonLayers(viewer)
    return _OF_VIEWERS[viewer]


class BoutonLayers:
    """Marks and footprints of one viewer, both ways.

    Every edit goes to the model and shows at once; the traces follow in the worker, and then all that rests on them.

    Signals
    -------
    changed
        A layer came or went, its mode changed, more or fewer marks are selected, or redrawing began or ended.
    """

    changed = Signal()

    def __init__(self, viewer: Any) -> None:
        self._viewer = ref(viewer)
        self.model = model_of(viewer)
        self._points: Any = None
        self._footprints: Any = None
        self._marks = Marks.none()
        self._column: str | None = None
        self._quiet = False
        self._dragging = False
        self._redrawing: int | None = None
        self._undrawn: NDArray[np.int32] | None = None
        self._shown_before = False
        self._calm = WhenCalm(self.model, partial(_call_weakly, WeakMethod(self.refresh)))
        for signal, slot in (
            (self.model.recording_changed, self._forget),
            (self.model.settings_changed, self._axon_may_differ),
            (self.model.edits_changed, self._edited),
            (self.model.traced_changed, self.refresh),
            (self.model.measured_changed, self._follow_measured),
            (self.model.selection_changed, self._show_selection),
        ):
            signal.connect(slot)
        self.refresh()

    # what there is

    @property
    def points(self) -> Points | None:
        """The layer of marks, if it is in the viewer."""
        return self._present(self._points)

    @property
    def footprints(self) -> Labels | None:
        """The layer of footprints, if it is in the viewer."""
        return self._present(self._footprints)

    @property
    def marks(self) -> Marks:
        """What the marks show."""
        return self._marks

    @property
    def selected(self) -> tuple[int, ...]:
        """Ids of the selected marks."""
        points = self.points
        return () if points is None else tuple(int(self._marks.bouton[i]) for i in sorted(points.selected_data))

    @property
    def redrawing(self) -> int | None:
        """Id of the bouton whose footprint is being painted."""
        return self._redrawing

    @property
    def column(self) -> str | None:
        """Column of the table of boutons that colours the marks; None for how they were found."""
        return self._column

    def colour_by(self, column: str | None) -> None:
        """Colour the marks by a column of the table of boutons, or by how they were found."""
        if column != self._column:
            self._column = column
            self.refresh()

    def set_mode(self, mode: str) -> None:
        """Let the mouse do something to marks: ``add``, ``select`` (and drag), or ``pan_zoom``."""
        points, viewer = self.points, self._viewer()
        if points is not None and viewer is not None:
            viewer.layers.selection.active = points
            points.mode = mode

    def select(self, boutons: tuple[int, ...]) -> None:
        """Select marks by their ids."""
        points = self.points
        if points is not None:
            rows = set(np.flatnonzero(np.isin(self._marks.bouton, boutons)).tolist())
            if rows != set(points.selected_data):
                points.selected_data = rows

    def delete_selected(self) -> None:
        """Take the selected boutons away."""
        if self.selected:
            self._try(lambda: delete_boutons(self.model, self.selected))

    # redrawing

    def begin_redrawing(self, bouton: int) -> None:
        """Let a person paint a bouton's footprint: its label, and no other, can be painted and erased."""
        labels, points, viewer = self.footprints, self.points, self._viewer()
        if labels is None or viewer is None or self._redrawing is not None:
            return
        self._redrawing, self._undrawn = bouton, np.array(labels.data)
        if points is not None:
            points.visible = False  # marks would hide what is painted
        self._shown_before = labels.visible
        viewer.layers.selection.active = labels
        labels.visible, labels.contour = True, 0
        labels.preserve_labels = True
        labels.selected_label = bouton
        labels.brush_size = _BRUSH_PX
        labels.mode = "paint"
        self.model.select(bouton=bouton)
        self.changed.emit()

    def finish_redrawing(self) -> None:
        """Take what was painted."""
        bouton, labels, before = self._redrawing, self.footprints, self._undrawn
        self._end_redrawing()
        if bouton is None or labels is None or before is None:
            return
        painted = np.argwhere(np.asarray(labels.data) == bouton)
        if not np.array_equal(painted, np.argwhere(before == bouton)):
            self._try(lambda: redraw_bouton(self.model, bouton, painted))
        self.refresh()

    def cancel_redrawing(self) -> None:
        """Leave the footprint as it was."""
        self._end_redrawing()
        self.refresh()

    def _end_redrawing(self) -> None:
        self._redrawing, self._undrawn = None, None
        labels, points, viewer = self.footprints, self.points, self._viewer()
        if labels is not None:
            labels.mode = "pan_zoom"
            labels.contour, labels.visible = 1, self._shown_before
        if points is not None and viewer is not None:
            points.visible = True
            viewer.layers.selection.active = points
        self.changed.emit()

    # from the model to the layers

    def refresh(self, *_: object) -> None:
        """Show what the model knows now; waits until a drag or painting is over."""
        viewer = self._viewer()
        if viewer is None or self._dragging or self._redrawing is not None:
            return
        sites, movie = self.model.sites(), movie_layer(viewer)
        if sites is None or movie is None:
            return
        before, self._marks = self._marks, marks_of(self.model, sites, column=self._column)
        with self._quietly():
            points = self.points
            if points is None or not before.like(self._marks) or not shows(points, self._marks):
                points = points or self._add_points(viewer, movie)
                show_marks(points, self._marks)
            lie_on(movie, points, self.footprints)
        if self.footprints is None:
            # napari takes a while to make each kind of layer: the window may breathe between the two.
            QTimer.singleShot(0, partial(_call_weakly, WeakMethod(self._show_footprints)))
        else:
            self._show_footprints()
        self._show_selection()
        self.changed.emit()

    def _add_points(self, viewer: Any, movie: Layer) -> Points:
        from napari.layers import Points

        text = {"string": "{bouton}", "size": 9, "color": "white", "anchor": "lower_left"}
        points = Points(ndim=2, name="boutons", features=Marks.none().features, text=text, **on_plane(movie))
        add_quietly(viewer, points)
        self._points = ref(points)
        points.events.data.connect(self._changed_by_hand)
        points.events.mode.connect(self._tell)
        points.selected_data.events.items_changed.connect(self._selected_by_hand)
        for key, act in (
            ("Control-Z", self.model.undo),
            ("Control-Shift-Z", self.model.redo),
            ("Control-Y", self.model.redo),
            ("Control-V", None),  # a pasted mark would be told to nobody
        ):
            points.bind_key(key, _on_key(act), overwrite=True)
        return points

    def _show_footprints(self) -> None:
        from napari.layers import Labels

        viewer, traced = self._viewer(), self.model.traced
        movie = None if viewer is None else movie_layer(viewer)
        if viewer is None or traced is None or movie is None or self._redrawing is not None:
            return
        label = traced.places.footprints.label
        labels = self.footprints
        if labels is None:
            labels = Labels(label.copy(), name="footprints", opacity=0.6, **on_plane(movie))
            labels.contour, labels.visible = 1, False
            labels.bind_key("Enter", _on_key(self.finish_redrawing), overwrite=True)
            labels.bind_key("Escape", _on_key(self.cancel_redrawing), overwrite=True)
            add_quietly(viewer, labels, above=movie)
            self._footprints = ref(labels)
            labels.events.paint.connect(self._painted)
            self.changed.emit()
        elif not np.array_equal(labels.data, label):
            labels.data = label.copy()

    def _show_selection(self) -> None:
        bouton = self.model.selection.bouton
        if bouton is not None and bouton not in self.selected:
            with self._quietly():
                self.select((bouton,))
            self.changed.emit()

    def _forget(self) -> None:
        """Take the layers of another recording away."""
        viewer = self._viewer()
        self._redrawing, self._undrawn, self._dragging = None, None, False
        self._marks = Marks.none()
        if viewer is not None:
            for layer in (self.points, self.footprints):
                if layer is not None:
                    viewer.layers.remove(layer)
        self.refresh()
        self.changed.emit()

    def _edited(self) -> None:
        self.refresh()
        traced = self.model.traced
        edits = self.model.edits
        if traced is not None and (edits.placed, edits.cleared) != (traced.edits.placed, traced.edits.cleared):
            self.measure()

    def _follow_measured(self) -> None:
        self._calm.follow()

    def _axon_may_differ(self) -> None:
        traced, pipeline = self.model.traced, self.model.pipeline
        if traced is not None and pipeline is not None and traced.axon is not pipeline.axon:
            self.refresh()
            self.measure()
        else:
            self._calm.follow()

    def measure(self) -> None:
        """Find and read what is not known yet, then measure it, in the worker; marks and footprints come first."""
        request = self._try(self.model.request)
        if request is not None:
            runner = runner_of(self.model)
            runner.run(
                partial(_traced, request),
                partial(_call_weakly, WeakMethod(self._take_traces)),
                words="Looking for boutons" if self.model.traced is None else "Reading boutons",
                kind=ANALYSIS,  # takes the place of an analysis of what was before
            )

    def _take_traces(self, outcome: tuple[Request, Traced]) -> None:
        if self.model.accept_traces(*outcome):
            runner_of(self.model).analyse(outcome[0])

    # from the layers to the model

    def _changed_by_hand(self, event: Any) -> None:
        if self._quiet:
            return
        points, action = event.source, str(event.action)
        rows = [int(i) % max(len(points.data), 1) for i in event.data_indices]
        if action == "changing":
            self._dragging = True
        elif action == "changed":
            self._dragging = False
            self._moved(points, rows)
        elif action == "added":
            for row in rows:
                bouton = self._try(partial(add_bouton, self.model, _place(points.data[row])))
                if bouton is not None:
                    self.model.select(bouton=bouton)
        elif action == "removed":
            gone = [int(self._marks.bouton[i]) for i in event.data_indices]
            self._try(lambda: delete_boutons(self.model, gone))
        if action in ("added", "changed", "removed"):
            self.refresh()

    def _moved(self, points: Points, rows: list[int]) -> None:
        places = {}
        for row in rows:
            y, x = points.data[row]
            if np.hypot(y - self._marks.y_px[row], x - self._marks.x_px[row]) > _LEAST_MOVE_PX:
                places[int(self._marks.bouton[row])] = _place((y, x))
        if places:
            self._try(lambda: move_boutons(self.model, places))

    def _selected_by_hand(self, *_: object) -> None:
        if self._quiet:
            return
        selected = self.selected if self._in_step() else ()
        if selected and self.model.selection.bouton not in selected:
            self.model.select(bouton=selected[0])
        self.changed.emit()

    def _painted(self, event: Any) -> None:
        """Take back what was painted outside of redrawing: it would belong to no bouton in particular."""
        traced = self.model.traced
        if self._redrawing is None and traced is not None:
            event.source.data = traced.places.footprints.label.copy()
            notifications.show_info("To paint a footprint, select its bouton and press Redraw in the Boutons dock.")

    def _in_step(self) -> bool:
        points = self.points
        return points is not None and len(points.data) == len(self._marks.bouton)

    def _tell(self, *_: object) -> None:
        self.changed.emit()

    def _try(self, call: Callable[[], Any]) -> Any:
        """Do something; what is wrong with it becomes a short note."""
        try:
            return call()
        except InputError as error:
            notifications.show_info(str(error))
            return None

    @contextmanager
    def _quietly(self) -> Iterator[None]:
        before, self._quiet = self._quiet, True
        try:
            yield
        finally:
            self._quiet = before

    def _present(self, layer: Any) -> Any:
        layer, viewer = None if layer is None else layer(), self._viewer()
        return layer if layer is not None and viewer is not None and layer in viewer.layers else None


def _place(point: Any) -> tuple[float, float]:
    return float(point[0]), float(point[1])


def lie_on(movie: Layer, *layers: Layer | None) -> None:
    """Give layers the movie's scale and units, where these have changed."""
    for layer in layers:
        for name, value in on_plane(movie).items():
            if layer is not None and tuple(getattr(layer, name)) != value:
                setattr(layer, name, value)


def add_quietly(viewer: Any, layer: Layer, *, above: Layer | None = None) -> None:
    """Add a layer, on top or just above another one, without taking the selection of layers from the person."""
    active = viewer.layers.selection.active
    viewer.layers.insert(len(viewer.layers) if above is None else viewer.layers.index(above) + 1, layer)
    if active is not None:
        viewer.layers.selection.active = active


def _on_key(act: Callable[[], None] | None) -> Callable[[Any], None]:
    def pressed(layer: Any) -> None:  # noqa: ARG001
        if act is not None:
            act()

    return pressed


def _traced(request: Request, progress: Progress) -> tuple[Request, Traced]:
    """Read the traces, in the worker; what the layers need besides is loaded here, too, and not while it blocks."""
    import pandas  # noqa: F401
    from napari.utils.colormaps import label_colormap

    label_colormap()
    return request, trace(request, progress=progress)


def _call_weakly(method: WeakMethod[Any], *arguments: Any) -> None:
    there = method()
    if there is not None:
        there(*arguments)
