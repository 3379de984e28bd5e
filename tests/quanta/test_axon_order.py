"""Along the axon: likeness of neighbours, and change with distance."""

import numpy as np
import pytest

from napari_boutonrelease.errors import InputError
from napari_boutonrelease.quanta import measure_gradient, measure_morans_i


def moran(values, position=None, **options):
    position = np.arange(len(values)) if position is None else position
    return measure_morans_i(
        values,
        position=position,
        rng=np.random.default_rng(1),
        **{"weighting": "binary", "n_permutations": 199} | options,
    )


def test_patches_are_found_whatever_the_order_of_the_table():
    rng = np.random.default_rng(1)
    values = np.repeat([0.2, 0.7, 0.3, 0.9], 5) + rng.normal(0, 0.05, 20)
    order = rng.permutation(20)
    found = moran(values[order], np.arange(20)[order])
    assert found.value > 0.5
    assert found.p == pytest.approx(1 / 200)
    assert found.value == pytest.approx(moran(values).value)


def test_neighbours_that_alternate_are_unlike():
    found = moran(np.tile([0.2, 0.8], 8))
    assert found.value < -0.8
    assert found.p < 0.02


def test_independent_values_are_seldom_called_alike():
    rng = np.random.default_rng(2)
    p = [moran(rng.random(9)).p for _ in range(300)]
    assert 0.01 < np.mean(np.array(p) <= 0.05) < 0.1


@pytest.mark.parametrize(
    ("values", "reason"),
    [([], "at least 4"), ([0.1, 0.2, 0.3], "given 3"), ([0.1, 0.2, np.nan, 0.3], "given 3"), ([0.5] * 6, "same value")],
)
def test_without_order_or_variation_there_are_words(values, reason):
    found = moran(values)
    assert np.isnan(found.value)
    assert reason in found.reason


def test_unknown_weighting_is_refused():
    with pytest.raises(InputError, match="'binary' or 'row' \\(given 'nearest'\\)"):
        moran(np.arange(5.0), weighting="nearest")
    with pytest.raises(InputError, match="same boutons"):
        moran(np.arange(5.0), np.arange(4.0))


def gradient(values, position, seed=1):
    return measure_gradient(
        values, position=position, confidence=0.95, n_permutations=99, rng=np.random.default_rng(seed)
    )


def test_the_slope_is_recovered_and_its_interval_covers():
    rng = np.random.default_rng(3)
    position = np.linspace(0, 40, 8)
    found = [gradient(0.2 + 0.01 * position + rng.normal(0, 0.1, 8), position) for _ in range(300)]
    covered = np.mean([one.slope.lo <= 0.01 <= one.slope.hi for one in found])
    assert 0.91 < covered < 0.985
    assert np.mean([one.slope.value for one in found]) == pytest.approx(0.01, abs=0.001)
    assert np.mean([one.at_start for one in found]) == pytest.approx(0.2, abs=0.02)


def test_a_trend_has_a_small_p_and_none_a_uniform_one():
    assert gradient(np.arange(10.0), np.arange(10.0)).p == pytest.approx(0.01)
    rng = np.random.default_rng(4)
    p = np.array([gradient(rng.random(8), np.arange(8.0), seed).p for seed in range(200)])
    assert 0.005 < np.mean(p <= 0.05) < 0.12


@pytest.mark.parametrize(
    ("values", "position"), [([0.1, 0.2], [0, 1]), ([0.1] * 5, [np.nan] * 5), ([0.1] * 5, [3] * 5)]
)
def test_without_a_path_there_are_words(values, position):
    found = gradient(values, position)
    assert np.isnan(found.slope.value)
    assert found.slope.method.startswith("none:")


def test_boutons_that_are_all_alike_have_slope_zero():
    found = gradient([0.3] * 5, [0, 1, 2, 3, 4])
    assert found.slope.value == 0
    assert np.isnan(found.rank_correlation)
