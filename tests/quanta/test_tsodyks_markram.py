"""The model of Tsodyks and Markram: exact means come back, intervals cover, and what is not determined is said."""

import numpy as np
import pytest

from napari_boutonrelease.errors import InputError
from napari_boutonrelease.quanta import PulsePattern, fit_tsodyks_markram, pulse_patterns, release_shares
from napari_boutonrelease.simulation import Recipe
from napari_boutonrelease.simulation.release import release_chances

PARAMETERS = ("u", "tau_rec_s", "tau_facil_s", "scale")


def pattern(pulses, gap_s, trials, *, first=0):
    return PulsePattern(pulse_s=gap_s * np.arange(pulses), trials=np.arange(first, first + trials))


def noisy_copies(rng, mean, *, trials, sd=0.05):
    """Trials whose mean is exactly what is asked for."""
    noise = rng.normal(0, sd, (trials, len(mean)))
    return mean + noise - noise.mean(axis=0)


@pytest.mark.parametrize(
    ("u", "tau_rec_s", "tau_facil_s"), [(0.5, 0.3, 0.06), (0.1, 0.1, 0.4), (0.3, 0.8, 0.02), (0.05, 0.05, 1.0)]
)
def test_exact_means_give_their_own_parameters(u, tau_rec_s, tau_facil_s):
    times = 0.05 * np.arange(12)
    mean = 4.0 * release_shares(times, u=u, tau_rec_s=tau_rec_s, tau_facil_s=tau_facil_s)
    amplitude = noisy_copies(np.random.default_rng(1), mean, trials=60)
    model = fit_tsodyks_markram(amplitude, patterns=[pattern(12, 0.05, 60)], confidence=0.95)
    assert model.fitted
    assert model.amplitude(times) == pytest.approx(mean, abs=2e-3)
    for name, truth in zip(PARAMETERS, (u, tau_rec_s, tau_facil_s, 4.0), strict=True):
        one = getattr(model, name)
        assert one.lo <= truth <= one.hi, name
    assert model.p_fit > 0.99


def test_the_truth_that_movies_are_made_from_follows_the_model():
    """Sites drawn vesicle by vesicle, with the facilitation of a recipe at 1, have the model's means."""
    gaps = np.array([0.02, 0.05, 0.1, 0.03, 0.3])
    times = np.concatenate([[0.0], np.cumsum(gaps)])
    recipe = Recipe(facilitation=1.0, facilitation_s=0.15, recovery_s=0.4)
    chances = release_chances(
        n_sites=np.array([3]), p_site=np.array([0.35]), stimulus_s=0.5 + times[None, :], recipe=recipe
    )
    ours = 3 * release_shares(times, u=0.35, tau_rec_s=0.4, tau_facil_s=0.15)
    assert chances.mean_vesicles[0] == pytest.approx(ours, rel=1e-12)


def test_trains_of_two_rates_are_fitted_together():
    rng = np.random.default_rng(2)
    slow, fast = 0.2 * np.arange(6), 0.02 * np.arange(8)
    amplitude = np.full((80, 8), np.nan)
    stimulus = np.full((80, 8), np.nan)
    for rows, times in ((slice(0, 40), slow), (slice(40, 80), fast)):
        mean = 3.0 * release_shares(times, u=0.3, tau_rec_s=0.4, tau_facil_s=0.1)
        amplitude[rows, : len(times)] = noisy_copies(rng, mean, trials=40)
        stimulus[rows, : len(times)] = times
    model = fit_tsodyks_markram(amplitude, patterns=pulse_patterns(stimulus, tolerance_s=1e-3), confidence=0.95)
    found = [getattr(model, name).value for name in PARAMETERS]
    assert found == pytest.approx([0.3, 0.4, 0.1, 3.0], rel=0.02)
    assert all(np.isfinite(getattr(model, name).hi) for name in PARAMETERS)
    assert model.n_trials == 80


def test_responses_that_stay_the_same_show_neither_depression_nor_facilitation():
    amplitude = noisy_copies(np.random.default_rng(3), np.full(10, 1.0), trials=50)
    model = fit_tsodyks_markram(amplitude, patterns=[pattern(10, 0.1, 50)], confidence=0.95)
    assert model.amplitude(0.1 * np.arange(10)) == pytest.approx(np.ones(10), abs=0.02)
    assert model.tau_rec_s.lo == model.tau_facil_s.lo == 0.0
    assert model.reason


def test_pure_depletion_says_that_recovery_is_not_determined():
    mean = 5.0 * 0.5 ** np.arange(1, 9)
    amplitude = noisy_copies(np.random.default_rng(4), mean, trials=60, sd=0.3)
    model = fit_tsodyks_markram(amplitude, patterns=[pattern(8, 0.02, 60)], confidence=0.95)
    assert model.tau_rec_s.hi == np.inf
    assert "tau_rec_s" in model.reason


@pytest.mark.parametrize(("trials", "pulses"), [(5, 8), (40, 4), (0, 8)])
def test_too_little_answers_in_words(trials, pulses):
    amplitude = np.random.default_rng(5).normal(1, 0.3, (trials, pulses))
    model = fit_tsodyks_markram(amplitude, patterns=[pattern(pulses, 0.05, trials)], confidence=0.95)
    assert not model.fitted
    assert model.reason == "the model needs 12 complete trials of 5 or more pulses"
    assert np.isnan(model.amplitude([0.0, 0.1])).all()
    assert np.isnan([model.u.value, model.u.lo, model.p_fit]).all()


def test_responses_without_spread_or_above_zero_answer_in_words():
    model = fit_tsodyks_markram(np.ones((20, 6)), patterns=[pattern(6, 0.05, 20)], confidence=0.95)
    assert "does not vary" in model.reason
    below = np.random.default_rng(6).normal(-1, 0.1, (20, 6))
    assert "above zero" in fit_tsodyks_markram(below, patterns=[pattern(6, 0.05, 20)], confidence=0.95).reason


def test_noise_alone_is_fitted_without_a_finite_claim():
    noise = np.random.default_rng(7).normal(0, 1, (40, 8))
    model = fit_tsodyks_markram(noise, patterns=[pattern(8, 0.05, 40)], confidence=0.95)
    assert (model.u.lo, model.u.hi) == (0.0, 1.0) or model.u.hi - model.u.lo > 0.5
    assert model.reason


def test_input_that_cannot_be_right_is_refused():
    with pytest.raises(InputError, match="6 pulses"):
        fit_tsodyks_markram(np.ones((20, 5)), patterns=[pattern(6, 0.05, 20)], confidence=0.95)
    with pytest.raises(InputError, match="u must lie between 0 and 1"):
        release_shares([0.0, 0.1], u=1.2, tau_rec_s=0.1, tau_facil_s=0.1)
    with pytest.raises(InputError, match="pulse times increase"):
        release_shares([0.1, 0.1], u=0.2, tau_rec_s=0.1, tau_facil_s=0.1)


def coverage(draw_train, seed, repeats, *, trials, pulses, u, tau_rec_s, tau_facil_s):
    rng = np.random.default_rng(seed)
    hits = np.zeros(4, dtype=int)
    for _ in range(repeats):
        amplitude = draw_train(
            rng,
            trials=trials,
            pulses=pulses,
            gap_s=0.05,
            u=u,
            tau_rec_s=tau_rec_s,
            tau_facil_s=tau_facil_s,
            sites=6,
        )
        model = fit_tsodyks_markram(amplitude, patterns=[pattern(pulses, 0.05, trials)], confidence=0.95)
        for index, (name, truth) in enumerate(zip(PARAMETERS, (u, tau_rec_s, tau_facil_s, 6), strict=True)):
            one = getattr(model, name)
            hits[index] += one.lo <= truth <= one.hi
    return hits / repeats


def test_intervals_hold_the_truth_as_often_as_they_say(draw_train):
    # of 60 intervals of 95 %, fewer than 50 hold the truth with probability 4e-4
    hits = coverage(draw_train, 8, 60, trials=60, pulses=10, u=0.5, tau_rec_s=0.3, tau_facil_s=0.05)
    assert hits.min() >= 50 / 60


@pytest.mark.validation
@pytest.mark.parametrize(
    ("trials", "pulses", "u", "tau_rec_s", "tau_facil_s"),
    [(60, 10, 0.5, 0.3, 0.05), (40, 20, 0.4, 0.5, 0.15), (200, 10, 0.2, 0.2, 0.3), (15, 10, 0.5, 0.3, 0.05)],
)
def test_intervals_cover_at_length(draw_train, trials, pulses, u, tau_rec_s, tau_facil_s):
    settings = {"trials": trials, "pulses": pulses, "u": u, "tau_rec_s": tau_rec_s, "tau_facil_s": tau_facil_s}
    hits = coverage(draw_train, 9, 1000, **settings)
    assert hits.min() > 0.93 - 3.3 * 0.008
