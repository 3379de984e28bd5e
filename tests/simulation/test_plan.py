from dataclasses import replace

import numpy as np
import pytest

from napari_boutonrelease.errors import InputError
from napari_boutonrelease.simulation import BoutonRecipe, Recipe, plan_recording


def plan(seed=1, **changes):
    return plan_recording(Recipe(**{"trials": 200, **changes}), rng=np.random.default_rng(seed))


def test_boutons_lie_on_the_axon_at_the_stated_spacing():
    truths = [plan(seed, trials=2, n_boutons=9, width_px=256, wander_um=3.0) for seed in range(40)]
    gaps = np.concatenate([np.diff(truth.axon_um) for truth in truths])
    assert gaps.mean() == pytest.approx(3.7, abs=4 * 0.6 / np.sqrt(gaps.size))
    assert gaps.std() == pytest.approx(0.6, rel=0.2)
    for truth in truths:
        away = np.hypot(truth.axon_path_px[:, None, 0] - truth.y_px, truth.axon_path_px[:, None, 1] - truth.x_px).min(
            axis=0
        )
        assert away.max() < 0.2
        assert truth.y_um == pytest.approx(truth.y_px * 0.18)
        assert 5 < truth.x_px.min() < truth.x_px.max() < 251
        assert 5 < truth.y_px.min() < truth.y_px.max() < 43


def test_release_probabilities_cover_the_stated_range():
    truth = plan(n_boutons=5, p_release=(0.05, 0.9))
    p = np.sort(truth.p_release)
    edges = np.linspace(0.05, 0.9, 6)
    assert np.all((p >= edges[:-1]) & (p <= edges[1:]))
    assert truth.p_release == pytest.approx(1 - (1 - truth.p_site) ** truth.n_sites)
    assert set(truth.n_sites) <= {1, 2, 3, 4}


def test_amplitudes_are_the_sum_of_vesicles_with_the_boutons_mean():
    truth = plan(trials=2000, pulses=2, spontaneous_per_s=0.2)
    again = np.zeros(truth.vesicles.shape)
    evoked = truth.vesicle_trial >= 0
    where = truth.vesicle_spot[evoked], truth.vesicle_trial[evoked], truth.vesicle_pulse[evoked]
    np.add.at(again, where, truth.vesicle_dff[evoked])
    assert again == pytest.approx(truth.amplitude_dff)
    for spot in truth.boutons:
        n = truth.vesicles[spot].sum()
        assert truth.amplitude_dff[spot].sum() / n == pytest.approx(truth.q_dff[spot], rel=4 * 0.3 / np.sqrt(n))
        p = truth.p_release[spot]
        assert abs((truth.vesicles[spot, :, 0] > 0).mean() - p) < 4 * np.sqrt(p * (1 - p) / 2000)


def test_spontaneous_releases_lie_within_the_recording_and_are_told_apart():
    truth = plan(trials=50, file_s=0.6, first_s=0.2, trial_interval_s=3.0, spontaneous_per_s=1.0)
    spot, time_s, size_dff = truth.spontaneous
    assert spot.size > 50
    assert np.all((time_s >= 0) & (time_s < 50 * 0.6))
    clock = truth.vesicle_s[truth.vesicle_trial < 0]
    assert clock % 3.0 == pytest.approx(time_s % 0.6, abs=1e-9)
    assert np.all(size_dff > 0)


def test_silent_and_dim_boutons_and_specks_are_what_they_are_called():
    truth = plan(n_boutons=5, silent_boutons=2, dim_boutons=1, photons_cv=0.0, specks_on_axon=1, specks_off_axon=2)
    assert truth.kind.count("silent") == 2
    assert truth.kind.count("speck") == 3
    quiet = np.array([kind != "releasing" for kind in truth.kind])
    assert truth.vesicles[quiet].sum() == 0
    assert np.all(truth.p_release[quiet] == 0)
    assert np.isnan(truth.ppr[quiet]).all()
    assert np.all(truth.vesicles[~quiet].sum(axis=(1, 2)) > 0)
    assert sorted(truth.f0_photons[truth.boutons]) == [2.5, 10, 10, 10, 10]
    assert truth.boutons.tolist() == [0, 1, 2, 3, 4]


def test_failed_stimuli_release_at_no_bouton_and_do_not_lower_the_true_probability():
    truth = plan(trials=1000, failed_stimuli=0.2)
    assert abs(truth.stimulus_failed.mean() - 0.2) < 4 * np.sqrt(0.16 / 1000)
    assert truth.vesicles[:, truth.stimulus_failed].sum() == 0
    assert truth.p_release == pytest.approx(plan(trials=1000).p_release)


def test_given_boutons_are_taken_as_they_are():
    given = tuple(
        BoutonRecipe(y_px=20.0 + i, x_px=20.0 + 12 * i, n_sites=i + 1, p_site=0.2 * i, q_dff=0.3, f0_photons=5.0 + i)
        for i in range(4)
    )
    truth = plan(boutons=given)
    assert truth.x_px.tolist() == [20, 32, 44, 56]
    assert truth.y_px.tolist() == [20, 21, 22, 23]
    assert truth.n_sites.tolist() == [1, 2, 3, 4]
    assert truth.f0_photons.tolist() == [5, 6, 7, 8]
    assert truth.kind == ("silent", "releasing", "releasing", "releasing")


def test_tables_of_pulses_may_differ_from_trial_to_trial():
    truth = plan(pulse_table_s=((0.5, 0.55, 0.7), (1.3,), (2.0, 2.02)))
    assert truth.stimulus_s.shape == (3, 3)
    assert np.isnan(truth.stimulus_s[1, 1:]).all()
    assert np.isnan(truth.amplitude_dff[:, 1, 1:]).all()
    assert truth.frame_start_s[-1] >= 2.02


def test_an_image_taller_than_wide_holds_an_upright_axon():
    truth = plan(height_px=128, width_px=48)
    assert np.all(np.diff(truth.y_px) > 0)
    assert np.ptp(truth.x_px) < 20


@pytest.mark.parametrize(
    ("changes", "message"),
    [
        ({"n_boutons": 20}, "20 at spacing_um = 3.7 need"),
        ({"specks_on_axon": 40}, "specks_on_axon = 40 do not fit"),
        ({"specks_off_axon": 500}, "500 specks off the axon do not fit"),
    ],
)
def test_a_scene_without_room_says_so(changes, message):
    with pytest.raises(InputError, match=message):
        plan(trials=1, **changes)


@pytest.mark.parametrize(
    ("changes", "message"),
    [
        ({"frame_interval_s": -1.0}, "frame_interval_s must be greater than 0"),
        ({"exposure_s": 0.02}, "exposure_s must not exceed frame_interval_s"),
        ({"row_time_s": 0.001}, "row_time_s x height_px must not exceed"),
        ({"bleached": 1.0}, "must be less than 1"),
        ({"dtype": "uint8"}, "bit_depth must be at most 8"),
        ({"q_shape": "flat"}, "q_shape must be"),
        ({"p_release": (0.9, 0.1)}, "p_release must be"),
        ({"n_sites": (0, 2)}, "n_sites must be"),
        ({"silent_boutons": 6}, "silent_boutons and dim_boutons must not exceed"),
        ({"file_s": 0.2}, "comes after the end of its file"),
        ({"file_s": 2.0}, "file_s must lie between"),
        ({"pulse_table_s": ((0.5, 0.4),)}, "Trial 1: stimulus times must"),
        ({"trials": 0}, "trials must be a whole number of 1 or more"),
        ({"photons_cv": -0.1}, "photons_cv must be 0 or more"),
    ],
)
def test_a_recipe_that_cannot_be_is_refused(changes, message):
    with pytest.raises(InputError, match=message):
        Recipe(**changes)


def test_a_bouton_that_cannot_be_is_refused():
    bouton = BoutonRecipe(y_px=1.0, x_px=1.0, n_sites=1, p_site=0.5, q_dff=0.4, f0_photons=1.0)
    with pytest.raises(InputError, match="p_site must lie between 0 and 1"):
        replace(bouton, p_site=1.5)
