"""Differences and ratios of two estimates from their intervals."""

import numpy as np
import pytest

from napari_boutonrelease.errors import InputError
from napari_boutonrelease.quanta import (
    Estimate,
    difference_of_estimates,
    jeffreys_interval,
    newcombe_difference_interval,
    ratio_of_estimates,
    wilson_interval,
)


def proportion(k, n, interval=wilson_interval):
    lo, hi = interval(k, n, confidence=0.95)
    return Estimate(value=k / n, lo=float(lo), hi=float(hi), method="proportion")


@pytest.mark.parametrize(("k", "m"), [(7, 1), (0, 0), (20, 33), (34, 30)])
def test_of_two_proportions_it_is_newcombes_interval(k, m):
    change = difference_of_estimates(proportion(k, 34), proportion(m, 34))
    lo, hi = newcombe_difference_interval(k, 34, m, 34, confidence=0.95)
    assert (change.lo, change.hi) == pytest.approx((float(lo), float(hi)), abs=1e-12)


def test_intervals_of_normal_means_give_the_known_interval_of_their_difference():
    one, other = (Estimate(value=v, lo=v - 1.96 * s, hi=v + 1.96 * s, method="z") for v, s in ((3.0, 0.3), (1.0, 0.4)))
    change = difference_of_estimates(one, other)
    assert (change.value, change.lo, change.hi) == pytest.approx((2.0, 2.0 - 1.96 * 0.5, 2.0 + 1.96 * 0.5))


def test_a_ratio_turned_round_is_the_inverse_with_its_limits_swapped():
    one, other = (Estimate(value=v, lo=v / 1.3, hi=v * 1.6, method="x") for v in (0.4, 0.7))
    ratio, back = ratio_of_estimates(one, other), ratio_of_estimates(other, one)
    assert (1 / back.value, 1 / back.hi, 1 / back.lo) == pytest.approx((ratio.value, ratio.lo, ratio.hi))


def test_what_is_missing_stays_missing_and_no_limit_stays_none():
    known, missing = proportion(5, 20), Estimate(value=np.nan, lo=np.nan, hi=np.nan, method="none")
    for change in (difference_of_estimates(known, missing), ratio_of_estimates(missing, known)):
        assert np.isnan([change.value, change.lo, change.hi]).all()
    assert np.isnan(ratio_of_estimates(known, proportion(0, 20)).value)
    open_below = Estimate(value=0.2, lo=0.0, hi=0.4, method="x")
    ratio = ratio_of_estimates(known, open_below)
    assert np.isinf(ratio.hi)
    assert 0 < ratio.lo < ratio.value


def test_an_interval_beside_its_estimate_is_refused():
    odd = Estimate(value=0.5, lo=0.6, hi=0.7, method="x")
    with pytest.raises(InputError, match=r"interval 0.6 to 0.7 does not hold its estimate 0.5"):
        ratio_of_estimates(odd, odd)


def test_differences_of_probabilities_cover():
    rng = np.random.default_rng(4)
    p, r, n, repeats = 0.15, 0.6, 80, 4000
    first, second = rng.binomial(n, p, repeats), rng.binomial(n, r, repeats)
    covered = sum(
        change.lo <= r - p <= change.hi
        for a, b in zip(first, second, strict=True)
        for change in [
            difference_of_estimates(proportion(b, n, jeffreys_interval), proportion(a, n, jeffreys_interval))
        ]
    )
    # 3.3 standard errors beyond 93 to 97 %
    assert 0.93 - 0.0134 < covered / repeats < 0.97 + 0.0089
