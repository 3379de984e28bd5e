"""The movie's layer: from layer to movie and back, its units, and the frame that the viewer shows."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any
from weakref import ReferenceType, WeakKeyDictionary, WeakSet, ref

import numpy as np
from numpy.typing import NDArray

from ..errors import MovieError
from ..recording import Movie, movie_from_array, open_movie
from .panel import bare_viewer, model_of

if TYPE_CHECKING:
    from napari.layers import Image, Layer

    from ..analysis.model import AnalysisModel
    from ..recording import Timing

_IN_S = {"second": 1.0, "millisecond": 1e-3, "microsecond": 1e-6, "minute": 60.0}
_IN_UM = {"micrometer": 1.0, "micron": 1.0, "nanometer": 1e-3, "millimeter": 1e3, "meter": 1e6}

_MOVIES: WeakKeyDictionary[Layer, tuple[Movie, Any]] = WeakKeyDictionary()
_OPENED: WeakSet[Layer] = WeakSet()  # layers that the docks have made, which they may recalibrate
_MOVIE_LAYERS: WeakKeyDictionary[AnalysisModel, ReferenceType[Image]] = WeakKeyDictionary()


class _Frames:
    """A movie that is sliced like an array, frame by frame."""

    def __init__(self, movie: Movie) -> None:
        self.movie = movie
        self.shape = movie.shape
        self.dtype = movie.dtype
        self.ndim = 3

    def __getitem__(self, index: tuple[Any, ...]) -> NDArray[Any]:
        first, *rest = index if isinstance(index, tuple) else (index,)
        if isinstance(first, slice):
            start, stop, step = first.indices(self.shape[0])
            frames = self.movie.read(start, max(start, stop))[::step]
            return frames[(slice(None), *rest)]
        frame = int(first) % self.shape[0]
        return self.movie.read(frame, frame + 1)[(0, *rest)]


def lazy_frames(movie: Movie) -> Any:
    """Return a dask array, one block a frame, that reads from the movie what is looked at."""
    import dask.array as da

    return da.from_array(_Frames(movie), chunks=(1, *movie.shape[1:]), name=False, asarray=False, fancy=False)


def add_movie(viewer: Any, movie: Movie, **settings: Any) -> Image:
    """Add a movie as an image layer that reads its frames as they are looked at."""
    layer = viewer.add_image(lazy_frames(movie), **(settings or movie_layer_settings(movie)))
    own_movie(layer, movie)
    return layer


def own_movie(layer: Layer, movie: Movie) -> None:
    """Note which movie a layer shows that the docks have made."""
    _MOVIES[layer] = (movie, layer.data)
    _OPENED.add(layer)


def movie_layer_settings(movie: Movie) -> dict[str, Any]:
    """Return the settings of an image layer that shows a movie: name, scale, units, contrast from a few frames."""
    middle = movie.shape[0] // 2
    few = np.concatenate([movie.read(k, k + 1) for k in sorted({0, middle, movie.shape[0] - 1})])
    finite = few[np.isfinite(few)]
    low, high = (float(value) for value in np.percentile(finite, (0.1, 99.9))) if finite.size else (0.0, 1.0)
    return {
        "name": movie.name,
        "contrast_limits": (low, high if high > low else low + 1.0),
        "axis_labels": ("t", "y", "x"),
        **calibration(movie.frame_interval_s, movie.pixel_size_um),
    }


def calibration(frame_interval_s: float | None, pixel_size_um: float | None) -> dict[str, Any]:
    """Return scale and units of a movie's layer; an unknown one counts frames or pixels."""
    pixel, unit = (1.0, "pixel") if pixel_size_um is None else (pixel_size_um, "um")
    interval, time_unit = (1.0, "pixel") if frame_interval_s is None else (frame_interval_s, "s")
    return {"scale": (interval, pixel, pixel), "units": (time_unit, unit, unit)}


def recalibrate(viewer: Any, layer: Layer, timing: Timing) -> None:
    """Give a layer that the docks have opened the calibration of the protocol; others keep their own."""
    known = calibration(timing.frame_interval_s, timing.pixel_size_um)
    if layer in _OPENED and tuple(layer.scale) != known["scale"]:
        frame = current_frame(viewer)
        layer.scale, layer.units = known["scale"], known["units"]
        if frame is not None:
            show_frame(viewer, frame)


def on_plane(movie_layer: Layer) -> dict[str, Any]:
    """Return scale, shift, units and axis labels of a two-dimensional layer that lies on a movie's frames."""
    return {
        "scale": tuple(movie_layer.scale[-2:]),
        "translate": tuple(movie_layer.translate[-2:]),
        "units": tuple(movie_layer.units[-2:]),
        "axis_labels": tuple(movie_layer.axis_labels[-2:]),
    }


def movie_of_layer(layer: Layer) -> Movie:
    """Return the movie behind an image layer, the same one each time.

    A layer that napari read from a file is opened again, lazily and with the file's metadata; any other is taken as it
    is, with the calibration of its units.

    Raises
    ------
    MovieError
        If the layer is no movie: not (frame, y, x), colours, or pyramids.
    """
    known = _MOVIES.get(layer)
    if known is not None and known[1] is layer.data:
        return known[0]
    if getattr(layer, "multiscale", False) or getattr(layer, "rgb", False):
        raise MovieError(f"{layer.name} is a colour image or an image pyramid: choose a grey movie, (frame, y, x).")
    movie = _reopened(layer) or _wrapped(layer)
    _MOVIES[layer] = (movie, layer.data)
    return movie


def _reopened(layer: Layer) -> Movie | None:
    path = layer.source.path
    if path is None or not Path(path).exists():
        return None
    try:
        movie = open_movie(Path(path))
    except MovieError:
        return None
    return movie if movie.shape == tuple(layer.data.shape) and movie.dtype == layer.data.dtype else None


def _wrapped(layer: Layer) -> Movie:
    scale, units = layer.scale, [str(unit) for unit in layer.units]
    interval = pixel = None
    if len(units) == 3:
        interval = float(scale[0]) * _IN_S[units[0]] if units[0] in _IN_S else None
        pixel = float(scale[2]) * _IN_UM[units[2]] if units[2] in _IN_UM else None
    movie = movie_from_array(layer.data, frame_interval_s=interval, pixel_size_um=pixel, name=layer.name)
    movie.found_in.update(dict.fromkeys(movie.found_in, "layer's scale"))
    return movie


def set_movie_layer(viewer: Any, layer: Image | None) -> None:
    """Note which layer of a viewer is analysed."""
    model = model_of(viewer)
    if layer is None:
        _MOVIE_LAYERS.pop(model, None)
    else:
        _MOVIE_LAYERS[model] = ref(layer)


def movie_layer(viewer: Any) -> Image | None:
    """Return the layer that is analysed, if it is still in the viewer."""
    viewer = bare_viewer(viewer)
    noted = _MOVIE_LAYERS.get(model_of(viewer))
    layer = None if noted is None else noted()
    return layer if layer is not None and layer in viewer.layers else None


def image_layers(viewer: Any) -> Sequence[Image]:
    """Return the layers that could be a movie."""
    from napari.layers import Image

    return [
        layer
        for layer in viewer.layers
        if isinstance(layer, Image) and layer.ndim == 3 and not (layer.rgb or layer.multiscale)
    ]


def current_frame(viewer: Any) -> int | None:
    """Return the frame of the analysed movie that the viewer shows."""
    layer = movie_layer(viewer)
    if layer is None:
        return None
    axis = viewer.dims.ndim - layer.ndim
    frame = round((viewer.dims.point[axis] - layer.translate[0]) / layer.scale[0])
    return int(np.clip(frame, 0, layer.data.shape[0] - 1))


def show_frame(viewer: Any, frame: int) -> None:
    """Move the viewer to a frame of the analysed movie."""
    layer = movie_layer(viewer)
    if layer is not None:
        axis = viewer.dims.ndim - layer.ndim
        viewer.dims.set_point(axis, float(frame * layer.scale[0] + layer.translate[0]))


def text_overlay(viewer: Any) -> Any:
    """Return the text in the corner of a viewer."""
    canvas = getattr(viewer, "canvas", None)
    return viewer.text_overlay if canvas is None else canvas.overlays.text
