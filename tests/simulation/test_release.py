from dataclasses import replace

import numpy as np
import pytest
from scipy.stats import binom, chisquare

from napari_boutonrelease.simulation import Recipe
from napari_boutonrelease.simulation.release import (
    draw_evoked,
    draw_sizes,
    draw_spontaneous,
    release_chances,
    site_probability,
)

RECIPE = Recipe(facilitation=1.0, facilitation_s=0.1, recovery_s=0.05)
N_TRIALS = 20_000


def pairs(n_trials=N_TRIALS, interval_s=0.05):
    return np.arange(n_trials)[:, None] * 1.0 + np.array([0.0, interval_s])


def counts(vesicles, stimulus_s):
    number = np.zeros(stimulus_s.shape, dtype=int)
    np.add.at(number, (vesicles.trial, vesicles.pulse), 1)
    return number


def draw(n_sites, p_site, *, stimulus_s=None, recipe=RECIPE, arrived=None, seed=1):
    stimulus_s = pairs() if stimulus_s is None else stimulus_s
    arrived = np.isfinite(stimulus_s) if arrived is None else arrived
    return draw_evoked(
        n_sites=np.array([n_sites]),
        p_site=np.array([p_site]),
        q_dff=np.array([0.4]),
        stimulus_s=stimulus_s,
        arrived=arrived,
        recipe=recipe,
        rng=np.random.default_rng(seed),
    )


def chances(n_sites, p_site, *, stimulus_s=None, recipe=RECIPE):
    stimulus_s = pairs(10) if stimulus_s is None else stimulus_s
    return release_chances(n_sites=np.array([n_sites]), p_site=np.array([p_site]), stimulus_s=stimulus_s, recipe=recipe)


def test_first_pulse_releases_a_binomial_number_of_vesicles():
    found = np.bincount(counts(draw(4, 0.3), pairs())[:, 0], minlength=5)
    assert chisquare(found, N_TRIALS * binom.pmf(np.arange(5), 4, 0.3)).pvalue > 1e-3


def test_chance_of_release_follows_from_sites_and_site_probability():
    assert chances(5, 0.4).p_release[0, 0] == pytest.approx(0.92224)


def test_a_single_site_that_facilitates_and_refills_by_hand():
    refill, left = 1 - np.exp(-1.0), np.exp(-0.5)
    facilitated = 0.3 + 0.3 * 0.7 * left
    expected = chances(1, 0.3)
    assert expected.p2_given_failure[0] == pytest.approx(facilitated)
    assert expected.p2_given_release[0] == pytest.approx(refill * facilitated)
    assert expected.p_release[0, 1] == pytest.approx(facilitated * (0.7 + 0.3 * refill))


@pytest.mark.parametrize(("n_sites", "p_site"), [(1, 0.6), (3, 0.2), (4, 0.7)])
def test_draws_follow_the_exact_chances_of_a_pulse_pair(n_sites, p_site):
    number = counts(draw(n_sites, p_site, seed=n_sites), pairs())
    released, expected = number > 0, chances(n_sites, p_site)
    first, second = released.T
    for found, chance in [
        (second, expected.p_release[0, 1]),
        (second[first], expected.p2_given_release[0]),
        (second[~first], expected.p2_given_failure[0]),
    ]:
        assert abs(found.mean() - chance) < 4 * np.sqrt(chance * (1 - chance) / found.size)
    spread = number[:, 1].std() / np.sqrt(N_TRIALS)
    assert abs(number[:, 1].mean() - expected.mean_vesicles[0, 1]) < 4 * spread


def test_without_depletion_a_release_leaves_no_mark():
    expected = chances(2, 0.5, recipe=replace(RECIPE, recovery_s=0.0))
    assert expected.p2_given_release[0] == pytest.approx(expected.p2_given_failure[0])


def test_facilitation_never_makes_a_probability_exceed_one():
    stimulus_s = np.arange(20)[None, :] * 0.001
    strong = replace(RECIPE, facilitation=5.0)
    probability = site_probability(p_site=np.array([0.8]), stimulus_s=stimulus_s, recipe=strong)
    assert probability.max() <= 1.0
    assert np.all(np.diff(probability[0, 0]) >= 0)


def test_a_stimulus_that_does_not_arrive_releases_nothing_and_uses_no_vesicle():
    arrived = np.ones((N_TRIALS, 2), dtype=bool)
    arrived[:, 0] = False
    number = counts(draw(1, 0.5, arrived=arrived, recipe=replace(RECIPE, facilitation=0.0, recovery_s=100.0)), pairs())
    assert number[:, 0].sum() == 0
    assert abs(number[:, 1].mean() - 0.5) < 4 * 0.5 / np.sqrt(N_TRIALS)


def test_missing_pulses_release_nothing_and_are_nan_in_the_chances():
    stimulus_s = pairs(50)
    stimulus_s[::2, 1] = np.nan
    assert counts(draw(4, 0.9, stimulus_s=stimulus_s), stimulus_s)[::2, 1].sum() == 0
    expected = chances(4, 0.9, stimulus_s=stimulus_s)
    assert np.isnan(expected.p_vesicle[0, ::2, 1]).all()
    assert expected.p_release[0, 1] == pytest.approx(chances(4, 0.9).p_release[0, 1])


def test_vesicles_fuse_after_the_latency_with_an_exponential_delay():
    recipe = replace(RECIPE, latency_s=0.002, jitter_s=0.003)
    vesicles = draw(2, 0.5, recipe=recipe)
    delay = vesicles.time_s - pairs()[vesicles.trial, vesicles.pulse]
    assert delay.min() >= 0.002
    assert abs(delay.mean() - 0.005) < 4 * 0.003 / np.sqrt(delay.size)


@pytest.mark.parametrize("shape", ["gamma", "normal"])
def test_sizes_of_vesicles_are_positive_with_the_stated_mean_and_cv(shape):
    recipe = Recipe(q_cv=0.3, q_shape=shape)
    sizes = draw_sizes(mean_dff=np.full(N_TRIALS, 0.5), recipe=recipe, rng=np.random.default_rng(5))
    assert sizes.min() > 0
    assert sizes.mean() == pytest.approx(0.5, abs=4 * 0.15 / np.sqrt(N_TRIALS) + 1e-3)
    assert sizes.std() / sizes.mean() == pytest.approx(0.3, abs=0.01)


def test_release_runs_down_linearly_from_the_first_trial_to_the_last():
    probability = site_probability(p_site=np.array([0.8]), stimulus_s=pairs(5), recipe=Recipe(rundown=0.5))
    assert probability[0, :, 0] == pytest.approx([0.8, 0.7, 0.6, 0.5, 0.4])


def test_spontaneous_release_is_a_poisson_process_of_the_boutons_that_can_release():
    lost = draw_spontaneous(
        releases=np.array([True, False, True]),
        q_dff=np.array([0.4, 0.4, 0.2]),
        duration_s=5000.0,
        recipe=Recipe(spontaneous_per_s=0.5),
        rng=np.random.default_rng(2),
    )
    per_bouton = np.bincount(lost.bouton, minlength=3)
    assert per_bouton[1] == 0
    assert np.all(np.abs(per_bouton[[0, 2]] - 2500) < 4 * 50)
    assert abs(lost.time_s.mean() - 2500) < 4 * 5000 / np.sqrt(12 * lost.time_s.size)
    assert np.all(lost.trial == -1)
