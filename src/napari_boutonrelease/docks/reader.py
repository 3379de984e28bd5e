"""Dropping an `analysis.json` on the viewer: its movie appears, and the analysis is run again in that viewer."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path
from typing import TYPE_CHECKING, Any

from qtpy.QtCore import QTimer

from ..analysis.savefile import read_saved
from ..recording import open_movie
from .layers import lazy_frames, movie_layer_settings
from .reopen import adopt

if TYPE_CHECKING:
    LayerData = tuple[Any, dict[str, Any], str]

NAME = "analysis.json"
_MARK = "boutonrelease analysis"


def get_reader(path: str | list[str]) -> Callable[[Any], list[LayerData]] | None:
    """Return a reader if this is a saved analysis, else None."""
    if isinstance(path, list):
        path = path[0] if len(path) == 1 else ""
    return read_layer if Path(path).name == NAME else None


def read_layer(path: str | list[str]) -> list[LayerData]:
    """Return the movie of a saved analysis as a layer; the rest follows once the layer is in its viewer.

    Raises
    ------
    SavedAnalysisError, MovieError
        If the analysis or its movie cannot be read.
    """
    given = Path(path[0] if isinstance(path, list) else path)
    saved = read_saved(given)
    files = saved.find_movie()
    movie = open_movie(files[0] if len(files) == 1 else files, channel=saved.settings.recording.channel)
    settings = movie_layer_settings(movie)
    settings["metadata"] = {_MARK: str(given)}
    frames = lazy_frames(movie)
    QTimer.singleShot(0, lambda: _find_and_adopt(given, files, frames))
    return [(frames, settings, "image")]


def _find_and_adopt(path: Path, files: tuple[Path, ...], frames: Any) -> None:
    from napari.viewer import Viewer, current_viewer

    viewers = list(getattr(Viewer, "_instances", ())) or [current_viewer()]
    for viewer in viewers:
        for layer in viewer.layers if viewer is not None else ():
            if layer.metadata.get(_MARK) == str(path) and layer.data is frames:
                adopt(viewer, layer, path, movie_files=files)
                return
