"""Recordings in processes of their own, so that one that dies takes nothing with it and all memory comes back."""

from __future__ import annotations

import contextlib
import json
import os
import signal
import socket
import subprocess
import sys
import tempfile
import threading
import time
from collections.abc import Generator, Sequence
from concurrent.futures import ThreadPoolExecutor, as_completed
from dataclasses import dataclass
from typing import Any

_TRIES = 2
_PATIENCE_S = 10.0
_ONE_THREAD = dict.fromkeys(
    ("OPENBLAS_NUM_THREADS", "OMP_NUM_THREADS", "MKL_NUM_THREADS", "VECLIB_MAXIMUM_THREADS"), "1"
)


@dataclass(frozen=True, slots=True, kw_only=True)
class Ending:
    """How the analysis of one recording ended.

    Attributes
    ----------
    index : int
        Which of the jobs it was.
    status : str
        `done`, `failed` or `skipped` (stopped).
    failure : str
        Why it failed, in a sentence.
    traceback : str
        Where an unexpected error arose.
    seconds : float or None
        Time it took, all tries; None if that is not known.
    cpu_s : float or None
        Processor time, s.
    peak_memory_mb : float or None
        Most memory held at once, 10⁶ bytes; under Linux without pages of the movie's file, and looked at 5 times a
        second.
    tries : int
        How often it was begun.
    host : str
        Machine on which it ran.
    """

    index: int
    status: str
    failure: str = ""
    traceback: str = ""
    seconds: float | None = None
    cpu_s: float | None = None
    peak_memory_mb: float | None = None
    tries: int = 0
    host: str = ""


def available_cores() -> int:
    """Cores that this process may use."""
    if hasattr(os, "sched_getaffinity"):
        return len(os.sched_getaffinity(0))
    return os.cpu_count() or 1


def analyse_here(jobs: Sequence[tuple[int, dict[str, Any]]], *, workers: int) -> Generator[Ending, None, None]:
    """Analyse recordings on this machine, `workers` at a time.

    Parameters
    ----------
    jobs : sequence of (int, dict)
        Index of each recording and what `Recording.job` says of it.
    workers : int
        Processes at a time.

    Yields
    ------
    Ending
        One a job, as they end. Closing the iterator stops all that run and waits for them.
    """
    stop = threading.Event()
    pool = ThreadPoolExecutor(workers)
    try:
        futures = [pool.submit(analyse_apart, index, job, stop) for index, job in jobs]
        for future in as_completed(futures):
            yield future.result()
    finally:
        stop.set()
        pool.shutdown(cancel_futures=True)


def analyse_apart(index: int, job: dict[str, Any], stop: threading.Event | None = None) -> Ending:
    """Analyse one recording in a process of its own; one that dies is begun once more.

    Parameters
    ----------
    index : int
        Which of the jobs it is.
    job : dict
        As `Recording.job` makes it.
    stop : Event, optional
        Set when the result is no longer wanted.
    """
    begun = time.perf_counter()
    death = ""
    for tries in range(1, _TRIES + 1):
        report, death = _one_try(job, stop)
        facts: dict[str, Any] = {
            "index": index,
            "seconds": time.perf_counter() - begun,
            "tries": tries,
            "host": socket.gethostname(),
        }
        if report is not None:
            return Ending(status="failed" if report["failure"] else "done", **report, **facts)
        if stop is not None and stop.is_set():
            return Ending(status="skipped", **facts)
    return Ending(status="failed", failure=death, **facts)


def _one_try(job: dict[str, Any], stop: threading.Event | None) -> tuple[dict[str, Any] | None, str]:
    """Return the report of the process, or how it died."""
    with tempfile.TemporaryFile() as report, tempfile.TemporaryFile() as errors:
        process = subprocess.Popen(
            [sys.executable, "-P", "-m", f"{__package__}.worker"],
            stdin=subprocess.PIPE,
            stdout=report,
            stderr=errors,
            env={**os.environ, **_ONE_THREAD, "MPLBACKEND": "Agg"},
            start_new_session=True,  # an interrupt from the keyboard is for us to pass on
        )
        assert process.stdin is not None
        try:
            try:
                process.stdin.write(json.dumps(job).encode() + b"\n")
                process.stdin.flush()
            except BrokenPipeError:
                pass  # it died at once; its last words say why
            peak_memory_mb = _wait(process, stop)
        finally:
            _end(process)
        report.seek(0)
        content = report.read()
        if process.returncode == 0 and content:
            told: dict[str, Any] = json.loads(content)
            return told | ({"peak_memory_mb": peak_memory_mb} if peak_memory_mb else {}), ""
        errors.seek(0)
        words = errors.read().decode(errors="replace").strip().rpartition("\n")[2]
        return None, _death(process.returncode, words)


def _wait(process: subprocess.Popen[bytes], stop: threading.Event | None) -> float | None:
    """Wait until the process ends or `stop` is set; return the most memory that it was seen to hold, 10⁶ bytes."""
    seen: list[float] = []
    while True:
        try:
            process.wait(timeout=0.2)
        except subprocess.TimeoutExpired:
            seen += _own_memory_mb(process.pid)
            if stop is None or not stop.is_set():
                continue
        return max(seen, default=None)


def _own_memory_mb(pid: int) -> list[float]:
    """Memory of a process without the pages of files, which the system takes back when it needs them."""
    try:
        with open(f"/proc/{pid}/status", encoding="ascii", errors="replace") as file:  # noqa: PTH123
            return [int(line.split()[1]) * 1024 / 1e6 for line in file if line.startswith("RssAnon:")]
    except (OSError, ValueError):
        return []


def _end(process: subprocess.Popen[bytes]) -> None:
    """Close the line, on which the process puts its unfinished files away, and see that it ends."""
    assert process.stdin is not None
    with contextlib.suppress(BrokenPipeError):
        process.stdin.close()
    try:
        process.wait(timeout=_PATIENCE_S)
    except subprocess.TimeoutExpired:
        process.kill()
        process.wait()


def _death(code: int, words: str) -> str:
    if code >= 0:
        return f"The process that analysed it ended without a result, {_TRIES} times ({words or f'exit code {code}'})."
    name = signal.Signals(-code).name if -code in set(signal.Signals) else f"signal {-code}"
    cure = " Most often memory ran out: run fewer workers at a time." if name == "SIGKILL" else ""
    return f"The process that analysed it was killed by {name}, {_TRIES} times.{cure}"
