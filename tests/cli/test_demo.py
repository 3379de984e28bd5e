"""`demo` runs the whole way, and its estimates are good enough to show."""

from __future__ import annotations

import contextlib
import io
import re
from functools import partial

import pytest

from napari_boutonrelease.cli.main import main
from napari_boutonrelease.simulation import presets


@pytest.fixture(scope="module")
def demo(tmp_path_factory):
    """Folder of a demo with fewer trials and boutons, and what it printed."""
    folder = tmp_path_factory.mktemp("demo") / "shown"
    smaller = partial(presets.preset_recipe, trials=40, n_boutons=5, width_px=136)
    with pytest.MonkeyPatch.context() as patch, contextlib.redirect_stdout(io.StringIO()) as out:
        patch.setattr(presets, "preset_recipe", smaller)
        assert main(["demo", "--out", str(folder)]) == 0
    return folder, out.getvalue()


def test_recording_and_results_are_there(demo):
    names = {path.name for path in demo[0].iterdir()}
    assert names == {"demo.tif", "demo.protocol.toml", "demo.truth.json", "demo.release"}
    results = {path.name for path in (demo[0] / "demo.release").iterdir()}
    assert {"boutons.csv", "analysis.json", "datapackage.json", "report.pdf"} <= results


def test_most_boutons_are_found_and_most_intervals_hold_the_truth(demo):
    found, n_boutons = map(int, re.search(r"boutons: (\d+) of (\d+) found", demo[1]).groups())
    assert found >= n_boutons - 1
    held, n_intervals = map(int, re.search(r"release probability: (\d+) of (\d+) intervals", demo[1]).groups())
    # Of 5 intervals at 95 %, 3 or more hold with probability 0.999.
    assert held >= n_intervals - 2


def test_a_demo_that_is_there_is_not_overwritten(demo, capsys):
    movie = demo[0] / "demo.tif"
    before = movie.stat().st_mtime_ns
    assert main(["demo", "--out", str(demo[0])]) == 2
    assert "--overwrite" in capsys.readouterr().err
    assert movie.stat().st_mtime_ns == before
