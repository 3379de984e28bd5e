"""The whole analysis of one recording as one call, for scripts and notebooks and the command line alike."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import fields
from pathlib import Path
from typing import TYPE_CHECKING

from .analysis.results import AnalysisResult
from .comparison.results import Comparison

if TYPE_CHECKING:
    import numpy as np
    from numpy.typing import NDArray

    from .analysis.hand_edits import HandEdits
    from .analysis.settings import Settings
    from .comparison.settings import CompareSettings
    from .recording.movie import Movie
    from .recording.protocol import Protocol
    from .reports import NwbDetails

    MovieSource = str | Path | Sequence[str | Path] | NDArray[np.generic] | Movie


class Analysis(AnalysisResult):
    """Everything found in one recording, as in `AnalysisResult`, and able to write itself."""

    __slots__ = ()

    def write(
        self,
        folder: str | Path,
        *,
        overwrite: bool = False,
        nwb: bool | NwbDetails = False,
        progress: Callable[[int, int], None] | None = None,
    ) -> Path:
        """Write tables, traces, footprints, figures and report into a folder, whole or not at all.

        Parameters
        ----------
        folder : path
            Folder to make, or to replace if it holds results.
        overwrite : bool
            Replace results that are already there.
        nwb : bool or NwbDetails
            Also write `recording.nwb`, of the standard Neurodata Without Borders; `reports.NwbDetails` says what no
            movie tells. Needs the extra `nwb`.
        progress : callable, optional
            Called with (done, total) files.

        Returns
        -------
        Path
            The folder.

        Raises
        ------
        OutputError
            If the folder holds results and `overwrite` is false, holds anything else, or cannot be written, or if pynwb
            is needed and not installed.
        """
        from .reports import NwbDetails, write_result

        details = NwbDetails() if nwb is True else nwb or None
        return write_result(self, Path(folder), overwrite=overwrite, nwb=details, progress=progress)


class ComparedRecordings(Comparison):
    """Everything that a comparison found, as in `Comparison`, and able to write itself."""

    __slots__ = ()

    def write(
        self,
        folder: str | Path,
        *,
        overwrite: bool = False,
        progress: Callable[[int, int], None] | None = None,
    ) -> Path:
        """Write tables, figures and report into a folder, whole or not at all.

        Parameters
        ----------
        folder : path
            Folder to make, or to replace if it holds a comparison.
        overwrite : bool
            Replace a comparison that is already there.
        progress : callable, optional
            Called with (done, total) files.

        Returns
        -------
        Path
            The folder.

        Raises
        ------
        OutputError
            If the folder holds a comparison and `overwrite` is false, holds anything else, or cannot be written.
        """
        from .reports import write_comparison

        return write_comparison(self, Path(folder), overwrite=overwrite, progress=progress)


def analyse(
    movie: MovieSource,
    protocol: str | Path | Protocol,
    *,
    settings: Settings | None = None,
    boutons: str | Path | None = None,
    axon: str | Path | NDArray[np.float64] | None = None,
    edits: HandEdits | None = None,
    progress: Callable[[int, int], None] | None = None,
) -> Analysis:
    """Analyse one recording from the movie to the axon's release map.

    Parameters
    ----------
    movie : path, sequence of paths, (frame, y, x) ndarray or Movie
        A TIFF file, a folder or list of files with one trial each, or the frames themselves.
    protocol : path or Protocol
        When the axon was stimulated.
    settings : Settings, optional
        Choices of the analysis; the defaults of `Settings` where left out.
    boutons : path, optional
        CSV of positions or label TIFF, instead of finding the boutons.
    axon : path or (k, 2) ndarray, optional
        Points along the axon: a CSV file, or (y, x) in px.
    edits : HandEdits, optional
        Changes by hand.
    progress : callable, optional
        Called with (done, total) steps.

    Returns
    -------
    Analysis
        Tables, arrays and provenance.

    Raises
    ------
    InputError
        If an input cannot be used; the message says which, where and what to do.

    Examples
    --------
    >>> analysis = analyse("axon.tif", "axon.protocol.toml")  # doctest: +SKIP
    >>> analysis.boutons[["bouton", "p_release", "p_release_lo", "p_release_hi"]]  # doctest: +SKIP
    >>> analysis.write("axon.release")  # doctest: +SKIP
    """
    from .analysis.run import run_analysis
    from .analysis.settings import Settings
    from .recording.protocol import Protocol, read_protocol

    settings = Settings() if settings is None else settings
    result = run_analysis(
        _as_movie(movie, channel=settings.recording.channel),
        protocol if isinstance(protocol, Protocol) else read_protocol(protocol),
        settings=settings,
        boutons=boutons,
        axon=axon,
        edits=edits,
        progress=progress,
    )
    return Analysis(**{field.name: getattr(result, field.name) for field in fields(AnalysisResult)})


def compare(
    analyses: Sequence[str | Path | AnalysisResult],
    *,
    names: Sequence[str] | None = None,
    settings: CompareSettings | None = None,
    pairs: NDArray[np.int64] | None = None,
    progress: Callable[[int, int], None] | None = None,
) -> ComparedRecordings:
    """Compare the same boutons in two or more analysed recordings.

    Parameters
    ----------
    analyses : sequence of path or AnalysisResult
        Folders of results (or the `analysis.json` in them) or analyses in memory, in the order in which they were
        recorded; ids of boutons are those of the first.
    names : sequence of str, optional
        What to call the recordings; the names of movies or folders, where left out.
    settings : CompareSettings, optional
        Choices of the comparison.
    pairs : (n, n_recordings) ndarray of int, optional
        A row a bouton: its id in each recording, 0 where it is not there. Found by the mean images, where left out.
    progress : callable, optional
        Called with (done, total) boutons.

    Returns
    -------
    ComparedRecordings
        Tables, fits and summary.

    Raises
    ------
    InputError
        If an analysis cannot be read, or the recordings do not show the same boutons.

    Examples
    --------
    >>> comparison = compare(["control.release", "drug.release"])  # doctest: +SKIP
    >>> comparison.changes[["bouton", "p_release_change", "p_changed_p_adjusted"]]  # doctest: +SKIP
    """
    from .comparison import CompareSettings, compare_recordings, recording_from_result
    from .errors import InputError
    from .reports import read_recording

    if names is not None and len(names) != len(analyses):
        raise InputError(f"names has {len(names)} names for {len(analyses)} recordings.")
    called: Sequence[str | None] = names if names is not None else [None] * len(analyses)
    recordings = [
        recording_from_result(one, name=name) if isinstance(one, AnalysisResult) else read_recording(one, name=name)
        for one, name in zip(analyses, called, strict=True)
    ]
    found = compare_recordings(recordings, settings=settings or CompareSettings(), pairs=pairs, progress=progress)
    return ComparedRecordings(**{field.name: getattr(found, field.name) for field in fields(Comparison)})


def _as_movie(source: MovieSource, *, channel: int | None) -> Movie:
    import numpy as np

    from .recording.movie import Movie, movie_from_array, open_movie

    if isinstance(source, Movie):
        return source
    return movie_from_array(source) if isinstance(source, np.ndarray) else open_movie(source, channel=channel)
