"""Analyses one recording in a process of its own: the job comes in as a line of JSON, a report goes out.

The line stays open while the result is wanted. When it closes, because the batch was stopped or killed, the process
puts its unfinished files away and ends.
"""

from __future__ import annotations

import json
import os
import signal
import sys
import threading
import time
import traceback
import warnings
from _thread import interrupt_main
from pathlib import Path
from typing import Any

from ..errors import InputError

_PATIENCE_S = 15.0


def main() -> int:
    """Read a job from standard input, do it, and write the report to standard output."""
    signal.signal(signal.SIGINT, signal.default_int_handler)  # a shell may have had it ignored
    report_to = os.dup(1)
    os.dup2(2, 1)  # whatever a library prints is no report
    job = json.loads(_read_line(0))
    threading.Thread(target=_end_when_closed, daemon=True).start()
    try:
        report = analyse_job(job)
    except KeyboardInterrupt:
        return 130
    os.write(report_to, json.dumps(report).encode())
    return 0


def analyse_job(job: dict[str, Any]) -> dict[str, Any]:
    """Analyse one recording and write its folder; what goes wrong ends up in the report.

    Parameters
    ----------
    job : dict
        As `Recording.job` makes it.

    Returns
    -------
    dict
        `failure` (a sentence, empty if there is none), `traceback`, `cpu_s` and `peak_memory_mb`.
    """
    failure = trace = ""
    try:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")  # doubts about the recording stand in its report as cautions
            _analyse(job)
    except InputError as error:
        failure = str(error)
    except MemoryError as error:
        failure = f"There is too little memory for it ({error}); run fewer workers at a time."
    except Exception as error:  # noqa: BLE001
        failure = f"{type(error).__name__}: {error}".rstrip(": ")
        trace = traceback.format_exc()
    return {
        "failure": failure,
        "traceback": trace,
        "cpu_s": time.process_time(),
        "peak_memory_mb": peak_memory_mb(),
    }


def _analyse(job: dict[str, Any]) -> None:
    from ..analysis.run import run_analysis
    from ..analysis.settings import Settings
    from ..recording import open_movie, read_protocol
    from ..reports import check_can_write, write_result

    settings = Settings.model_validate(job["settings"])
    folder = Path(job["folder"])
    check_can_write(folder, overwrite=job["overwrite"])
    result = run_analysis(
        open_movie(job["movie"], channel=settings.recording.channel),
        read_protocol(job["protocol"]),
        settings=settings,
        boutons=job["boutons"],
        axon=job["axon"],
    )
    write_result(result, folder, overwrite=job["overwrite"], figures=job["report"])


def peak_memory_mb() -> float | None:
    """Most memory that this process has held at once, in 10⁶ bytes; None where the system does not say."""
    try:
        import resource
    except ImportError:
        return None
    peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
    return peak * (1 if sys.platform == "darwin" else 1024) / 1e6


def _read_line(descriptor: int) -> bytes:
    """Read up to the first line break without a buffer: one would be locked while the process ends."""
    line = b""
    while not line.endswith(b"\n"):
        part = os.read(descriptor, 1)
        if not part:
            break
        line += part
    return line


def _end_when_closed() -> None:
    while os.read(0, 1024):
        pass
    interrupt_main()
    time.sleep(_PATIENCE_S)
    os._exit(130)


if __name__ == "__main__":
    sys.exit(main())
