"""The manifest of a study: a CSV with a row a recording, all of it checked before any work begins."""

from __future__ import annotations

import csv
import difflib
import hashlib
import io
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path

from ..errors import InputError
from .columns import reserved_names

NEEDED = ("movie", "protocol")
"""Columns that a manifest must have."""

KNOWN = (*NEEDED, "boutons", "axon", "condition", "out")
"""Columns with a meaning; any further one is carried along."""

_ALIKE = 0.8


@dataclass(frozen=True, slots=True, kw_only=True)
class ManifestRow:
    """One recording of a manifest.

    Attributes
    ----------
    number : int
        Row of the file, the header being row 1.
    movie, protocol : Path
        Movie (a file, or a folder with one file a trial) and protocol.
    boutons, axon : Path or None
        Positions of the boutons and points along the axon, where given.
    condition : str
        What was done to the axon; may be empty.
    out : Path or None
        Folder for the results, where given.
    further : tuple of str
        Cells of the manifest's further columns, in order.
    """

    number: int
    movie: Path
    protocol: Path
    boutons: Path | None
    axon: Path | None
    condition: str
    out: Path | None
    further: tuple[str, ...]


@dataclass(frozen=True, slots=True, kw_only=True)
class Manifest:
    """All recordings of a study.

    Attributes
    ----------
    path : Path
        The CSV file.
    sha256 : str
        Digest of its content.
    further : tuple of str
        Names of its further columns, in order.
    rows : tuple of ManifestRow
        The recordings, in order.
    """

    path: Path
    sha256: str
    further: tuple[str, ...]
    rows: tuple[ManifestRow, ...]


def read_manifest(path: str | Path) -> Manifest:
    """Read a manifest and check that every file it names is there.

    Parameters
    ----------
    path : path
        CSV file with the columns `movie` and `protocol` and, if wanted, `boutons`, `axon`, `condition`, `out` and any
        others. Paths are relative to its folder.

    Returns
    -------
    Manifest

    Raises
    ------
    InputError
        If it cannot be read, lists no recording, a column is missing, doubtful or taken, or a file is missing; the
        message names row and column.
    """
    path = Path(path)
    try:
        content = path.read_bytes()
        lines = list(csv.reader(io.StringIO(content.decode("utf-8-sig"), newline=""), strict=True))
    except OSError as error:
        raise InputError(f"{path}: the manifest cannot be read ({error.strerror}); check the path.") from error
    except (UnicodeDecodeError, csv.Error) as error:
        raise InputError(f"{path}: the manifest is not a CSV file in UTF-8 ({error}).") from error
    header = [name.strip() for name in lines[0]] if lines else []
    _check_header(header, path)
    further = tuple(name for name in header if name not in KNOWN)
    rows = tuple(_rows(lines[1:], header=header, further=further, path=path))
    if not rows:
        raise InputError(f"{path}: the manifest lists no recording; add a row a recording below its header.")
    return Manifest(path=path, sha256=hashlib.sha256(content).hexdigest(), further=further, rows=rows)


def _check_header(header: list[str], path: Path) -> None:
    for name in NEEDED:
        if name not in header:
            found = ", ".join(header) or "nothing"
            cure = "separate columns by commas" if len(header) == 1 and any(c in found for c in ";\t") else "add it"
            raise InputError(f"{path}, row 1: there is no column {name} (found {found}); {cure}.")
    for position, name in enumerate(header):
        if not name:
            raise InputError(f"{path}, row 1: column {position + 1} has no name; give it one, or take it out.")
        if header.index(name) != position:
            raise InputError(f"{path}, row 1: the column {name} comes twice; take one out.")
        if name in KNOWN:
            continue
        meant = difflib.get_close_matches(name.lower(), [known for known in KNOWN if known not in header], 1, _ALIKE)
        if meant:
            raise InputError(
                f"{path}, row 1: the column {name} is unknown, but close to {meant[0]}; "
                "call it that, or something else altogether."
            )
        if name in reserved_names():
            raise InputError(
                f"{path}, row 1: the column {name} has the name of a column of the results; call it something else."
            )


def _rows(lines: list[list[str]], *, header: list[str], further: tuple[str, ...], path: Path) -> Iterator[ManifestRow]:
    for number, line in enumerate(lines, start=2):
        cells = [cell.strip() for cell in line]
        if not any(cells):
            continue
        if len(cells) > len(header):
            raise InputError(
                f"{path}, row {number}: there are {len(cells)} cells for {len(header)} columns; "
                "put cells with a comma in quotes."
            )
        given = dict(zip(header, [*cells, *[""] * (len(header) - len(cells))], strict=True))
        files = {name: _file(given.get(name, ""), column=name, number=number, path=path) for name in KNOWN[:4]}
        movie, protocol = files["movie"], files["protocol"]
        assert movie is not None
        assert protocol is not None
        yield ManifestRow(
            number=number,
            movie=movie,
            protocol=protocol,
            boutons=files["boutons"],
            axon=files["axon"],
            condition=given.get("condition", ""),
            out=path.parent / given["out"] if given.get("out") else None,
            further=tuple(given[name] for name in further),
        )


def _file(cell: str, *, column: str, number: int, path: Path) -> Path | None:
    """Return the file that a cell names; None for an empty one."""
    if not cell:
        if column in NEEDED:
            raise InputError(f"{path}, row {number}, column {column}: the cell is empty; name a file.")
        return None
    file = path.parent / cell
    if not (file.is_file() or (column == "movie" and file.is_dir())):
        raise InputError(
            f"{path}, row {number}, column {column}: {cell} does not exist; paths start from the manifest's folder."
        )
    return file
