"""Trains: the line through the late cumulative amplitudes, vesicles of the pool, and words where there is no pool."""

import numpy as np
import pytest

from napari_boutonrelease.errors import InputError
from napari_boutonrelease.quanta import Estimate, measure_train, pool_in_vesicles, release_shares

SETTINGS = {"n_late": 4, "origin": "first pulse", "noise_sd": 0.3, "confidence": 0.95, "n_bootstrap": 500}


def line_of(mean, n_late):
    slope, intercept = np.polyfit(np.arange(len(mean))[-n_late:], np.cumsum(mean)[-n_late:], 1)
    return intercept, slope


def test_a_trial_by_trial_intercept_is_that_of_the_mean(draw_train):
    rng = np.random.default_rng(1)
    amplitude = draw_train(rng, trials=30, pulses=10, gap_s=0.05, u=0.5, tau_rec_s=0.5, tau_facil_s=0.02, sites=6)
    train = measure_train(amplitude, rng=rng, **SETTINGS)
    assert (train.pool.value, train.replenished.value) == pytest.approx(line_of(amplitude.mean(axis=0), 4))
    earlier = measure_train(amplitude, rng=rng, **SETTINGS | {"origin": "index 0"})
    assert earlier.pool.value == pytest.approx(train.pool.value - train.replenished.value)
    assert train.mean == pytest.approx(amplitude.mean(axis=0))
    assert train.cumulative[-1] == pytest.approx(amplitude.sum(axis=1).mean())
    assert train.cumulative_se[-1] == pytest.approx(amplitude.sum(axis=1).std(ddof=1) / np.sqrt(30))
    assert train.reason == ""


def test_trials_with_a_missing_pulse_are_left_out(draw_train):
    rng = np.random.default_rng(2)
    amplitude = draw_train(rng, trials=30, pulses=8, gap_s=0.05, u=0.5, tau_rec_s=0.5, tau_facil_s=0.02, sites=6)
    amplitude[::3, 2] = np.nan
    train = measure_train(amplitude, rng=rng, **SETTINGS)
    assert train.n_trials == 20
    assert train.mean == pytest.approx(amplitude[np.isfinite(amplitude[:, 2])].mean(axis=0))


def coverage(draw_train, seed, repeats, *, trials, pulses=10, u=0.5, tau_rec_s=0.5, sites=6):
    """How often the intervals hold pool, replenishment, steady ratio, mean of pulse 3, and vesicles."""
    rng = np.random.default_rng(seed)
    mean = sites * release_shares(0.05 * np.arange(pulses), u=u, tau_rec_s=tau_rec_s, tau_facil_s=0.02)
    pool, slope = line_of(mean, 4)
    truth = (pool, slope, mean[-4:].mean() / mean[0], mean[2], pool)
    hits = np.zeros(5, dtype=int)
    for _ in range(repeats):
        amplitude = draw_train(
            rng, trials=trials, pulses=pulses, gap_s=0.05, u=u, tau_rec_s=tau_rec_s, tau_facil_s=0.02, sites=sites
        )
        train = measure_train(amplitude, rng=rng, **SETTINGS)
        q = np.exp(0.08 * rng.normal())
        vesicles = pool_in_vesicles(
            train.pool,
            q=q,
            q_lo=q * np.exp(-1.96 * 0.08),
            q_hi=q * np.exp(1.96 * 0.08),
            n_trials=train.n_trials,
            confidence=0.95,
        )
        third = Estimate(value=train.mean[2], lo=train.mean_lo[2], hi=train.mean_hi[2], method="")
        estimates = (train.pool, train.replenished, train.steady_ratio, third, vesicles)
        hits += [one.lo <= true <= one.hi for one, true in zip(estimates, truth, strict=True)]
    return hits / repeats


def test_intervals_hold_the_truth_as_often_as_they_say(draw_train):
    # of 200 intervals of 95 %, fewer than 178 hold the truth with probability 3e-4, all of them with 4e-5
    hits = coverage(draw_train, 3, 200, trials=40)
    assert hits.min() > 0.885
    assert hits.max() < 1.0


@pytest.mark.validation
@pytest.mark.parametrize(
    "settings",
    [{"trials": 60}, {"trials": 30, "pulses": 20, "u": 0.4, "tau_rec_s": 1.0}, {"trials": 40, "sites": 2}],
)
def test_intervals_cover_at_length(draw_train, settings):
    hits = coverage(draw_train, 4, 3000, **settings)
    assert hits.min() > 0.93 - 3.3 * 0.0047
    assert hits.max() < 0.97 + 3.3 * 0.0031


def test_responses_that_do_not_decline_have_no_pool():
    rng = np.random.default_rng(5)
    train = measure_train(rng.normal(1.0, 0.3, (40, 8)) + 0.2 * np.arange(8), rng=rng, **SETTINGS)
    assert np.isnan(train.pool.value)
    assert train.reason == "no pool: responses do not decline over the train"


def test_a_silent_bouton_has_no_pool():
    rng = np.random.default_rng(6)
    train = measure_train(rng.normal(0.0, 0.3, (40, 8)), rng=rng, **SETTINGS)
    assert np.isnan(train.pool.value)
    assert "within noise" in train.reason


def test_doubts_are_said_in_words():
    rng = np.random.default_rng(7)
    falling = rng.normal(0, 0.1, (60, 6)) + 3.0 * 0.8 ** np.arange(6)
    assert "no steady state: late responses still fall" in measure_train(falling, rng=rng, **SETTINGS).reason
    refilled = rng.normal(0, 0.3, (60, 12)) + 1.0 + np.exp(-np.arange(12.0))
    assert "hides part of the pool" in measure_train(refilled, rng=rng, **SETTINGS).reason
    rising = rng.normal(0, 0.1, (60, 8)) + np.array([1.0, 1.6, 1.2, 0.5, 0.4, 0.4, 0.4, 0.4])
    assert "facilitation mixes" in measure_train(rising, rng=rng, **SETTINGS).reason


@pytest.mark.parametrize("trials", [0, 2])
def test_too_few_trials_answer_in_words(trials):
    train = measure_train(np.ones((trials, 8)), rng=np.random.default_rng(8), **SETTINGS)
    assert f"{trials} complete trials" in train.reason
    assert np.isnan(train.pool.lo)
    assert np.isnan(train.mean).all()


def test_responses_without_any_spread_are_no_crash():
    rng = np.random.default_rng(8)
    train = measure_train(np.tile([4.0, 2.0, 1.0, 1.0, 1.0, 1.0], (10, 1)), rng=rng, **SETTINGS)
    assert train.pool.value == train.pool.lo == train.pool.hi == pytest.approx(5.0)


def test_vesicles_of_an_unknown_pool_or_size_are_unknown():
    pool = Estimate(value=2.0, se=0.1, lo=1.8, hi=2.2, method="line")
    nothing = Estimate(value=np.nan, lo=np.nan, hi=np.nan, method="none")
    assert "no pool" in pool_in_vesicles(nothing, q=1, q_lo=0.9, q_hi=1.1, n_trials=9, confidence=0.95).method
    assert "no vesicle" in pool_in_vesicles(pool, q=np.nan, q_lo=1, q_hi=1, n_trials=9, confidence=0.95).method
    exact = pool_in_vesicles(pool, q=0.5, q_lo=0.5, q_hi=0.5, n_trials=10_000, confidence=0.95)
    assert (exact.lo, exact.value, exact.hi) == pytest.approx((4 - 0.392, 4.0, 4 + 0.392), abs=1e-3)


@pytest.mark.parametrize("n_late", [1, 8])
def test_a_line_needs_two_late_responses_and_an_early_one(n_late):
    with pytest.raises(InputError, match=f"given {n_late}"):
        measure_train(np.ones((9, 8)), rng=np.random.default_rng(9), **SETTINGS | {"n_late": n_late})
