"""Spread between boutons: the truth is recovered, equal boutons pass for equal, and odd data get words."""

import numpy as np
import pytest

from napari_boutonrelease.errors import InputError
from napari_boutonrelease.quanta import effective_counts, fit_beta_binomial, measure_heterogeneity


def measure(released, trials, seed=1, n=400):
    return measure_heterogeneity(released, trials, confidence=0.95, n_simulations=n, rng=np.random.default_rng(seed))


def draw(rng, boutons, mean, sd):
    if sd == 0:
        return np.full(boutons, mean)
    total = mean * (1 - mean) / sd**2 - 1
    return rng.beta(mean * total, (1 - mean) * total, boutons)


def study(rng, *, boutons, trials, mean, sd, repeats, n=199):
    rejected = covered = shrunken = 0
    values = []
    for _ in range(repeats):
        p = draw(rng, boutons, mean, sd)
        found = measure(rng.binomial(trials, p), np.full(boutons, trials), seed=int(rng.integers(1 << 30)), n=n)
        rejected += found.p_equal <= 0.05
        covered += found.sd.lo <= sd <= found.sd.hi
        shrunken += np.mean((found.shrunken_lo <= p) & (p <= found.shrunken_hi))
        values.append(found.sd.value)
    return rejected / repeats, covered / repeats, shrunken / repeats, float(np.mean(values))


def test_a_clear_spread_is_recovered():
    rng = np.random.default_rng(2)
    rejected, covered, shrunken, value = study(rng, boutons=10, trials=60, mean=0.4, sd=0.2, repeats=60)
    assert rejected == 1.0
    assert covered > 0.85  # 60 draws of 0.95: chance failure below 1/1000
    assert 0.91 < shrunken < 0.985  # 600 intervals
    assert abs(value - 0.2) < 0.025


def test_equal_boutons_pass_for_equal():
    rejected, covered, shrunken, value = study(
        np.random.default_rng(3), boutons=8, trials=50, mean=0.3, sd=0.0, repeats=60
    )
    assert rejected < 0.17  # 60 draws of 0.05
    assert covered > 0.9
    assert shrunken > 0.92
    assert value < 0.04


@pytest.mark.validation
@pytest.mark.parametrize("boutons", [4, 10])
@pytest.mark.parametrize(("mean", "sd"), [(0.3, 0.0), (0.3, 0.1), (0.5, 0.23), (0.3, 0.25)])
def test_the_test_and_the_intervals_keep_their_word(boutons, mean, sd):
    repeats = 1000
    rejected, covered, shrunken, _ = study(
        np.random.default_rng(4), boutons=boutons, trials=50, mean=mean, sd=sd, repeats=repeats
    )
    if sd == 0:
        assert 0.03 < rejected < 0.07
        assert covered > 0.95
    else:
        assert 0.925 < covered < 0.975
        assert 0.925 < shrunken < 0.975


def test_shrunken_estimates_lie_nearer_the_truth_than_plain_ones():
    rng = np.random.default_rng(5)
    plain = better = 0.0
    for _ in range(30):
        p = draw(rng, 12, 0.4, 0.1)
        k = rng.binomial(25, p)
        plain += np.mean((k / 25 - p) ** 2)
        better += np.mean((measure(k, np.full(12, 25), n=49).shrunken - p) ** 2)
    assert better < 0.8 * plain


def test_counts_seen_through_noise_are_worth_fewer_trials():
    p = np.sin((np.arange(1000) + 0.5) * np.pi / 2000) ** 2
    sharp, blunt = p**10 * (1 - p) ** 30, (p**10 * (1 - p) ** 30) ** 0.5
    released, trials = effective_counts([sharp, blunt, np.full(1000, np.nan), np.zeros(1000)], p)
    assert trials[:2] == pytest.approx([40, 20], abs=0.05)
    assert released[:2] == pytest.approx([10, 5], abs=0.05)
    assert np.isnan(trials[2:]).all()
    found = measure(released, trials)
    assert found.n_boutons == 2
    assert np.isnan(found.shrunken[2:]).all()


@pytest.mark.parametrize("released", [[0, 0, 0], [20, 20, 20]])
def test_nothing_but_one_outcome_has_no_interval(released):
    found = measure(released, [20, 20, 20])
    assert found.sd.value == 0
    assert np.isnan(found.sd.hi)
    assert "same outcome" in found.sd.method
    assert found.p_equal == 1
    assert np.isfinite(found.shrunken).all()


@pytest.mark.parametrize("released", [[], [3], [3, np.nan]])
def test_fewer_than_two_boutons_get_words(released):
    found = measure(released, np.full(len(released), 20))
    assert "fewer than two boutons" in found.sd.method
    assert np.isnan(found.sd.value)
    assert np.isnan(found.p_equal)


def test_counts_that_vary_less_than_chance_have_no_spread():
    fit = fit_beta_binomial([10, 10, 10, 10], [20, 20, 20, 20])
    assert fit.sd == 0
    assert fit.log_likelihood == fit.binomial_log_likelihood
    found = measure([10, 10, 10, 10], [20, 20, 20, 20])
    assert found.sd.value == found.sd.lo == 0 < found.sd.hi


def test_impossible_counts_are_refused():
    with pytest.raises(InputError, match="between 0 and the trials \\(given 21 of 20\\)"):
        fit_beta_binomial([3, 21], [20, 20])
    with pytest.raises(InputError, match="at least two"):
        fit_beta_binomial([3], [20])
    with pytest.raises(InputError, match="same boutons"):
        measure([3, 4], [20])
