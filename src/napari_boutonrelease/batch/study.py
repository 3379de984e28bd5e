"""The tables of a study, put together from the folders of its recordings."""

from __future__ import annotations

import json
import os
import secrets
import shutil
from collections.abc import Mapping, Sequence
from contextlib import suppress
from pathlib import Path
from typing import TYPE_CHECKING, Any

from ..analysis.columns import BOUTONS
from ..errors import OutputError, SavedAnalysisError
from ..reports import check_can_write, describe_package, read_table, write_json, write_table
from ..reports.folder import MARK, PACKAGE
from .columns import recordings_table, study_table
from .journal import JOURNAL
from .manifest import Manifest
from .processes import Ending
from .recordings import Recording, created

if TYPE_CHECKING:
    import pandas as pd

STUDY_MARK = "batch.json"
"""The file that says what a study was made from."""

_FILES = ("study.csv", "recordings.csv", STUDY_MARK, PACKAGE)
_WORK = ".study.writing-"
_FACTS = {
    "n_boutons": "counts.boutons",
    "n_trials": "recording.trials",
    "n_pulses": "recording.pulses",
    "n_frames": "recording.frames",
    "duration_s": "recording.duration_s",
    "p_release_boutons": "population.boutons",
    **{f"{name}{end}": f"population.{name}{end}" for name in ("p_release", "ppr", "q") for end in ("", "_lo", "_hi")},
}


def check_study_folder(folder: Path, *, manifest: Manifest, recordings: Sequence[Recording], overwrite: bool) -> None:
    """Raise unless the tables of this manifest may be written into `folder`.

    Raises
    ------
    OutputError
        If it is a file, lies within a recording's results, holds files of these names that no batch wrote or, unless
        `overwrite`, the study of another manifest, or writing there is not allowed.
    """
    if folder.exists() and not folder.is_dir():
        raise OutputError(f"{folder} is a file; give a folder for the study with --out.")
    inside = {folder.resolve(), *folder.resolve().parents}
    around = next((recording.folder for recording in recordings if recording.folder.resolve() in inside), None)
    if around is not None:
        raise OutputError(f"{folder} would lie within {around}, which is for one recording; give another --out.")
    if (folder / MARK).exists():
        raise OutputError(f"{folder} holds the results of one recording; give another --out.")
    foreign = [name for name in _FILES if (folder / name).exists()]
    if foreign and not (folder / JOURNAL).exists():
        raise OutputError(f"{folder} holds a {foreign[0]} that no batch wrote; give another --out.")
    other = _manifest_of(folder)
    if other not in (None, manifest.path.name) and not overwrite:
        raise OutputError(
            f"{folder} holds the study of {other}, not of {manifest.path.name}; give another --out, or replace its "
            "tables with --overwrite."
        )
    check_can_write(folder / _WORK, overwrite=False)  # whether a file could be made there


def study_tables(
    recordings: Sequence[Recording],
    endings: Mapping[int, Ending],
    *,
    manifest: Manifest,
    folder: Path,
    journal: Sequence[Mapping[str, Any]],
) -> tuple[pd.DataFrame, pd.DataFrame]:
    """Put the folders of all recordings that are done into two tables.

    Parameters
    ----------
    recordings : sequence of Recording
        All of the manifest.
    endings : mapping of int to Ending
        How each of them stands, by position.
    manifest : Manifest
        Where they come from.
    folder : Path
        Folder of the study.
    journal : sequence of mapping
        What this run and earlier ones noted.

    Returns
    -------
    (DataFrame, DataFrame)
        `study.csv` and `recordings.csv`.
    """
    import pandas as pd

    boutons, rows = [], []
    for index, recording in enumerate(recordings):
        ending = endings[index]
        row: dict[str, Any] = {
            "recording": recording.name,
            "condition": recording.row.condition or None,
            **{name: cell or None for name, cell in zip(manifest.further, recording.row.further, strict=True)},
        }
        if ending.status == "done":
            try:
                table, facts = _read_results(recording.folder)
            except SavedAnalysisError as error:
                ending = Ending(index=index, status="failed", failure=str(error))
            else:
                for position, (name, value) in enumerate(row.items()):
                    table.insert(position, name, pd.Series(value, index=table.index, dtype="string"))
                boutons.append(table)
                row |= facts | _cost(recording, journal)
        if ending.status == "failed":
            row |= {"seconds": ending.seconds, "cpu_s": ending.cpu_s, "peak_memory_mb": ending.peak_memory_mb}
        row |= {
            "status": ending.status,
            "failure": ending.failure or None,
            "movie": _from(recording.row.movie, manifest.path.parent),
            "folder": _from(recording.folder, folder),
        }
        rows.append(row)
    names = list(study_table(manifest.further).names)
    with_rows = [table for table in boutons if len(table)] or boutons[:1]
    study = pd.concat(with_rows, ignore_index=True)[names] if with_rows else pd.DataFrame(columns=names)
    return study, pd.DataFrame(rows, columns=list(recordings_table(manifest.further).names), dtype=object)


def write_study(
    study: pd.DataFrame,
    recordings: pd.DataFrame,
    *,
    manifest: Manifest,
    folder: Path,
    provenance: Mapping[str, Any],
) -> None:
    """Write both tables, what they were made from and their description; each file is replaced whole.

    The description, which has the digests of the others, is replaced last.

    Raises
    ------
    OutputError
        If the disk refuses.
    """
    for leftover in folder.glob(f"{_WORK}*"):  # of a run that was killed; no other runs here now
        shutil.rmtree(leftover, ignore_errors=True)
    work = folder / f"{_WORK}{secrets.token_hex(4)}"
    tables = {"study": study_table(manifest.further), "recordings": recordings_table(manifest.further)}
    try:
        work.mkdir()
        for name, frame in (("study", study), ("recordings", recordings)):
            write_table(frame, work / f"{name}.csv", table=tables[name])
        write_json(provenance, work / STUDY_MARK)
        title = f"Vesicle release of the boutons of {len(recordings)} recordings"
        made = provenance.get("created")
        package = describe_package(
            work,
            name=folder.resolve().name,
            tables=tables,
            created=made if isinstance(made, str) else None,
            title=title,
        )
        write_json(package, work / PACKAGE)
        for name in _FILES:
            (work / name).replace(folder / name)
    except OSError as error:
        raise OutputError(f"The study could not be written to {folder}: {error}.") from error
    finally:
        shutil.rmtree(work, ignore_errors=True)


def _read_results(folder: Path) -> tuple[pd.DataFrame, dict[str, Any]]:
    """Return the boutons of a recording and what its summary says of it."""
    try:
        summary = json.loads((folder / "summary.json").read_text(encoding="utf-8"))
        facts = {name: _fact(summary, path) for name, path in _FACTS.items()}
        by_responses = [_fact(summary, f"counts.{way}") for way in ("responses", "both")]
    except (OSError, ValueError, AttributeError) as error:
        raise SavedAnalysisError(f"{folder / 'summary.json'} cannot be read ({error}); repeat the analysis.") from error
    facts["n_by_responses"] = sum(number or 0 for number in by_responses)
    facts["analysed"], facts["version"] = created(folder)
    return read_table(folder / "boutons.csv", table=BOUTONS, needed=("bouton", "p_release")), facts


def _fact(summary: Mapping[str, Any], path: str) -> Any:
    group, _, key = path.partition(".")
    return summary.get(group, {}).get(key)


def _cost(recording: Recording, journal: Sequence[Mapping[str, Any]]) -> dict[str, Any]:
    """Return what the analysis took whose results are there, if a batch made them."""
    made = created(recording.folder)[0]
    for entry in reversed(journal):
        if entry.get("recording") == recording.name and entry.get("created") == made:
            return {name: entry.get(name) for name in ("seconds", "cpu_s", "peak_memory_mb")}
    return {}


def _from(path: Path, base: Path) -> str:
    with suppress(ValueError):  # another drive
        return Path(os.path.relpath(path, base)).as_posix()
    return path.absolute().as_posix()


def _manifest_of(folder: Path) -> str | None:
    """Name of the manifest whose study lies in a folder; None if there is none."""
    try:
        return str(json.loads((folder / STUDY_MARK).read_text(encoding="utf-8"))["manifest"]["name"])
    except OSError:
        return None
    except (ValueError, KeyError, TypeError):
        return "an unknown manifest"
