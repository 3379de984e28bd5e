"""napari with a recording, or a saved analysis, and all docks."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, Any

import napari

from .arrange import dock_name, open_all
from .layers import add_movie
from .reopen import reopen

if TYPE_CHECKING:
    from ..recording import Movie
    from .recording_dock import RecordingDock


def view_movie(viewer: Any, movie: Movie, *, protocol: Path | None = None, channel: int | None = None) -> None:
    """Show a movie in a viewer with all docks, with its protocol where there is one."""
    open_all(viewer)
    inner = viewer.window.dock_widgets[dock_name("Recording")]
    dock: RecordingDock = getattr(inner, "native", inner)
    dock.model.choose("recording", channel=channel)
    dock.choose_layer(add_movie(viewer, movie))
    if protocol is not None:
        dock.load_protocol(protocol)


def view_analysis(viewer: Any, path: Path, *, movie_files: tuple[Path, ...]) -> None:
    """Show a saved analysis in a viewer with all docks, and run it again."""
    open_all(viewer)
    reopen(viewer, path, movie_files=movie_files)


def run(show: Any, **what: Any) -> None:
    """Open a viewer, fill it, and stay until it is closed."""
    viewer = napari.Viewer(title="Bouton release")
    show(viewer, **what)
    napari.run()
