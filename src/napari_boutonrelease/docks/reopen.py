"""An `analysis.json` opened again: its movie, protocol, settings and edits, and the analysis run anew."""

from __future__ import annotations

from dataclasses import dataclass, replace
from pathlib import Path
from typing import TYPE_CHECKING, Any

from napari.utils import notifications
from qtpy.QtWidgets import QFileDialog

from ..analysis.savefile import SavedAnalysis, read_saved
from ..errors import InputError, SavedAnalysisError
from ..recording import open_movie
from .layers import add_movie, movie_layer_settings, own_movie, set_movie_layer
from .panel import bare_viewer, model_of
from .worker import run_analysis_step, runner_of

if TYPE_CHECKING:
    from collections.abc import Callable

    from qtpy.QtWidgets import QWidget

    from ..analysis.progress import Progress
    from ..recording import Movie

ANALYSIS_FILES = "Saved analyses (analysis.json *.json)"


@dataclass(frozen=True, slots=True, kw_only=True)
class Reopened:
    """A saved analysis with its movie, found and compared."""

    saved: SavedAnalysis
    movie: Movie
    boutons: Path | None
    axon: Any
    layer_settings: dict[str, Any]


def read_analysis(path: Path, *, movie_files: tuple[Path, ...] | None = None) -> Reopened:
    """Read a saved analysis and open its movie; pixels are read only to compare them with those analysed.

    Parameters
    ----------
    path : Path
        An analysis.json.
    movie_files : tuple of Path, optional
        Where the movie is now; else it is looked for where it was and beside the results.

    Raises
    ------
    InputError
        If a file is missing, damaged, or not the one that was analysed.
    """
    saved = read_saved(path)
    files = movie_files or saved.find_movie()
    settings = saved.settings
    movie = open_movie(files[0] if len(files) == 1 else files, channel=settings.recording.channel)
    if not saved.made_from(movie):
        raise SavedAnalysisError(f"{files[0]} is not the movie that {path} was made from: its content differs.")
    return Reopened(
        saved=saved,
        movie=movie,
        boutons=saved.find_given("boutons"),
        axon=saved.find_given("axon") if saved.axon_px is None else saved.axon_px,
        layer_settings=movie_layer_settings(movie),
    )


def reopen(viewer: Any, path: str | Path, *, movie_files: tuple[Path, ...] | None = None) -> None:
    """Open a saved analysis in a viewer and run it."""
    runner = runner_of(model_of(viewer))
    viewer = bare_viewer(viewer)

    def work(progress: Progress) -> Reopened:
        progress(0, 0)
        return read_analysis(Path(path), movie_files=movie_files)

    def take(reopened: Reopened) -> None:
        layer = add_movie(viewer, reopened.movie, **reopened.layer_settings)
        restore(viewer, reopened, layer)

    runner.run(work, take, words="Reopening", kind="open")


def adopt(viewer: Any, layer: Any, path: Path, *, movie_files: tuple[Path, ...]) -> None:
    """Take a saved analysis into a viewer that shows its movie already, with the docks beside it, and run it."""
    from .arrange import open_all, panels

    if not panels(viewer):
        open_all(viewer)

    def work(progress: Progress) -> Reopened:
        progress(0, 0)
        return read_analysis(path, movie_files=movie_files)

    def take(reopened: Reopened) -> None:
        own_movie(layer, reopened.movie)
        restore(viewer, reopened, layer)

    runner_of(model_of(viewer)).run(work, take, words="Reopening", kind="open")


def restore(viewer: Any, reopened: Reopened, layer: Any) -> None:
    """Take a saved analysis into the viewer's own, with the layer that shows its movie, and run it."""
    model, saved = model_of(viewer), reopened.saved
    set_movie_layer(viewer, layer)
    model.settings = saved.settings
    protocol = saved.protocol if saved.protocol.path is not None else replace(saved.protocol, path=saved.path)
    model.open(reopened.movie, protocol, boutons=reopened.boutons, axon=reopened.axon, edits=saved.edits)
    run_analysis_step(model)


def ask_and_reopen(viewer: Any, parent: QWidget) -> None:
    """Ask for an analysis.json, and for its movie where that has moved; then open it."""
    path, _ = QFileDialog.getOpenFileName(parent, "Reopen an analysis", "", ANALYSIS_FILES)
    if path:
        reopen_with(viewer, path, ask_movie=lambda: _ask_movie(parent))


def reopen_with(viewer: Any, path: str | Path, *, ask_movie: Callable[[], tuple[Path, ...]]) -> None:
    """Open a saved analysis; ask for its movie if that is not where it was."""
    try:
        saved = read_saved(Path(path))
        try:
            files = saved.find_movie()
        except SavedAnalysisError:
            files = ask_movie()
    except InputError as error:
        notifications.show_error(str(error))
        return
    if files:
        reopen(viewer, path, movie_files=files)


def _ask_movie(parent: QWidget) -> tuple[Path, ...]:
    paths, _ = QFileDialog.getOpenFileNames(
        parent, "Its movie has moved: choose the file, or all files in order", "", "TIFF movies (*.tif *.tiff);;All (*)"
    )
    return tuple(Path(path) for path in paths)
