"""Mean changes over boutons measured twice."""

import numpy as np
import pytest
from scipy import stats

from napari_boutonrelease.quanta import measure_paired_change

EIGHTHS = [49, -67, 8, 16, 6, 23, 28, 41, 14, 29, 56, 24, 75, 60, -48]
"""Differences in height of Darwin's 15 pairs of maize plants, eighths of an inch (Fisher 1935, section 17)."""


def change_of(values, seed=1, n_permutations=20_000):
    return measure_paired_change(
        values, confidence=0.95, n_permutations=n_permutations, rng=np.random.default_rng(seed)
    )


def test_fishers_maize_plants():
    # Fisher 1935, section 21: 863 of 32,768 patterns reach the sum of one side, so 5.267 % of both.
    change = change_of(EIGHTHS)
    assert change.n == 15
    assert change.mean.value == pytest.approx(314 / 15)
    assert change.p_none == pytest.approx(0.05267, abs=3.5 * np.sqrt(0.05 * 0.95 / 20_000))
    reference = stats.ttest_1samp(EIGHTHS, 0.0).confidence_interval(0.95)
    assert (change.mean.lo, change.mean.hi) == pytest.approx((reference.low, reference.high))


def test_few_differences_are_tried_in_all_patterns():
    values = [0.3, 0.1, 0.4, -0.05, 0.2]
    reference = stats.permutation_test((np.array(values),), np.sum, permutation_type="samples", n_resamples=np.inf)
    assert change_of(values).p_none == pytest.approx(reference.pvalue)


@pytest.mark.parametrize("values", [[], [0.2], [np.nan, 0.2]])
def test_fewer_than_two_boutons_have_no_interval(values):
    change = change_of(values)
    assert np.isnan([change.mean.lo, change.mean.hi, change.p_none]).all()
    assert "fewer than two" in change.mean.method


def test_p_is_uniform_where_nothing_changed():
    rng = np.random.default_rng(3)
    p = [change_of(rng.standard_t(3, 10)).p_none for _ in range(1500)]
    assert np.mean(np.array(p) <= 0.05) == pytest.approx(0.05, abs=3.3 * np.sqrt(0.05 * 0.95 / 1500))
