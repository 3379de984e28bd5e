"""Calling the program: help, version, exit codes, one sentence an error, and a quick start."""

from __future__ import annotations

import os
import subprocess
import sys
import time
import warnings
from statistics import median
from types import SimpleNamespace

import pytest

import napari_boutonrelease
from napari_boutonrelease import AnalysisWarning, InputError
from napari_boutonrelease.cli import main as program

COMMANDS = tuple(program.COMMANDS)


@pytest.fixture(autouse=True)
def _quiet_process(monkeypatch):
    """Keep what `main` changes in its process away from the other tests."""
    monkeypatch.setenv("OPENBLAS_NUM_THREADS", os.environ.get("OPENBLAS_NUM_THREADS", "1"))
    with warnings.catch_warnings():
        yield


@pytest.fixture
def command(monkeypatch):
    """Replace the command `inspect` by one that raises or warns as told."""

    def replace(act):
        fake = SimpleNamespace(add_arguments=lambda _: None, run=lambda _: act())
        monkeypatch.setattr(program, "command_module", lambda _: fake)

    return replace


def raising(error: BaseException):
    def act():
        raise error

    return act


def test_version_is_the_packages(capsys):
    assert program.main(["--version"]) == 0
    assert capsys.readouterr().out == f"boutonrelease {napari_boutonrelease.__version__}\n"


def test_help_lists_every_command(capsys):
    with pytest.raises(SystemExit, match="0"):
        program.main(["--help"])
    out = capsys.readouterr().out
    assert all(name in out and summary.split(",")[0] in out for name, summary in program.COMMANDS.items())


@pytest.mark.parametrize("name", COMMANDS)
def test_each_command_explains_itself(capsys, name):
    with pytest.raises(SystemExit, match="0"):
        program.main([name, "--help"])
    out = capsys.readouterr().out
    assert f"boutonrelease {name}" in out
    assert "--debug" in out


@pytest.mark.parametrize("words", [[], ["nonsense"], ["analyse", "--no-such-option"], ["analyse", "--n-max", "many"]])
def test_a_wrong_call_exits_with_2(capsys, words):
    with pytest.raises(SystemExit, match="2"):
        program.main(words)
    assert "error:" in capsys.readouterr().err


def test_an_input_error_is_one_sentence_and_exit_2(capsys, command):
    command(raising(InputError("axon.tif: the file is empty.")))
    assert program.main(["inspect"]) == 2
    assert capsys.readouterr() == ("", "boutonrelease: error: axon.tif: the file is empty.\n")


def test_a_failure_is_one_sentence_and_exit_1(capsys, command):
    command(raising(ZeroDivisionError("division by zero")))
    assert program.main(["inspect"]) == 1
    assert capsys.readouterr().err == (
        "boutonrelease: failed: ZeroDivisionError: division by zero (--debug shows where)\n"
    )


def test_an_interrupt_exits_with_130(capsys, command):
    command(raising(KeyboardInterrupt()))
    assert program.main(["inspect"]) == 130
    assert capsys.readouterr().err == "boutonrelease: interrupted\n"


@pytest.mark.parametrize(("error", "code"), [(InputError("bad"), 2), (ZeroDivisionError("bad"), 1)])
def test_debug_adds_the_traceback_and_keeps_the_exit_code(capsys, command, error, code):
    command(raising(error))
    assert program.main(["inspect", "--debug"]) == code
    assert "Traceback (most recent call last)" in capsys.readouterr().err


def test_doubts_about_a_recording_are_notes(capsys, command):
    def act():
        warnings.simplefilter("always")
        warnings.warn("half of the frames are dark.", AnalysisWarning, stacklevel=1)
        warnings.warn("an inner matter", RuntimeWarning, stacklevel=1)

    command(act)
    assert program.main(["inspect"]) == 0
    assert capsys.readouterr().err == "boutonrelease: note: half of the frames are dark.\n"


def test_a_reader_that_has_seen_enough_is_no_failure(tmp_path):
    assert program.main(["simulate", str(tmp_path / "a.tif"), "--trials", "1", "--set", "specks_off_axon=0"]) == 0
    code = (
        "import sys\nfrom napari_boutonrelease.cli.main import main\n"
        f"sys.exit(main(['inspect', {str(tmp_path / 'a.tif')!r}]))"
    )
    reader, writer = os.pipe()
    os.close(reader)
    done = subprocess.run([sys.executable, "-c", code], stdout=writer, stderr=subprocess.PIPE, text=True, check=False)
    os.close(writer)
    assert (done.returncode, done.stderr) == (0, "")


@pytest.mark.parametrize("words", [["--help"], ["--version"], *([name, "--help"] for name in COMMANDS)])
def test_answers_load_nothing_heavy(words):
    code = (
        "import sys\nfrom napari_boutonrelease.cli.main import main\n"
        f"try:\n    main({words!r})\nexcept SystemExit:\n    pass\nprint('MODULES', *sys.modules)"
    )
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    loaded = set(done.stdout.rpartition("MODULES")[2].split())
    assert not loaded & {"numpy", "pydantic", "importlib.metadata", "napari", "qtpy", "typing", "pathlib", "inspect"}


def test_the_start_is_quick():
    """Help costs about 2.5 times a bare interpreter (quiet machine); the gate leaves room for a busy one."""
    bare = [sys.executable, "-c", "pass"]
    asked = [sys.executable, "-m", "napari_boutonrelease.cli.main", "analyse", "--help"]
    ratios = []
    for _ in range(7):
        seconds = []
        for call in (bare, asked):
            start = time.perf_counter()
            subprocess.run(call, capture_output=True, check=True)
            seconds.append(time.perf_counter() - start)
        ratios.append(seconds[1] / seconds[0])
    assert median(ratios) < 5, f"help takes {median(ratios):.1f} times a bare interpreter"
