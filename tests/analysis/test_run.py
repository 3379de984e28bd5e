"""One small recording through the whole analysis: what its tables say, and how they hang together."""

from dataclasses import replace

import numpy as np
import pytest

from napari_boutonrelease.analysis.columns import TABLES
from napari_boutonrelease.analysis.pipeline import Pipeline
from napari_boutonrelease.analysis.run import run_analysis
from napari_boutonrelease.analysis.settings import Settings
from napari_boutonrelease.flags import FLAGS
from napari_boutonrelease.recording import movie_from_array
from napari_boutonrelease.response_shape import ResponseShape
from napari_boutonrelease.simulation import BoutonRecipe, preset_recipe, simulate_recording

SETTINGS = Settings().model_copy(update={"quanta": Settings().quanta.model_copy(update={"bootstrap": 20})})


@pytest.fixture(scope="module")
def recording():
    boutons = tuple(
        BoutonRecipe(y_px=20.0, x_px=x, n_sites=n, p_site=p, q_dff=0.5, f0_photons=9.0)
        for x, n, p in ((14.0, 1, 0.5), (36.0, 2, 0.4), (58.0, 1, 0.85), (80.0, 2, 0.0))
    )
    recipe = preset_recipe("fast-pair", height_px=40, width_px=96, trials=40, boutons=boutons)
    simulation = simulate_recording(recipe, rng=np.random.default_rng(4))
    movie = movie_from_array(
        simulation.frames, frame_interval_s=recipe.frame_interval_s, pixel_size_um=recipe.pixel_size_um
    )
    return movie, simulation


@pytest.fixture(scope="module")
def result(recording):
    movie, simulation = recording
    return run_analysis(movie, simulation.protocol, settings=SETTINGS)


def spot_of(result, truth, spot):
    """Row of the bouton at a true spot."""
    distance = np.hypot(result.boutons.y_px - truth.y_px[spot], result.boutons.x_px - truth.x_px[spot])
    assert distance.min() < 1.5
    return result.boutons.loc[distance.idxmin()]


def test_tables_have_the_columns_of_the_data_dictionary(result):
    for name, table in TABLES.items():
        assert tuple(getattr(result, name).columns) == table.names


def test_boutons_are_found_and_their_release_is_recovered(recording, result):
    truth = recording[1].truth
    for spot in truth.boutons[:3]:
        bouton = spot_of(result, truth, spot)
        assert bouton.found_by in ("both", "responses")
        # 4 SD of 40 Bernoulli trials at p 0.5 is 0.32; vesicles are clear
        assert abs(bouton.p_release - truth.p_release[spot]) < 0.32
        assert bouton.p_release_lo <= bouton.p_release <= bouton.p_release_hi


def test_a_silent_bouton_has_an_upper_limit_and_no_sites(recording, result):
    truth = recording[1].truth
    bouton = spot_of(result, truth, truth.boutons[3])
    assert bouton.found_by == "shape"
    assert "silent" in bouton["flags"].split(";")
    assert bouton.p_release < 0.01
    assert 0 < bouton.p_release_hi < 0.2
    assert np.isnan(bouton.n_sites)


def test_every_flag_is_in_the_registry(result):
    codes = {code for cell in result.boutons["flags"] for code in cell.split(";") if code}
    assert codes <= FLAGS.keys()


def test_pulses_and_responses_agree_with_the_boutons(result):
    boutons, pulses, responses = result.boutons, result.pulses, result.responses
    first = pulses[pulses.pulse == 1].reset_index(drop=True)
    for column in ("p_release", "p_called", "amplitude_mean", "potency"):
        np.testing.assert_allclose(first[column], boutons[column])
    counted = responses[responses.used == 1].groupby(["bouton", "pulse"]).called.sum().to_numpy()
    np.testing.assert_array_equal(counted, pulses.called)
    assert len(responses) == len(boutons) * 40 * 2
    called = responses[responses.called == 1].merge(boutons[["bouton", "threshold"]], on="bouton")
    assert (called.amplitude > called.threshold).all()


def test_ratio_of_amplitudes_is_the_release_ratio_within_its_interval(result):
    active = result.boutons[result.boutons.p_release > 0.2]
    assert active.ppr.notna().all()
    assert ((active.ppr_lo < active.ppr) & (active.ppr < active.ppr_hi)).all()
    np.testing.assert_allclose(active.ppf, active.ppr - 1)


def test_ids_count_from_the_top_and_name_the_label_image(result):
    assert result.boutons.bouton.tolist() == list(range(1, len(result.boutons) + 1))
    assert result.boutons.y_px.is_monotonic_increasing
    for bouton in result.boutons.itertuples():
        assert result.footprints.label[round(bouton.y_px), round(bouton.x_px)] == bouton.bouton


def test_a_fixed_reporter_shape_is_used_as_given(recording):
    movie, simulation = recording
    shape = ResponseShape(latency_s=0.002, rise_s=0.003, decay_s=0.05)
    fixed = replace(simulation.protocol, reporter=shape)
    measured = Pipeline(movie, fixed).measure(SETTINGS)
    assert measured.responses.shape == shape
    assert measured.responses.shape_from == "protocol"


def test_the_same_seed_gives_the_same_numbers(recording, result):
    movie, simulation = recording
    again = run_analysis(movie, simulation.protocol, settings=SETTINGS)
    for name in TABLES:
        assert getattr(result, name).equals(getattr(again, name))


def test_progress_rises_to_the_whole(recording):
    movie, simulation = recording
    seen = []
    run_analysis(movie, simulation.protocol, settings=SETTINGS, progress=lambda done, total: seen.append(done / total))
    assert seen[0] == 0
    assert seen[-1] == pytest.approx(1.0)
    assert np.all(np.diff(seen) >= 0)


def test_a_balanced_threshold_trades_misses_for_false_calls(recording, result):
    movie, simulation = recording
    calls = SETTINGS.calls.model_copy(update={"threshold_rule": "balanced"})
    balanced = run_analysis(movie, simulation.protocol, settings=SETTINGS.model_copy(update={"calls": calls}))
    busy = balanced.boutons[balanced.boutons.p_release > 0.2]
    # the bouton that fails least has the lowest threshold, since it has the fewest failures to call falsely
    assert busy.threshold.div(busy.noise_sd).idxmin() == busy.p_release.idxmax()
    assert ((busy.threshold > 0) & (busy.threshold < busy.q)).all()
    assert not np.allclose(balanced.boutons.threshold, result.boutons.threshold)


def test_summary_speaks_of_the_selection(result):
    population = result.summary["population"]
    assert population["boutons"] == len(result.boutons)
    assert "by shape alone" in population["selection"]
    assert population["p_release_found_by_responses"] > population["p_release"]
    assert population["p_release_lo"] <= population["p_release"] <= population["p_release_hi"]


def test_every_estimate_stands_beside_the_others(result):
    estimates = result.estimates
    for bouton in result.boutons[result.boutons.p_release > 0.2].bouton:
        mine = estimates[estimates.bouton == bouton]
        assert set(mine.quantity) == {"p_release", "n_sites", "p_site", "q", "m"}
        assert (mine.quantity == "p_release").sum() == 4
        vesicles = mine[mine.quantity == "m"].set_index("method").value
        # mean amplitude over q and n times p say the same; failures and 1/CV² assume Poisson release and need not
        assert vesicles["mean over q"] == pytest.approx(vesicles.iloc[0], rel=0.25)
