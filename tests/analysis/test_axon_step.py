"""What the boutons say together, from a movie on: failed stimuli are found, and left out where that is asked for."""

import numpy as np
import pytest

from napari_boutonrelease.analysis.axon_step import SUSPECTED, exclude_suspected, suspected_trials
from napari_boutonrelease.analysis.hand_edits import HandEdits
from napari_boutonrelease.analysis.model import AnalysisModel
from napari_boutonrelease.analysis.pipeline import Pipeline
from napari_boutonrelease.analysis.run import put_together
from napari_boutonrelease.analysis.settings import Settings
from napari_boutonrelease.recording import movie_from_array
from napari_boutonrelease.simulation import BoutonRecipe, Recipe, simulate_recording

TRIALS = 40
QUICK = {"quanta": {"n_max": 2, "bootstrap": 0}, "pairs": {"bootstrap": 100}, "axon": {"permutations": 199}}
KEEP = Settings.model_validate(QUICK)
LEAVE_OUT = Settings.model_validate(QUICK | {"calls": {"exclude_stimulus_failures": True}})


@pytest.fixture(scope="module")
def simulation():
    boutons = tuple(
        BoutonRecipe(y_px=14.0 + 2.0 * (i % 2), x_px=10.0 + 18.0 * i, n_sites=1, p_site=p, q_dff=0.5, f0_photons=40.0)
        for i, p in enumerate((0.3, 0.5, 0.6, 0.8, 0.7))
    )
    recipe = Recipe(
        boutons=boutons,
        height_px=30,
        width_px=92,
        trials=TRIALS,
        pulses=2,
        first_s=0.4,
        trial_interval_s=0.6,
        wander_um=0.0,
        drift_walk_px=0.0,
        failed_stimuli=0.08,
    )
    return recipe, simulate_recording(recipe, rng=np.random.default_rng(5))


@pytest.fixture(scope="module")
def pipeline(simulation):
    recipe, recording = simulation
    movie = movie_from_array(
        recording.frames, frame_interval_s=recipe.frame_interval_s, pixel_size_um=recipe.pixel_size_um
    )
    return Pipeline(movie, recording.protocol, axon=np.array([[15.0, 1.0], [15.0, 90.0]]))


@pytest.fixture(scope="module")
def kept(pipeline):
    return pipeline.measure(KEEP)


@pytest.fixture(scope="module")
def left_out(pipeline, kept):
    return pipeline.measure(LEAVE_OUT)


def test_failed_stimuli_are_suspected_and_said(simulation, pipeline, kept):
    lost = simulation[1].truth.stimulus_failed
    suspected = kept.failed.suspected
    assert lost.sum() >= 4
    assert np.sum(suspected & lost) >= lost.sum() - 1
    assert np.sum(suspected & ~lost) <= 1
    result = put_together(kept, pipeline=pipeline)
    summary = result.summary["stimulus_failures"]
    assert summary["suspected"] == suspected.sum()
    assert summary["share_lo"] < 0.08 < summary["share_hi"]
    assert not summary["excluded"]
    assert any("--exclude-stimulus-failures" in caution for caution in result.cautions)
    assert result.trials["used"].eq(1).all()


def test_left_out_stimuli_carry_their_reason_and_no_longer_lower_p_release(simulation, pipeline, kept, left_out):
    truth = simulation[1].truth
    before, after = (put_together(one, pipeline=pipeline) for one in (kept, left_out))
    unused = after.responses[after.responses["used"] == 0]
    assert set(unused["reason"]) == {SUSPECTED}
    places = list(zip(unused["trial"] - 1, unused["pulse"] - 1, strict=True))
    assert {(int(t), int(p)) for t, p in places} == {(int(t), int(p)) for t, p in np.argwhere(kept.failed.suspected)}
    trials = after.trials[after.trials["used"] == 0]
    assert set(trials["reason"]) == {SUSPECTED}
    assert len(trials) == kept.failed.suspected.sum()
    assert (after.boutons["p_release"] > before.boutons["p_release"]).all()
    # what was drawn at stimuli that arrived
    drawn = truth.vesicles[:, :, 0][:, ~truth.stimulus_failed[:, 0]] > 0
    assert after.boutons["p_release"].mean() == pytest.approx(drawn[:5].mean(), abs=0.03)
    assert any("left out of every estimate" in caution for caution in after.cautions)


def test_the_boutons_are_compared(pipeline, kept):
    result = put_together(kept, pipeline=pipeline)
    n = len(result.boutons)
    summary = result.summary
    assert summary["heterogeneity"]["boutons"] == n == 5
    assert summary["heterogeneity"]["sd_lo"] <= summary["heterogeneity"]["sd"] <= summary["heterogeneity"]["sd_hi"]
    assert summary["morans_i"]["value"] is not None
    assert (
        summary["p_release_against_distance"]["slope_per_um_lo"]
        < summary["p_release_against_distance"]["slope_per_um_hi"]
    )
    assert len(result.co_release) == summary["co_release"]["pairs"] == n * (n - 1) // 2
    assert result.co_release["distance_um"].between(2.5, 14).all()
    table = result.boutons
    assert (table["p_release_shrunk_lo"] < table["p_release_shrunk"]).all()
    assert (table["p_release_shrunk"] < table["p_release_shrunk_hi"]).all()
    assert summary["split_half"]["method"]


def test_suspected_trials_can_be_left_out_by_hand(kept, left_out):
    trials = suspected_trials(kept, HandEdits())
    assert set(trials) == set((np.flatnonzero(kept.failed.suspected.any(axis=1)) + 1).tolist())
    edits = exclude_suspected(HandEdits(), kept)
    assert edits.excluded == tuple((trial, SUSPECTED) for trial in trials)
    assert suspected_trials(left_out, HandEdits()) == ()


def test_a_higher_cut_suspects_no_more(pipeline, kept):
    strict = Settings.model_validate(QUICK | {"calls": {"stimulus_failure_cut": 0.99}})
    measured = pipeline.measure(strict)
    assert np.all(measured.failed.suspected <= kept.failed.suspected)
    assert measured.release is kept.release


def test_the_model_leaves_suspected_trials_out_and_takes_them_back(pipeline, kept):
    model = AnalysisModel()
    model.open(pipeline.movie, pipeline.protocol, axon=pipeline.axon)
    model.exclude_suspected_trials()  # nothing is measured yet
    assert not model.can_undo
    model.accept(model.request(), kept)
    model.exclude_suspected_trials()
    assert {trial for trial, _ in model.edits.excluded} == set(suspected_trials(kept, HandEdits()))
    assert {reason for _, reason in model.edits.excluded} == {SUSPECTED}
    model.undo()
    assert model.edits.excluded == ()
