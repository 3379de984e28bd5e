"""The saved analysis: what was done to which movie, so that it can be done again."""

from __future__ import annotations

import json
import platform
from dataclasses import dataclass
from datetime import UTC, datetime
from pathlib import Path
from typing import TYPE_CHECKING, Any, Literal

import numpy as np
from pydantic import ValidationError

from ..errors import SavedAnalysisError
from ..recording import Protocol, content_digest, file_digest, protocol_from_dict, protocol_to_dict
from .hand_edits import HandEdits, edits_from_dict
from .settings import Settings

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from ..recording import Movie
    from .pipeline import Measured, Pipeline

FORMAT_VERSION = 1


@dataclass(frozen=True, slots=True, kw_only=True)
class SavedAnalysis:
    """What an `analysis.json` holds.

    Attributes
    ----------
    path : Path
        The file.
    settings : Settings
        Every choice.
    protocol : Protocol
        When the axon was stimulated.
    movie_files : tuple of Path
        Where the movie was; empty if it was an array.
    movie_digest : str or None
        SHA-256 of the movie's content; None if it was an array.
    movie_bytes : tuple of int
        Sizes of its files.
    movie_modified_s : tuple of float
        When its files were last changed (s since 1970); empty in analyses of older versions.
    boutons, axon : Path or None
        Files that were given.
    axon_px : (k, 2) ndarray or None
        Axon that was drawn, (y, x) in px.
    digests : dict of str to str
        SHA-256 of those two files, by the names `boutons` and `axon`.
    edits : HandEdits
        Changes by hand.
    """

    path: Path
    settings: Settings
    protocol: Protocol
    movie_files: tuple[Path, ...]
    movie_digest: str | None
    movie_bytes: tuple[int, ...]
    movie_modified_s: tuple[float, ...]
    boutons: Path | None
    axon: Path | None
    axon_px: NDArray[np.float64] | None
    digests: dict[str, str]
    edits: HandEdits

    def find_movie(self) -> tuple[Path, ...]:
        """Return the movie's files, where they were or beside the folder of results.

        Raises
        ------
        SavedAnalysisError
            If they are in neither place.
        """
        if not self.movie_files:
            raise SavedAnalysisError(f"{self.path} was made from an array, not from a file: give the MOVIE to analyse.")
        beside = self.path.resolve().parent.parent
        folder = self.movie_files[0].parent.name
        for files in (
            self.movie_files,
            tuple(beside / file.name for file in self.movie_files),
            tuple(beside / folder / file.name for file in self.movie_files),
        ):
            if all(file.is_file() for file in files):
                return files
        missing = next(file for file in self.movie_files if not file.is_file())
        raise SavedAnalysisError(
            f"{missing}, from which {self.path} was made, is no longer there: give the MOVIE's new path together with "
            "--from."
        )

    def find_given(self, name: Literal["boutons", "axon"]) -> Path | None:
        """Return the file of boutons or of the axon's path that was used; None if there was none.

        Raises
        ------
        SavedAnalysisError
            If the file is gone or has changed.
        """
        path: Path | None = getattr(self, name)
        if path is None:
            return None
        if not path.is_file():
            raise SavedAnalysisError(
                f"{path}, with which {self.path} was made, is no longer there: give its new path as --{name}."
            )
        if file_digest(path) != self.digests.get(name):
            raise SavedAnalysisError(
                f"{path} has changed since {self.path} was made: give the file to use as --{name}."
            )
        return path

    def made_from(self, movie: Movie) -> bool:
        """Tell whether the movie has the content that was analysed, as far as that is known."""
        return not movie.files or not self.movie_digest or content_digest(movie) == self.movie_digest

    def check_movie(self, movie: Movie) -> None:
        """Raise `SavedAnalysisError` unless the movie has the content that was analysed, as far as that is known."""
        if not self.made_from(movie):
            raise SavedAnalysisError(
                f"{movie.files[0]} is not the movie that {self.path} was made from (its content differs). "
                "Give the right movie, or analyse this one with --settings instead of --from."
            )


def provenance_of(measured: Measured, *, pipeline: Pipeline) -> dict[str, Any]:
    """Put together what is needed to repeat an analysis, JSON-ready."""
    movie, axon = pipeline.movie, pipeline.axon
    drawn = axon.tolist() if isinstance(axon, np.ndarray) else None
    given = {"boutons": pipeline.boutons, "axon": None if isinstance(axon, np.ndarray) else axon}
    return {
        "format": "boutonrelease analysis",
        "format_version": FORMAT_VERSION,
        "created": datetime.now(UTC).isoformat(timespec="seconds"),
        "versions": package_versions(),
        "movie": {
            "files": [str(Path(file).resolve()) for file in movie.files],
            "bytes": [Path(file).stat().st_size for file in movie.files],
            "modified_s": [Path(file).stat().st_mtime for file in movie.files],
            "sha256": content_digest(movie) if movie.files else None,
            "shape": list(movie.shape),
            "dtype": str(movie.dtype),
            "axes": movie.axes,
            "found_in": dict(measured.timing.found_in),
        },
        "protocol": protocol_to_dict(measured.protocol),
        "settings": measured.settings.model_dump(mode="json"),
        **{name: None if path is None else str(Path(path).resolve()) for name, path in given.items()},
        "axon_px": drawn,
        "sha256": {name: file_digest(Path(path)) for name, path in given.items() if path is not None},
        "hand_edits": measured.edits.as_dict(),
    }


def read_saved(path: str | Path) -> SavedAnalysis:
    """Read an `analysis.json`.

    Raises
    ------
    SavedAnalysisError
        If it cannot be read, is not a saved analysis, or comes from a newer format.
    """
    path = Path(path)
    try:
        content = json.loads(path.read_text(encoding="utf-8"))
    except OSError as error:
        raise SavedAnalysisError(
            f"{path} cannot be read ({error.strerror}): give the analysis.json of a results folder."
        ) from error
    except ValueError as error:
        raise SavedAnalysisError(
            f"{path} is not a saved analysis ({error}): give the analysis.json of a results folder."
        ) from error
    if not isinstance(content, dict) or content.get("format") != "boutonrelease analysis":
        raise SavedAnalysisError(f"{path} is not a saved analysis; give the analysis.json of a results folder.")
    version = content.get("format_version")
    if version != FORMAT_VERSION:
        raise SavedAnalysisError(
            f"{path} has format version {version}; this program reads version {FORMAT_VERSION}. "
            "Use the newest version of the program."
        )
    try:
        return SavedAnalysis(
            path=path,
            settings=Settings.model_validate(content["settings"]),
            protocol=protocol_from_dict(content["protocol"], source=path),
            movie_files=tuple(Path(file) for file in content["movie"]["files"]),
            movie_digest=content["movie"]["sha256"],
            movie_bytes=tuple(content["movie"]["bytes"]),
            movie_modified_s=tuple(content["movie"].get("modified_s", ())),
            boutons=None if content["boutons"] is None else Path(content["boutons"]),
            axon=None if content["axon"] is None else Path(content["axon"]),
            axon_px=None if content["axon_px"] is None else np.asarray(content["axon_px"], dtype=np.float64),
            digests=dict(content["sha256"]),
            edits=edits_from_dict(content["hand_edits"]),
        )
    except (KeyError, TypeError, AttributeError) as error:
        raise SavedAnalysisError(f"{path} is damaged: {error} is missing or has the wrong type.") from error
    except ValidationError as error:
        first = error.errors()[0]
        where = ".".join(map(str, first["loc"]))
        raise SavedAnalysisError(f"{path}: setting {where}: {first['msg']} (given {first['input']!r}).") from error


def package_versions() -> dict[str, str]:
    """Return the versions of Python, this program and what it rests on."""
    from importlib.metadata import version

    packages = (
        "napari-boutonrelease",
        "numpy",
        "scipy",
        "scikit-image",
        "tifffile",
        "pandas",
        "pydantic",
        "matplotlib",
    )
    return {
        "python": platform.python_version(),
        **{package: version(package) for package in packages},
    }
