"""Kills, deaths and interrupts: what is done stays, nothing half is left, and the same call goes on."""

from __future__ import annotations

import os
import signal
import subprocess
import sys
import time
from pathlib import Path

import pandas as pd
import pytest

from napari_boutonrelease.batch import processes as processes_module
from napari_boutonrelease.batch import run_batch

PROC = Path("/proc")
pytestmark = pytest.mark.skipif(not (PROC / "self" / "stat").exists(), reason="looks at processes through /proc")


def start(home, tools):
    """Begin a batch, one recording at a time, in a process of its own."""
    words = ["batch", home / "study.csv", "--out", home / "out", "--workers", "1", *tools.words]
    code = "import sys\nfrom napari_boutonrelease.cli.main import main\nsys.exit(main(sys.argv[1:]))"
    return subprocess.Popen(
        [sys.executable, "-c", code, *map(str, words)],
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        text=True,
        start_new_session=True,
    )


def wait_for(condition, *, seconds=120.0):
    end = time.monotonic() + seconds
    while not condition():
        assert time.monotonic() < end, "waited in vain"
        time.sleep(0.05)


def children_of(pid):
    """Processes below another that have not ended."""
    found = []
    for stat in PROC.glob("[0-9]*/stat"):
        try:
            state, parent = stat.read_text().rpartition(")")[2].split()[:2]
        except (OSError, ValueError):
            continue
        if int(parent) == pid and state != "Z":
            found.append(int(stat.parent.name))
    return found


def alive(pid):
    try:
        return (PROC / str(pid) / "stat").read_text().rpartition(")")[2].split()[0] != "Z"
    except OSError:
        return False


def names(folder):
    return sorted(path.name for path in folder.iterdir())


def begin_second(home, tools):
    """Manifest of two recordings; return the process when the first is done and the second has begun."""
    tools.write_manifest(home, tools.row("day1/axon1"), tools.row("day1/axon2"), tools.row("day2/axon1"))
    process = start(home, tools)
    wait_for(lambda: (home / "out" / "day1" / "axon1.release").exists() or process.poll() is not None)
    first = children_of(process.pid)
    wait_for(lambda: [pid for pid in children_of(process.pid) if pid not in first] or process.poll() is not None)
    assert process.poll() is None, process.communicate()
    return process


def test_a_killed_batch_takes_its_workers_along_and_goes_on_where_it_was(own_movies, tools):
    process = begin_second(own_movies, tools)
    workers = children_of(process.pid)
    assert workers
    process.kill()
    process.communicate()
    wait_for(lambda: not any(map(alive, workers)), seconds=60)
    out = own_movies / "out"
    assert names(out / "day1") == ["axon1.release"]
    assert names(out) == ["day1", "journal.jsonl"]
    before = tools.snapshot(out / "day1" / "axon1.release")
    outcome = run_batch(own_movies / "study.csv", out=out, settings=tools.settings(), report=False)
    assert outcome.analysed == ("day1/axon2", "day2/axon1")
    assert outcome.names("done") == ("day1/axon1", "day1/axon2", "day2/axon1")
    assert tools.snapshot(out / "day1" / "axon1.release") == before
    assert names(out) == [
        "batch.json",
        "datapackage.json",
        "day1",
        "day2",
        "journal.jsonl",
        "recordings.csv",
        "study.csv",
    ]


def test_an_interrupt_ends_cleanly_and_keeps_what_is_done(own_movies, tools):
    process = begin_second(own_movies, tools)
    os.kill(process.pid, signal.SIGINT)
    out, err = process.communicate(timeout=120)
    assert process.returncode == 130
    assert err == "boutonrelease: interrupted\n"
    assert "1 of 3 recordings done" in out
    assert "2 not analysed yet" in out
    table = pd.read_csv(own_movies / "out" / "recordings.csv")
    assert list(table["status"]) == ["done", "skipped", "skipped"]
    study = pd.read_csv(own_movies / "out" / "study.csv")
    assert set(study["recording"]) == {"day1/axon1"}
    assert names(own_movies / "out" / "day1") == ["axon1.release"]


def test_a_process_that_dies_is_begun_again_once_and_costs_only_its_recording(own_movies, tools, monkeypatch):
    python = own_movies / "python"
    python.write_text(
        f"#!{sys.executable}\n"
        "import os, pathlib, signal, sys\n"
        "from napari_boutonrelease.batch import worker\n"
        f"died = pathlib.Path({str(own_movies / 'died')!r})\n"
        "job = worker._read_line(0)\n"
        "always, first = b'day1/axon2.tif' in job, b'day2/axon1.tif' in job and not died.exists()\n"
        "if first:\n"
        "    died.touch()\n"
        "if always or first:\n"
        "    os.kill(os.getpid(), signal.SIGKILL)\n"
        "worker._read_line = lambda _: job\n"
        "sys.exit(worker.main())\n"
    )
    python.chmod(0o755)
    monkeypatch.setattr(processes_module.sys, "executable", str(python))
    manifest = tools.write_manifest(own_movies, tools.row("day1/axon2"), tools.row("day2/axon1"))
    outcome = run_batch(manifest, settings=tools.settings(), report=False, workers=2)
    assert outcome.names("done") == ("day2/axon1",)
    assert (own_movies / "died").exists()
    assert list(outcome.failures) == ["day1/axon2"]
    assert "was killed by SIGKILL, 2 times" in outcome.failures["day1/axon2"]
    assert "fewer workers" in outcome.failures["day1/axon2"]
    assert names(own_movies / "day2")[:1] == ["axon1.protocol.toml"]
    assert (own_movies / "day2" / "axon1.release" / "boutons.csv").exists()
    assert outcome.folder == own_movies / "study.study"


def test_a_program_that_cannot_start_says_why(own_movies, tools, monkeypatch):
    python = own_movies / "python"
    python.write_text("#!/bin/sh\necho 'ModuleNotFoundError: no such thing' >&2\nexit 3\n")
    python.chmod(0o755)
    monkeypatch.setattr(processes_module.sys, "executable", str(python))
    manifest = tools.write_manifest(own_movies, tools.row("day1/axon1"))
    outcome = run_batch(manifest, settings=tools.settings(), report=False)
    assert "ended without a result, 2 times (ModuleNotFoundError: no such thing)" in outcome.failures["day1/axon1"]
    assert len(outcome.study) == 0
