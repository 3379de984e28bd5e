"""What a batch did, a line a recording, in a file that also keeps a second batch away from the same folder."""

from __future__ import annotations

import json
from collections.abc import Iterator
from contextlib import contextmanager, suppress
from datetime import UTC, datetime
from pathlib import Path
from typing import IO, Any

from ..errors import OutputError

JOURNAL = "journal.jsonl"
"""Name of the file."""


class Journal:
    """Lines of JSON, one for each recording that ended; lines are only ever added."""

    def __init__(self, file: IO[str]) -> None:
        self._file = file

    def add(self, **entry: Any) -> None:
        """Add a line, at once on the disk's way."""
        entry = {"ended": datetime.now(UTC).isoformat(timespec="seconds"), **entry}
        self._file.write(json.dumps(entry, ensure_ascii=False) + "\n")
        self._file.flush()

    def entries(self) -> list[dict[str, Any]]:
        """Return all lines, those of earlier runs too; one that a crash left unfinished is passed over."""
        self._file.seek(0)
        found = []
        for line in self._file:
            with suppress(ValueError):
                found.append(json.loads(line))
        return [entry for entry in found if isinstance(entry, dict)]


@contextmanager
def opened_journal(folder: Path) -> Iterator[Journal]:
    """Open the journal of a study; the folder is made if need be.

    Raises
    ------
    OutputError
        If another batch has it open, or the disk refuses.
    """
    try:
        folder.mkdir(parents=True, exist_ok=True)
        file = (folder / JOURNAL).open("a+", encoding="utf-8")
    except OSError as error:
        raise OutputError(f"The study cannot be written to {folder}: {error}.") from error
    with file:
        if not _locked(file):
            raise OutputError(f"Another batch is writing to {folder}; wait until it has ended, or give another --out.")
        _end_last_line(folder / JOURNAL, file)
        yield Journal(file)


def _end_last_line(path: Path, file: IO[str]) -> None:
    """End a line that a crash left unfinished, so that the next one stands alone."""
    content = path.read_bytes()
    if content and not content.endswith(b"\n"):
        file.write("\n")
        file.flush()


def _locked(file: IO[str]) -> bool:
    """Lock a file until it is closed or the process dies, however it dies; True also where there are no locks."""
    try:
        import fcntl
    except ImportError:
        return _locked_on_windows(file)
    try:
        fcntl.flock(file, fcntl.LOCK_EX | fcntl.LOCK_NB)
    except BlockingIOError:
        return False
    except OSError:
        pass  # some network disks have no locks; folders of results are moved into place whole all the same
    return True


def _locked_on_windows(file: IO[str]) -> bool:
    import msvcrt

    file.seek(2**30)  # beyond all lines: what is locked there cannot be read
    try:
        msvcrt.locking(file.fileno(), msvcrt.LK_NBLCK, 1)  # type: ignore[attr-defined]
    except OSError:
        return False
    return True
