"""A folder of results that is replaced as a whole: a crash leaves the old one or the new one, never half."""

from __future__ import annotations

import ctypes
import json
import os
import secrets
import shutil
import sys
import time
from collections.abc import Iterator
from contextlib import contextmanager, suppress
from pathlib import Path

from ..errors import OutputError

MARK = "analysis.json"
"""The file by which a folder is known to hold results."""

PACKAGE = "datapackage.json"
"""The file that lists all others."""

_STALE_S = 3600.0
_LITTER = {".DS_Store", "Thumbs.db", "desktop.ini"}


def default_folder(movie: Path) -> Path:
    """Return `<movie>.release` beside a movie, which may be a file or a folder."""
    stem = movie.name
    for suffix in (".tif", ".tiff", ".ome"):
        stem = stem.removesuffix(suffix)
    return movie.with_name(f"{stem}.release")


def check_can_write(folder: Path, *, overwrite: bool, mark: str = MARK) -> None:
    """Raise unless results can be written into `folder`, before any work is done.

    Parameters
    ----------
    folder : Path
        Folder to be made or replaced.
    overwrite : bool
        Whether results that are there may be replaced.
    mark : str
        The file without which a folder is not taken for results.

    Raises
    ------
    OutputError
        If the folder is a file, holds results and `overwrite` is false, holds anything else than results, or lies
        where writing is not allowed.
    """
    folder = Path(folder)
    current = folder if folder.exists() else _aside(folder.resolve())
    if current.exists():
        _check_replaceable(current, overwrite=overwrite, mark=mark)
    ancestor = next(path for path in folder.absolute().parents if path.exists())
    if not ancestor.is_dir():
        raise OutputError(f"{ancestor} is a file, so no results can be written to {folder}; choose another folder.")
    if not os.access(ancestor, os.W_OK | os.X_OK):
        raise OutputError(f"Writing to {ancestor} is not allowed; choose another folder than {folder}.")


@contextmanager
def replaced_whole(folder: Path, *, overwrite: bool, mark: str = MARK) -> Iterator[Path]:
    """Yield an empty folder beside `folder` that takes its place when the block ends without an error.

    Parameters
    ----------
    folder : Path
        Folder to be made or replaced.
    overwrite : bool
        Whether results that are there may be replaced.
    mark : str
        The file without which a folder is not taken for results.

    Yields
    ------
    Path
        Folder to write into. It is removed, and the old results stay as they are, if the block raises.

    Raises
    ------
    OutputError
        As `check_can_write`, or if the disk refuses.
    """
    folder = Path(folder).resolve()  # a link to a folder keeps pointing at it
    _recover(folder)
    check_can_write(folder, overwrite=overwrite, mark=mark)
    work = folder.with_name(f".{folder.name}.writing-{secrets.token_hex(4)}")
    try:
        work.mkdir(parents=True)
        yield work
        check_can_write(folder, overwrite=overwrite, mark=mark)  # somebody may have written there meanwhile
        _put_in_place(work, folder)
    except OSError as error:
        raise OutputError(f"The results could not be written to {folder}: {error}.") from error
    finally:
        shutil.rmtree(work, ignore_errors=True)


def _check_replaceable(folder: Path, *, overwrite: bool, mark: str) -> None:
    if not folder.is_dir():
        raise OutputError(f"{folder} is a file; give a folder for the results.")
    present = {path.relative_to(folder).as_posix() for path in folder.rglob("*") if not path.is_dir()}
    present = {name for name in present if name.rsplit("/", 1)[-1] not in _LITTER}
    if not present:
        return
    if mark not in present:
        raise OutputError(
            f"{folder} holds files but no results of an analysis (no {mark}), so it is not replaced; "
            "choose another folder."
        )
    if not overwrite:
        raise OutputError(f"{folder} already holds results; replace them with --overwrite, or choose another folder.")
    foreign = sorted(present - _listed(folder) - {mark})
    if foreign:
        raise OutputError(
            f"{folder} also holds files that no analysis wrote ({', '.join(foreign[:3])}"
            f"{', ...' if len(foreign) > 3 else ''}), so it is not replaced; move them elsewhere first."
        )


def _listed(folder: Path) -> set[str]:
    """Files that the results there know as their own."""
    own = {PACKAGE}
    with suppress(OSError, ValueError, KeyError, TypeError):
        package = json.loads((folder / PACKAGE).read_text(encoding="utf-8"))
        own |= {resource["path"] for resource in package["resources"]}
    return own


def _put_in_place(work: Path, folder: Path) -> None:
    """Move `work` to `folder`; what was there is in `work`, or gone, afterwards."""
    if not folder.exists():
        work.rename(folder)
        return
    if _exchange(work, folder):
        return
    # Not at once where the system has no exchange; `_recover` mends a crash between the two moves.
    aside = _aside(folder)
    folder.rename(aside)
    try:
        work.rename(folder)
    except BaseException:
        aside.rename(folder)
        raise
    shutil.rmtree(aside, ignore_errors=True)


def _exchange(one: Path, other: Path) -> bool:
    """Swap two folders in one step, where the system can (Linux); return whether it did."""
    if not sys.platform.startswith("linux"):
        return False
    here, exchange_flag = -100, 2  # AT_FDCWD, RENAME_EXCHANGE
    try:
        renameat2 = ctypes.CDLL(None, use_errno=True).renameat2
    except (OSError, AttributeError):
        return False
    return bool(renameat2(here, os.fsencode(one), here, os.fsencode(other), exchange_flag) == 0)


def _aside(folder: Path) -> Path:
    return folder.with_name(f".{folder.name}.replaced")


def _recover(folder: Path) -> None:
    """Bring back results that a crash left aside, and remove what crashes left behind."""
    aside = _aside(folder)
    if aside.exists():
        if folder.exists():
            shutil.rmtree(aside, ignore_errors=True)
        else:
            aside.rename(folder)
    if not folder.parent.is_dir():
        return
    for leftover in folder.parent.glob(f".{_literal(folder.name)}.writing-*"):
        with suppress(OSError):
            # A young one may belong to a run that is writing right now.
            if time.time() - leftover.stat().st_mtime > _STALE_S:
                shutil.rmtree(leftover, ignore_errors=True)


def _literal(name: str) -> str:
    """Quote the characters that a glob pattern would read as its own."""
    return "".join(f"[{letter}]" if letter in "*?[" else letter for letter in name)
