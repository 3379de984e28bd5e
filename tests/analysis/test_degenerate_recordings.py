"""Recordings with too little, too much or nothing in them: never a crash, all files written, and flags that say so."""

from __future__ import annotations

import csv
import json
import re
import warnings
from collections.abc import Callable
from dataclasses import dataclass, field, replace
from typing import Any

import frictionless
import numpy as np
import pytest
import tifffile

import napari_boutonrelease as br
from napari_boutonrelease.analysis.columns import TABLES
from napari_boutonrelease.errors import AnalysisWarning
from napari_boutonrelease.flags import FLAGS
from napari_boutonrelease.reports import write_result
from napari_boutonrelease.simulation import BoutonRecipe

BOUTON = BoutonRecipe(y_px=17.0, x_px=32.0, n_sites=2, p_site=0.4, q_dff=0.5, f0_photons=40.0)
AT_BOUTON = "y_px,x_px\n17,32\n"
REAL_NUMBERS = {"dtype": "float32", "bit_depth": 32}
BY_SHAPE = r"at least 2 are needed.*by their shape alone"
NO_FRAME = r"No frame of the movie can be used"


@dataclass(frozen=True, kw_only=True)
class Case:
    """A recording of one bouton, and what its results must say.

    Attributes
    ----------
    recipe, bouton : dict
        Changes of the recipe and of its bouton.
    frames : callable or None
        What is done to the frames.
    places : str or None
        Positions to be analysed, as CSV.
    warning : str or None
        What the whole analysis warns of.
    flags : set of str
        Flags that the bouton must carry.
    sound : bool
        Whether its release must be right all the same.
    figures : bool
        Whether its figures have anything that those of other cases have not.
    """

    recipe: dict[str, Any] = field(default_factory=dict)
    bouton: dict[str, Any] = field(default_factory=dict)
    frames: Callable[[Any], Any] | None = None
    places: str | None = None
    warning: str | None = None
    flags: frozenset[str] | set[str] = frozenset()
    sound: bool = False
    figures: bool = True


def with_middle(value):
    """Hold the pixel in the bouton's middle at a value."""

    def change(frames):
        frames[:, 17, 32] = value
        return frames

    return change


def with_hole(frames):
    """Make a dark hole at (6, 50), away from the bouton."""
    row, column = np.mgrid[:32, :64]
    hole = 40.0 * np.exp(-((row - 6.0) ** 2 + (column - 50.0) ** 2) / 8.0)
    return (frames - hole).round().clip(0).astype(np.uint16)


def with_lost_frames(frames):
    """Let one frame hold no number at all, and another an infinite pixel."""
    frames[100], frames[205, 3, 4] = np.nan, np.inf
    return frames


def constant(value):
    return lambda frames: np.full_like(frames, value)


def noise_alone(frames):
    return np.random.default_rng(5).poisson(20.0, frames.shape).astype(np.uint16)


ONE_BOUTON = {
    "every trial fails": Case(bouton={"p_site": 0.0}, flags={"silent", "q_assumed", "shape_assumed"}),
    "every trial succeeds": Case(bouton={"p_site": 1.0, "n_sites": 1}, sound=True),
    "nothing unusual": Case(sound=True, figures=False),
    "one trial": Case(recipe={"trials": 1}, warning=BY_SHAPE, flags={"few_trials", "noise_from_residuals"}),
    "two trials": Case(recipe={"trials": 2}, flags={"few_trials", "noise_from_residuals"}),
    "a pixel that never changes": Case(frames=with_middle(150), flags={"dead_pixels"}, sound=True, figures=False),
    "a pixel without numbers": Case(
        recipe=REAL_NUMBERS, frames=with_middle(np.nan), flags={"dead_pixels"}, sound=True, figures=False
    ),
    "responses that clip": Case(
        frames=lambda frames: np.minimum(frames, 190), flags={"saturated"}, sound=True, figures=False
    ),
    "a place darker than its surroundings": Case(frames=with_hole, places="y_px,x_px\n6,50\n", flags={"f0_unusable"}),
    "frames without numbers": Case(recipe=REAL_NUMBERS, frames=with_lost_frames, sound=True, figures=False),
    "no time without stimuli": Case(
        recipe={"trials": 80, "first_s": 0.1, "trial_interval_s": 0.1}, flags={"noise_from_residuals"}, sound=True
    ),
    "trains of ten pulses": Case(
        recipe={"trials": 16, "pulses": 10, "pulse_interval_s": 0.05, "trial_interval_s": 1.2},
        flags={"few_trials"},
        sound=True,
    ),
    "five frames": Case(
        recipe={"trials": 1, "first_s": 0.02},
        frames=lambda frames: frames[:5],
        warning=BY_SHAPE,
        flags={"few_trials"},
    ),
    "two frames": Case(
        recipe={"trials": 1, "first_s": 0.005},
        frames=lambda frames: frames[:2],
        places=AT_BOUTON,
        flags={"f0_unusable", "few_trials"},
    ),
    "a place in a movie that never changes": Case(
        recipe={"trials": 3}, frames=constant(120), places=AT_BOUTON, warning=NO_FRAME, flags={"f0_unusable"}
    ),
}
NO_BOUTON = {
    "a movie that never changes": Case(frames=constant(120), warning=NO_FRAME),
    "a movie without numbers": Case(recipe=REAL_NUMBERS, frames=constant(np.nan), warning=NO_FRAME),
    "noise alone": Case(frames=noise_alone),
}
CASES = ONE_BOUTON | NO_BOUTON


@pytest.fixture(scope="module")
def analysed(tmp_path_factory, simulate, write_files, quick):
    """Analyse each case once: the analysis, the truth, what was warned of and the folder of the files."""
    done = {}

    def analyse(name):
        if name not in done:
            case, folder = CASES[name], tmp_path_factory.mktemp("case")
            simulation = simulate(boutons=(replace(BOUTON, **case.bouton),), **case.recipe)
            frames = simulation.frames if case.frames is None else case.frames(simulation.frames.copy())
            files = write_files(folder, frames, simulation.protocol)
            places = None
            if case.places is not None:
                places = folder / "places.csv"
                places.write_text(case.places, encoding="utf-8")
            with warnings.catch_warnings(record=True) as caught:
                warnings.simplefilter("error")
                warnings.simplefilter("always", AnalysisWarning)
                analysis = br.analyse(files.movie, files.protocol, settings=quick, boutons=places)
            done[name] = analysis, simulation.truth, [str(one.message) for one in caught], folder
        return done[name]

    return analyse


@pytest.mark.parametrize("name", ONE_BOUTON)
def test_flags_say_what_is_doubtful(analysed, name):
    case, (analysis, truth, _, _) = CASES[name], analysed(name)
    assert len(analysis.boutons) == 1
    bouton = analysis.boutons.iloc[0]
    if case.places is None:
        assert np.hypot(bouton.y_px - truth.y_px[0], bouton.x_px - truth.x_px[0]) < 0.5
    flags = set(bouton["flags"].split(";")) - {""}
    assert flags <= FLAGS.keys()
    assert case.flags <= flags


@pytest.mark.parametrize("name", [name for name, case in CASES.items() if case.sound])
def test_release_is_right_all_the_same(analysed, name):
    analysis, truth, _, _ = analysed(name)
    bouton = analysis.boutons.iloc[0]
    released = np.mean(truth.vesicles[0, :, 0] > 0)
    assert bouton.found_by == "both"
    assert bouton.p_release == pytest.approx(released, abs=0.1)
    assert bouton.p_release_lo <= min(released, 0.999) <= bouton.p_release_hi


@pytest.mark.parametrize("name", NO_BOUTON)
def test_nothing_is_found_where_nothing_is(analysed, name):
    analysis = analysed(name)[0]
    for table in ("boutons", "pulses", "responses", "spontaneous"):
        assert len(getattr(analysis, table)) == 0
    assert analysis.cautions[0].startswith("No bouton was found")
    assert analysis.summary["counts"]["boutons"] == 0
    assert analysis.summary["population"]["p_release"] is None


@pytest.mark.parametrize("name", CASES)
def test_a_doubt_about_the_whole_recording_is_a_warning(analysed, name):
    expected, said = CASES[name].warning, analysed(name)[2]
    assert bool(said) == (expected is not None)
    if expected is not None:
        assert any(re.search(expected, message) for message in said)


@pytest.mark.parametrize("name", CASES)
def test_all_files_are_written_and_readable(analysed, name):
    analysis, _, _, folder = analysed(name)
    results = write_result(analysis, folder / "results", overwrite=False, figures=CASES[name].figures)
    for table in TABLES:
        with (results / f"{table}.csv").open(encoding="utf-8", newline="") as file:
            header, *rows = csv.reader(file)
        assert tuple(header) == TABLES[table].names
        assert len(rows) == len(getattr(analysis, table))
        assert not {cell.lower() for row in rows for cell in row} & {"nan", "inf", "-inf", "<na>"}
    for path in results.glob("*.json"):
        json.loads(path.read_text(encoding="utf-8"), parse_constant=pytest.fail)
    with np.load(results / "traces.npz", allow_pickle=False) as traces:
        assert traces["dff"].shape == (len(analysis.boutons), len(traces["time_s"]))
    assert tifffile.imread(results / "footprints.tif").shape == analysis.mean_image.shape
    if CASES[name].figures:
        assert (results / "report.pdf").read_bytes().startswith(b"%PDF")
        assert len(list((results / "figures").glob("*.png"))) >= 4
    report = frictionless.Package(str(results / "datapackage.json")).validate()
    assert report.valid, report.flatten(["type", "note"])


def test_where_every_trial_fails_release_has_an_upper_limit_alone(analysed):
    analysis = analysed("every trial fails")[0]
    bouton = analysis.boutons.iloc[0]
    assert bouton.found_by == "shape"
    assert bouton.p_release < 0.05
    assert bouton.p_release_lo == 0
    assert 0 < bouton.p_release_hi < 0.4
    assert np.isnan(bouton.n_sites)
    assert any("upper limit" in caution for caution in analysis.cautions)
    assert analysis.summary["population"]["q"] is None


def test_where_every_trial_succeeds_release_is_nearly_sure(analysed):
    bouton = analysed("every trial succeeds")[0].boutons.iloc[0]
    assert bouton.p_called == 1
    assert bouton.p_release > 0.95
    assert bouton.p_release_lo > 0.8  # 24 of 24: Wilson's lower limit is 0.86
    assert bouton.p_release_hi > 0.99


@pytest.mark.parametrize("name", ["one trial", "two trials"])
def test_few_trials_leave_release_open(analysed, name):
    bouton = analysed(name)[0].boutons.iloc[0]
    assert bouton.p_release_hi - bouton.p_release_lo > 0.5


@pytest.mark.parametrize("name", ["a place darker than its surroundings", "two frames"])
def test_without_a_baseline_there_is_no_amplitude(analysed, name):
    analysis = analysed(name)[0]
    bouton = analysis.boutons.iloc[0]
    assert bouton[["p_release", "q", "amplitude_mean", "noise_sd", "threshold", "p_called"]].isna().all()
    assert bouton.quantal_model == "none"
    assert set(analysis.responses.used) == {0}
    assert set(analysis.responses.reason) <= {"f0 unusable", "frames missing"}
    assert np.isnan(analysis.dff).all()


def test_a_frame_without_numbers_is_left_out_alone(analysed):
    analysis = analysed("frames without numbers")[0]
    assert analysis.drift.frame[analysis.drift.used == 0].tolist() == [100, 205]
    assert np.flatnonzero(np.isnan(analysis.dff[0])).tolist() == [100, 205]


def test_every_pulse_of_a_train_is_reported(analysed):
    analysis, truth, _, _ = analysed("trains of ten pulses")
    released = (truth.vesicles[0] > 0).mean(axis=0)
    assert analysis.pulses.pulse.tolist() == list(range(1, 11))
    assert np.all(np.abs(analysis.pulses.p_release - released) < 0.2)
    assert analysis.boutons.ppr.notna().all()
