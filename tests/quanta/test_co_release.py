"""Release of boutons together: found where it is, not made by rundown, and silent where nothing can be said."""

import numpy as np
import pytest

from napari_boutonrelease.errors import InputError
from napari_boutonrelease.quanta import measure_co_release


def measure(released, seed=1, n=199):
    return measure_co_release(released, block_trials=15, n_permutations=n, rng=np.random.default_rng(seed))


def release(rng, p, *, trials=60, pulses=1, common=0.0, rundown=0.0):
    p = np.asarray(p)[:, None, None] * (1 - rundown * np.linspace(0, 1, trials))[None, :, None]
    p = np.clip(p * (1 + common * rng.normal(size=(1, trials, 1))), 0, 1)
    return (rng.random((len(p), trials, pulses)) < p).astype(float)


def test_one_pair_among_many_stands_out():
    rng = np.random.default_rng(1)
    released = release(rng, np.linspace(0.3, 0.7, 8), trials=120)
    released[5] = np.where(rng.random((120, 1)) < 0.9, released[2], released[5])
    found = measure(released)
    assert found.p_adjusted[2, 5] < 0.05
    others = np.triu(np.ones((8, 8), dtype=bool), 1)
    others[2, 5] = False
    assert np.sum(found.p_adjusted[others] < 0.05) <= 1
    assert found.correlation[2, 5] == found.correlation[5, 2] > 0.7
    assert found.together[2, 5] > found.together_expected[2, 5] + 10
    assert np.isnan(np.diag(found.correlation)).all()


def test_what_all_share_shows_in_the_mean():
    found = measure(release(np.random.default_rng(2), np.full(10, 0.4), trials=100, common=0.5))
    assert found.mean_p < 0.01
    assert found.mean > found.mean_hi


@pytest.mark.parametrize("rundown", [0.0, 0.7])
def test_independent_boutons_pass_as_independent(rundown):
    rng = np.random.default_rng(3)
    found = [measure(release(rng, rng.uniform(0.1, 0.9, 6), rundown=rundown), seed, n=99) for seed in range(100)]
    assert np.mean([one.mean_p <= 0.05 for one in found]) < 0.14  # 100 draws of 0.05
    assert np.mean([np.nanmin(one.p_adjusted) <= 0.05 for one in found]) < 0.14
    assert abs(np.mean([one.mean for one in found])) < 0.03


def test_boutons_that_always_do_the_same_have_no_correlation():
    released = release(np.random.default_rng(4), [0.5, 0.5, 0.0, 1.0])
    found = measure(released)
    assert found.n_boutons == 2
    assert np.isfinite(found.correlation[0, 1])
    assert np.isnan(found.correlation[2:]).all()


def test_missing_trials_and_pulses_are_left_out():
    rng = np.random.default_rng(5)
    released = release(rng, [0.5, 0.5, 0.5], pulses=2)
    whole = measure(released)
    released = np.insert(released, [10, 30], np.nan, axis=1)
    assert measure(released).mean == pytest.approx(whole.mean)
    released[0, 3:8] = np.nan
    assert np.isfinite(measure(released).mean)


@pytest.mark.parametrize(
    ("shape", "reason"), [((5, 6, 1), "at least 10 trials"), ((1, 40, 1), "two boutons"), ((0, 40, 1), "two boutons")]
)
def test_too_little_gets_words(shape, reason):
    found = measure((np.random.default_rng(6).random(shape) < 0.5).astype(float))
    assert reason in found.reason
    assert np.isnan(found.mean)
    assert found.correlation.shape == (shape[0], shape[0])


def test_tiny_blocks_are_refused():
    with pytest.raises(InputError, match="at least 4 \\(given 2\\)"):
        measure_co_release(np.zeros((2, 20, 1)), block_trials=2, n_permutations=9, rng=np.random.default_rng(1))
