"""The button that opens a movie from disk: a file, files or a folder of trials, one channel of several."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any

from qtpy.QtCore import Signal
from qtpy.QtWidgets import QFileDialog, QInputDialog, QMenu, QPushButton

from ..errors import ChannelError
from ..recording import Movie, open_movie
from .layers import movie_layer_settings

if TYPE_CHECKING:
    from ..analysis.progress import Progress
    from .worker import Runner

    Source = str | Path | Sequence[str | Path]

_FILES = "TIFF movies (*.tif *.tiff *.btf *.tf8 *.stk);;All files (*)"


@dataclass(frozen=True, slots=True, kw_only=True)
class OpenedMovie:
    """A movie from disk, the channel that was chosen, and the settings of its layer."""

    movie: Movie
    channel: int | None
    layer_settings: dict[str, Any]


@dataclass(frozen=True, slots=True, kw_only=True)
class _Channels:
    """A file that holds several channels, by their titles."""

    source: Source
    titles: tuple[str, ...]


class OpenMovieButton(QPushButton):
    """Open a movie in the worker and hand it on.

    Signals
    -------
    opened
        An `OpenedMovie`.
    """

    opened = Signal(object)

    def __init__(self, runner: Runner) -> None:
        super().__init__("Open movie...")
        self._runner = runner
        menu = QMenu(self)
        menu.addAction("A file...", self._ask_file)
        menu.addAction("Files, one a trial...", self._ask_files)
        menu.addAction("A folder, one file a trial...", self._ask_folder)
        self.setMenu(menu)

    def open_source(self, source: Source, *, channel: int | None = None) -> None:
        """Open a movie; ask for its channel where there are several."""

        def work(progress: Progress) -> OpenedMovie | _Channels:
            progress(0, 0)
            try:
                movie = open_movie(source, channel=channel)
            except ChannelError as error:
                return _Channels(source=source, titles=error.titles)
            return OpenedMovie(movie=movie, channel=channel, layer_settings=movie_layer_settings(movie))

        self._runner.run(work, self._take, words="Opening the movie", kind="open")

    def _take(self, opened: OpenedMovie | _Channels) -> None:
        if isinstance(opened, OpenedMovie):
            self.opened.emit(opened)
            return
        title, chosen = QInputDialog.getItem(
            self, "Choose a channel", "Channel to analyse, counted from 0:", list(opened.titles), 0, False
        )
        if chosen:
            self.open_source(opened.source, channel=opened.titles.index(title))

    def _ask_file(self) -> None:
        path, _ = QFileDialog.getOpenFileName(self, "Open a movie", "", _FILES)
        if path:
            self.open_source(path)

    def _ask_files(self) -> None:
        paths, _ = QFileDialog.getOpenFileNames(self, "Open the files of a recording, one a trial", "", _FILES)
        if paths:
            self.open_source(paths)

    def _ask_folder(self) -> None:
        path = QFileDialog.getExistingDirectory(self, "Open a folder of files, one a trial")
        if path:
            self.open_source(path)
