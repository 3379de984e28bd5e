"""Writing results in a process of its own: a window stays quick meanwhile, and nobody else's plots get in the way.

Matplotlib's settings are global, so figures for the report must not be drawn while a window draws its own.
"""

from __future__ import annotations

import json
import pickle
import subprocess
import sys
import tempfile
from collections.abc import Callable
from pathlib import Path
from typing import TYPE_CHECKING, Any

from ..errors import InputError, OutputError
from .comparison import write_comparison
from .export import write_result

if TYPE_CHECKING:
    from ..analysis.progress import Progress
    from ..analysis.results import AnalysisResult
    from ..comparison import Comparison

_CHILD = "from napari_boutonrelease.reports.apart import _write; _write()"


def write_result_apart(
    result: AnalysisResult, folder: Path, *, progress: Progress | None = None, **options: Any
) -> Path:
    """Do what `write_result` does in another process, and wait for it.

    Parameters and errors are those of `write_result`, besides these. Raising from `progress` ends the writing; what was
    there stays as it was.

    Raises
    ------
    OutputError
        Also if the process died.
    """
    return _write_apart(write_result, result, folder, progress=progress, options=options)


def write_comparison_apart(
    comparison: Comparison, folder: Path, *, progress: Progress | None = None, **options: Any
) -> Path:
    """Do what `write_comparison` does in another process, and wait for it; see `write_result_apart`."""
    return _write_apart(write_comparison, comparison, folder, progress=progress, options=options)


def _write_apart(
    write: Callable[..., Path], what: object, folder: Path, *, progress: Progress | None, options: dict[str, Any]
) -> Path:
    with tempfile.TemporaryFile() as parcel, tempfile.TemporaryFile("w+", encoding="utf-8") as complaints:
        pickle.dump((write, what, Path(folder).absolute(), options), parcel)
        parcel.seek(0)
        child = subprocess.Popen(
            [sys.executable, "-c", _CHILD],
            stdin=parcel,
            stdout=subprocess.PIPE,
            stderr=complaints,
            encoding="utf-8",
        )
        try:
            for line in child.stdout or ():
                told = json.loads(line)
                if "error" in told:
                    raise OutputError(told["error"])
                if progress is not None:
                    progress(told["done"], told["total"])
            if child.wait():
                complaints.seek(0)
                last = (complaints.read().strip().splitlines() or [f"exit status {child.returncode}"])[-1]
                raise OutputError(f"The results could not be written to {folder}: {last}.")
            return Path(folder)
        finally:
            child.kill()
            child.communicate()


def _write() -> None:
    """Write what comes in on stdin; say how far on stdout. Runs in the other process."""

    def tell(**what: object) -> None:
        sys.stdout.write(json.dumps(what) + "\n")
        sys.stdout.flush()

    write, what, folder, options = pickle.load(sys.stdin.buffer)
    try:
        write(what, folder, **options, progress=lambda done, total: tell(done=done, total=total))
    except InputError as error:
        tell(error=str(error))
