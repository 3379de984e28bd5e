"""The recordings of a study: what each is called, where its results go, and whether they are there already."""

from __future__ import annotations

import json
import os
from collections.abc import Iterable
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from ..analysis.savefile import SavedAnalysis, read_saved
from ..analysis.settings import Settings
from ..errors import InputError, SavedAnalysisError
from ..recording import content_digest, file_digest, open_movie, protocol_to_dict, read_protocol
from ..reports import check_can_write, default_folder
from ..reports.folder import MARK
from .manifest import Manifest, ManifestRow


@dataclass(frozen=True, slots=True, kw_only=True)
class Recording:
    """One recording to be analysed, and all that its analysis needs.

    Attributes
    ----------
    name : str
        What it is called in the study's tables.
    row : ManifestRow
        Its row of the manifest.
    folder : Path
        Where its results go.
    settings : Settings
        Choices of the analysis.
    report : bool
        Whether report and figures are wanted.
    """

    name: str
    row: ManifestRow
    folder: Path
    settings: Settings
    report: bool

    def job(self, *, overwrite: bool) -> dict[str, Any]:
        """Return what a process of its own must know to analyse it, JSON-ready and free of relative paths."""
        files = {name: getattr(self.row, name) for name in ("movie", "protocol", "boutons", "axon")}
        return {
            **{name: None if file is None else str(file.resolve()) for name, file in files.items()},
            "folder": str(self.folder.absolute()),
            "settings": self.settings.model_dump(mode="json"),
            "report": self.report,
            "overwrite": overwrite,
        }


def plan_recordings(
    manifest: Manifest, *, settings: Settings, report: bool, under: Path | None
) -> tuple[Recording, ...]:
    """Decide where the results of each row go.

    Parameters
    ----------
    manifest : Manifest
        The recordings.
    settings : Settings
        Choices of every analysis.
    report : bool
        Whether report and figures are wanted.
    under : Path or None
        Folder below which results go whose row names no folder; None puts them beside the movies.

    Raises
    ------
    InputError
        If two rows share a folder, or one folder lies within another; the message names row and column.
    """
    home = manifest.path.absolute().parent
    recordings = []
    for row in manifest.rows:
        folder = row.out if row.out is not None else _default_folder(row.movie, home=home, under=under)
        base = home if row.out is not None or under is None else under.absolute()
        name = _relative(folder, base).removesuffix(".release")
        recordings.append(Recording(name=name, row=row, folder=folder, settings=settings, report=report))
    _check_apart(recordings, manifest)
    return tuple(recordings)


def needs_analysis(recording: Recording, *, manifest: Path, overwrite: bool) -> bool:
    """Tell whether a recording must be analysed, or its results are there already.

    Raises
    ------
    InputError
        If its folder holds results of another movie, protocol or setting and `overwrite` is false, or holds anything
        else than results.
    """
    difference = difference_to_results(recording)
    if difference == "":
        return False
    where = f"{manifest}, row {recording.row.number}, column {'out' if recording.row.out is not None else 'movie'}"
    if difference is not None and not overwrite:
        raise InputError(
            f"{where}: {recording.folder} {difference}; repeat with --overwrite to analyse such recordings again, "
            "or give another --out."
        )
    try:
        check_can_write(recording.folder, overwrite=overwrite)
    except InputError as error:
        raise InputError(f"{where}: {error}") from error
    return True


def difference_to_results(recording: Recording) -> str | None:
    """Compare a recording with the results in its folder.

    Returns
    -------
    str or None
        Empty if the folder holds the whole results of just this movie, protocol, files and settings; None if it holds
        no results; else how they differ, as the end of a sentence that begins with the folder. Changes by hand are no
        difference.
    """
    folder = recording.folder
    if not (folder / MARK).is_file():
        return None
    try:
        saved = read_saved(folder / MARK)
    except SavedAnalysisError:
        return "holds results that this version cannot read"
    needed = ("boutons.csv", "summary.json", *(("report.pdf",) if recording.report else ()))
    missing = [name for name in needed if not (folder / name).is_file()]
    if missing:
        return f"holds results without {missing[0]}"
    changed = _changed_setting(saved.settings, recording.settings)
    if changed:
        return f"was analysed with other settings ({changed})"
    row = recording.row
    try:
        if protocol_to_dict(read_protocol(row.protocol)) != protocol_to_dict(saved.protocol):
            return f"was analysed with another protocol than {row.protocol} has now"
        for name in ("boutons", "axon"):
            given: Path | None = getattr(row, name)
            if (None if given is None else file_digest(given)) != saved.digests.get(name):
                return f"was analysed with {'other' if given else 'given'} {name}"
        if not _same_movie(row, saved, channel=recording.settings.recording.channel):
            return f"was made from another movie than {row.movie} is now"
    except (InputError, OSError) as error:
        return f"cannot be compared with its movie and protocol ({str(error).rstrip('.')})"
    return ""


def created(folder: Path) -> tuple[str | None, str | None]:
    """When and by which version the results in a folder were made; None where that is not said."""
    try:
        content = json.loads((folder / MARK).read_text(encoding="utf-8"))
        return content.get("created"), content.get("versions", {}).get("napari-boutonrelease")
    except (OSError, ValueError, AttributeError):
        return None, None


def _same_movie(row: ManifestRow, saved: SavedAnalysis, *, channel: int | None) -> bool:
    """Compare names, sizes and times of change; where these leave it open, the content."""
    files = (row.movie,) if row.movie.is_file() else open_movie(row.movie, channel=channel).files
    found = [file.stat() for file in files]
    if tuple(stat.st_size for stat in found) != saved.movie_bytes:
        return False
    names = [file.name for file in files] == [file.name for file in saved.movie_files]
    if names and tuple(stat.st_mtime for stat in found) == saved.movie_modified_s:
        return True
    return content_digest(open_movie(row.movie, channel=channel)) == saved.movie_digest


def _changed_setting(before: Settings, now: Settings) -> str:
    """Name the first setting that differs, with both values; nothing if none does."""
    old, new = before.model_dump(mode="json"), now.model_dump(mode="json")
    for section, value in new.items():
        inner = value if isinstance(value, dict) else {"": value}
        was = old[section] if isinstance(value, dict) else {"": old[section]}
        for key in inner:
            if inner[key] != was[key]:
                return f"{section}{'.' if key else ''}{key} {was[key]}, now {inner[key]}"
    return ""


def _default_folder(movie: Path, *, home: Path, under: Path | None) -> Path:
    if under is None:
        return default_folder(movie)
    # Below the study's folder, movies keep the folders that they have below the manifest's.
    return under / default_folder(Path(_relative(movie, home, outside=movie.name)))


def _relative(path: Path, base: Path, *, outside: str | None = None) -> str:
    """Write `path` from `base` on; one that does not lie below it as `outside`, else in full."""
    whole = Path(os.path.normpath(path.absolute()))
    base = Path(os.path.normpath(base))
    if whole.is_relative_to(base):
        return whole.relative_to(base).as_posix()
    return whole.as_posix() if outside is None else outside


def _check_apart(recordings: Iterable[Recording], manifest: Manifest) -> None:
    taken: dict[Path, Recording] = {}
    for recording in recordings:
        column = "out" if recording.row.out is not None else "movie"
        where = f"{manifest.path}, row {recording.row.number}, column {column}"
        folder = recording.folder.resolve()
        if folder in taken:
            raise InputError(
                f"{where}: its results would go to {recording.folder}, as those of row {taken[folder].row.number} do; "
                "name another folder in the column out."
            )
        taken[folder] = recording
    for folder, recording in taken.items():
        around = next((parent for parent in folder.parents if parent in taken), None)
        if around is not None:
            column = "out" if recording.row.out is not None else "movie"
            raise InputError(
                f"{manifest.path}, row {recording.row.number}, column {column}: its results would go to "
                f"{recording.folder}, within those of row {taken[around].row.number}; name another folder in the "
                "column out."
            )
