"""How long the command line takes to answer: ``pytest -m benchmark -s tests/benchmarks/test_cold_start.py``."""

from __future__ import annotations

import subprocess
import sys

import pytest

from .race import Contender, race

pytestmark = pytest.mark.benchmark


def running(*arguments):
    def act():
        subprocess.run([sys.executable, *arguments], check=True, capture_output=True)

    return act


def command(*words):
    return running("-c", f"import sys; from napari_boutonrelease.cli.main import main; sys.exit(main({list(words)!r}))")


def test_cold_start():
    ratio = race(
        "cold start; ours is Python itself",
        running("-c", "pass"),
        [
            Contender("boutonrelease --version", command("--version")),
            Contender("boutonrelease (the list of commands)", running("-c", _HELP.format([]))),
            Contender("boutonrelease analyse --help", running("-c", _HELP.format(["analyse"]))),
            Contender("import napari_boutonrelease", running("-c", "import napari_boutonrelease")),
            Contender("import numpy", running("-c", "import numpy")),
            Contender("what traces need", running("-c", "import napari_boutonrelease.responses.traces")),
            Contender("what an analysis needs", running("-c", "import napari_boutonrelease.analysis.pipeline")),
            Contender("import napari", running("-c", "import napari")),
        ],
        repeats=2,
    )
    assert ratio["boutonrelease --version"] < 4
    assert ratio["import napari_boutonrelease"] < 4
    assert ratio["what traces need"] < 3 * ratio["import numpy"]


_HELP = """
from napari_boutonrelease.cli.main import main
try:
    main([*{}, "--help"])
except SystemExit:
    pass
"""
