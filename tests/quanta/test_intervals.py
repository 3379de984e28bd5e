import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from numpy.testing import assert_allclose

from napari_boutonrelease.errors import InputError
from napari_boutonrelease.quanta import (
    benjamini_hochberg,
    clopper_pearson_interval,
    jeffreys_interval,
    mcnemar_test,
    newcombe_difference_interval,
    ratio_interval,
    wilson_interval,
    zero_success_upper_limit,
)

INTERVALS = [wilson_interval, clopper_pearson_interval, jeffreys_interval]


@pytest.mark.parametrize("interval", INTERVALS)
def test_ends_are_exact_and_nothing_has_no_interval(interval):
    lo, hi = interval([0, 7, 0], [7, 7, 0], confidence=0.95)
    assert lo[0] == 0.0
    assert hi[1] == 1.0
    assert 0 < hi[0] < 1
    assert 0 < lo[1] < 1
    assert np.isnan([lo[2], hi[2]]).all()


@pytest.mark.parametrize("interval", INTERVALS)
@given(data=st.data())
def test_intervals_hold_the_share_and_mirror(interval, data):
    n = data.draw(st.integers(1, 400))
    k = data.draw(st.integers(0, n))
    lo, hi = interval(k, n, confidence=0.9)
    assert 0 <= lo <= k / n <= hi <= 1
    mirrored_lo, mirrored_hi = interval(n - k, n, confidence=0.9)
    assert_allclose((1 - mirrored_hi, 1 - mirrored_lo), (lo, hi), atol=1e-9)


def test_wilson_covers_as_it_says():
    rng = np.random.default_rng(3)
    for p in (0.1, 0.5, 0.9):
        lo, hi = wilson_interval(rng.binomial(80, p, 4000), 80, confidence=0.95)
        assert 0.93 < np.mean((lo <= p) & (p <= hi)) < 0.975


def test_clopper_pearson_never_covers_less():
    n = 25
    k = np.arange(n + 1)
    lo, hi = clopper_pearson_interval(k, n, confidence=0.95)
    for p in np.linspace(0.02, 0.98, 25):
        chance = np.exp(
            np.array([np.sum(np.log(np.arange(1, n + 1))) - _log_factorials(x, n) for x in k])
            + k * np.log(p)
            + (n - k) * np.log(1 - p)
        )
        assert chance[(lo <= p) & (p <= hi)].sum() >= 0.95


def _log_factorials(x, n):
    return np.sum(np.log(np.arange(1, x + 1))) + np.sum(np.log(np.arange(1, n - x + 1)))


def test_no_trial_has_no_upper_limit():
    assert np.isnan(zero_success_upper_limit(0, confidence=0.95))


def test_ratios_without_successes():
    lo, hi = ratio_interval([0, 3, 0], [40, 40, 40], [5, 0, 0], [40, 40, 40], confidence=0.95, method="score")
    assert lo[0] == 0.0
    assert np.isfinite(hi[0])
    assert np.isinf(hi[1])
    assert lo[1] > 0
    assert (lo[2], hi[2]) == (0.0, np.inf)
    log_lo, log_hi = ratio_interval(0, 40, 5, 40, confidence=0.95, method="log")
    assert np.isnan([log_lo, log_hi]).all()


def test_score_ratio_covers_as_it_says():
    rng = np.random.default_rng(4)
    for p1, p2 in ((0.2, 0.1), (0.6, 0.5), (0.9, 0.95)):
        k1, k2 = rng.binomial(60, p1, 2000), rng.binomial(60, p2, 2000)
        lo, hi = ratio_interval(k1, 60, k2, 60, confidence=0.95, method="score")
        assert 0.93 < np.mean((lo <= p1 / p2) & (p1 / p2 <= hi)) < 0.975


def test_difference_covers_as_it_says():
    rng = np.random.default_rng(5)
    lo, hi = newcombe_difference_interval(
        rng.binomial(50, 0.3, 4000), 50, rng.binomial(70, 0.15, 4000), 70, confidence=0.95
    )
    assert 0.935 < np.mean((lo <= 0.15) & (hi >= 0.15)) < 0.975


def test_mcnemar_without_discordant_trials():
    for method in ("exact", "chi2", "corrected"):
        assert mcnemar_test(0, 0, method=method) == (0.0, 1.0)
    assert mcnemar_test(5, 5, method="exact")[1] == 1.0


@pytest.mark.parametrize(
    ("call", "message"),
    [
        (lambda: wilson_interval(3, 2, confidence=0.95), r"given 3 of 2"),
        (lambda: wilson_interval([1, -1], 2, confidence=0.95), r"given -1 of 2"),
        (lambda: jeffreys_interval(1, 2, confidence=95), "confidence must lie between 0 and 1"),
        (lambda: mcnemar_test(-1, 2, method="exact"), "must be 0 or more"),
    ],
)
def test_impossible_counts_are_named(call, message):
    with pytest.raises(InputError, match=message):
        call()


@given(st.lists(st.floats(0, 1), min_size=1, max_size=30))
def test_adjusted_p_values_keep_order_and_never_shrink(p):
    adjusted = benjamini_hochberg(p)
    assert (adjusted >= np.array(p) - 1e-15).all()
    assert (np.diff(adjusted[np.argsort(p, kind="stable")]) >= 0).all()
    assert adjusted.max() <= 1


def test_adjusting_skips_missing_tests():
    adjusted = benjamini_hochberg([np.nan, 0.01, 0.5, np.nan])
    assert np.isnan(adjusted[[0, 3]]).all()
    assert_allclose(adjusted[[1, 2]], [0.02, 0.5])
    assert benjamini_hochberg([]).size == 0
