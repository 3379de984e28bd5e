"""The lines on the terminal say what the tables say."""

from __future__ import annotations

from pathlib import Path
from types import SimpleNamespace

import numpy as np
import pandas as pd
import pytest

from napari_boutonrelease.cli.comparison import comparison_lines, matched_spots
from napari_boutonrelease.cli.summary import summary_lines, with_interval


def result_of(**changes):
    boutons = pd.DataFrame(
        {
            "bouton": [1, 2, 3],
            "found_by": ["both", "responses", "both"],
            "flags": ["few_trials;silent", "", "few_trials"],
        }
    )
    population = {
        "p_release": 0.412,
        "p_release_lo": 0.33,
        "p_release_hi": 0.5,
        "ppr": None,
        "selection": "all boutons",
    }
    values = {
        "name": "axon",
        "boutons": boutons,
        "summary": {"population": population},
        "cautions": ("dF/F is not glutamate.",),
    }
    return SimpleNamespace(**values | changes)


def test_the_summary_counts_boutons_flags_and_population(tmp_path):
    (tmp_path / "report.pdf").touch()
    lines = summary_lines(result_of(), folder=tmp_path)
    assert lines[0] == "axon: 3 boutons (1 found by responses, 2 found by both responses and shape)"
    assert any("release probability" in line and "0.41 (0.33 to 0.50)" in line for line in lines)
    assert not any("paired-pulse" in line for line in lines)
    flags = [line.split()[:2] for line in lines if line.startswith(("  few", "  silent"))]
    assert flags == [["few_trials", "2"], ["silent", "1"]]
    assert "caution: dF/F is not glutamate." in lines
    assert lines[-1] == f"results: {tmp_path} (begin with report.pdf)"


def test_an_empty_axon_is_said_plainly():
    lines = summary_lines(result_of(boutons=result_of().boutons.iloc[:0], summary={}, cautions=()), folder=Path("out"))
    assert lines == ["axon: no boutons found", "results: out"]


@pytest.mark.parametrize(
    ("numbers", "text"),
    [
        ((0.5, 0.25, 0.75), "0.50 (0.25 to 0.75)"),
        ((np.nan, 0.1, 0.2), "-"),
        ((0.5, np.nan, np.nan), "0.50"),
        ((1.5, 1.1, np.inf), "1.50 (1.10 to unbounded)"),
    ],
)
def test_an_estimate_is_written_with_its_interval(numbers, text):
    assert with_interval(*numbers) == text


@pytest.fixture
def truth():
    return SimpleNamespace(
        recipe=SimpleNamespace(pixel_size_um=0.2),
        kind=("releasing", "silent", "releasing", "speck"),
        boutons=np.array([0, 1, 2]),
        y_px=np.array([10.0, 10.0, 10.0, 40.0]),
        x_px=np.array([10.0, 30.0, 50.0, 10.0]),
        p_release=np.array([0.5, 0.0, 0.9, np.nan]),
        ppr=np.array([1.2, np.nan, 0.8, np.nan]),
        n_sites=np.array([3, 2, 1, 0]),
        q_dff=np.array([0.3, 0.3, 0.4, np.nan]),
    )


def estimates(places, **columns):
    frame = pd.DataFrame(
        {"bouton": range(1, len(places) + 1), "y_px": [y for y, _ in places], "x_px": [x for _, x in places]}
    )
    for name in ("p_release", "ppr", "n_sites", "q"):
        for end in ("", "_lo", "_hi"):
            frame[name + end] = columns.get(name + end, np.nan)
    return frame


def test_boutons_are_matched_to_the_nearest_spot_within_reach(truth):
    boutons = estimates([(11.0, 50.0), (10.0, 11.0), (25.0, 10.0), (40.0, 10.5)])
    assert matched_spots(boutons, truth).tolist() == [2, 0, -1, 3]


def test_a_spot_is_taken_once_and_by_the_nearest(truth):
    assert matched_spots(estimates([(10.0, 12.0), (10.0, 10.0)]), truth).tolist() == [-1, 0]


def test_the_comparison_shows_truth_and_counts_intervals(truth):
    boutons = estimates(
        [(10.0, 10.0), (10.0, 50.0), (40.0, 10.0)],
        p_release=[0.45, 0.7, 0.1], p_release_lo=[0.3, 0.6, 0.0], p_release_hi=[0.6, 0.8, 0.2],
        n_sites=[3, 1, 1], n_sites_lo=[2, 1, 1], n_sites_hi=[6, 2, 2],
    )  # fmt: skip
    lines = comparison_lines(boutons, truth)
    assert lines[0].split("  ")[0] == "bouton"
    assert "paired-pulse" not in lines[0]
    assert "0.45 (0.30 to 0.60)" in lines[1]
    assert lines[1].split()[-1] == "3"
    assert lines[3].split()[-1] == "-"
    assert lines[4:] == [
        "",
        "boutons: 2 of 3 found (missed: 1 silent), 1 where there is none",
        "release probability: 1 of 2 intervals hold the truth",
        "release sites: 2 of 2 intervals hold the truth",
    ]


def test_nothing_found_is_compared_without_a_crash(truth):
    lines = comparison_lines(estimates([]), truth)
    assert lines[-1] == "boutons: 0 of 3 found (missed: 2 releasing, 1 silent)"
