"""p_release of boutons with the axon's vesicle known: counts through little noise, fewer trials through more."""

import numpy as np
import pytest

from napari_boutonrelease.errors import InputError
from napari_boutonrelease.quanta import effective_counts, measure_heterogeneity, release_curves

P = np.sin((np.arange(150) + 0.5) * np.pi / 300) ** 2


def curves(amplitude, noise_sd, **options):
    amplitude = np.asarray(amplitude, dtype=float)
    n = len(amplitude)
    settings = {"q": 0.1, "q_log_sd": 0.1, "q_cv": 0.3, "n_sites": np.ones(n), "p_site": np.full(n, 0.4)}
    return release_curves(amplitude, np.full(amplitude.shape, noise_sd), p_release=P, **settings | options)


def draw(rng, p, *, trials, noise_sd):
    p = np.asarray(p)
    released = rng.random((p.size, trials)) < p[:, None]
    q = 0.1 * np.exp(rng.normal(0, 0.1, p.size))[:, None]
    return released, released * q * rng.gamma(1 / 0.09, 0.09, released.shape) + rng.normal(0, noise_sd, released.shape)


def test_without_noise_they_are_the_counts():
    released, amplitude = draw(np.random.default_rng(1), [0.2, 0.5, 0.8], trials=50, noise_sd=0.002)
    k, n = effective_counts(curves(amplitude, 0.002), P)
    assert n == pytest.approx([50] * 3, rel=0.05)
    assert k == pytest.approx(released.sum(axis=1), abs=1.0)


def test_noise_leaves_fewer_trials_but_the_same_share():
    released, amplitude = draw(np.random.default_rng(2), np.full(40, 0.4), trials=50, noise_sd=0.045)
    k, n = effective_counts(curves(amplitude, 0.045), P)
    assert 10 < n.mean() < 35
    assert np.mean(k / n) == pytest.approx(released.mean(), abs=0.05)


@pytest.mark.parametrize("snr", [2.5, 4.4])
def test_equal_boutons_seen_through_noise_pass_for_equal(snr):
    rng = np.random.default_rng(3)
    rejected = 0
    for _ in range(60):
        _, amplitude = draw(rng, np.full(6, 0.3), trials=40, noise_sd=0.1 / snr)
        k, n = effective_counts(curves(amplitude, 0.1 / snr), P)
        rejected += measure_heterogeneity(k, n, confidence=0.95, n_simulations=99, rng=rng).p_equal <= 0.05
    assert rejected < 11  # 60 draws of 0.05


def test_missing_trials_and_boutons():
    _, amplitude = draw(np.random.default_rng(4), [0.5, 0.5], trials=30, noise_sd=0.02)
    half = amplitude.copy()
    half[0, 15:] = np.nan
    half[1] = np.nan
    found = curves(half, 0.02)
    assert np.isnan(found[1]).all()
    np.testing.assert_allclose(found[0], curves(amplitude[:1, :15], 0.02)[0])
    assert curves(np.empty((0, 5)), 0.02).shape == (0, P.size)


def test_what_all_share_widens_shrunken_intervals_alone():
    options = {"confidence": 0.95, "n_simulations": 99}
    plain = measure_heterogeneity([5, 10, 20], [30] * 3, rng=np.random.default_rng(1), **options)
    wide = measure_heterogeneity(
        [5, 10, 20], [30] * 3, rng=np.random.default_rng(1), shared_variance=[0.01, 0.0, 0.01], **options
    )
    assert wide.sd == plain.sd
    np.testing.assert_array_equal(wide.shrunken, plain.shrunken)
    width, plain_width = wide.shrunken_hi - wide.shrunken_lo, plain.shrunken_hi - plain.shrunken_lo
    assert (width[[0, 2]] > 1.3 * plain_width[[0, 2]]).all()
    assert width[1] == plain_width[1]


def test_a_vesicle_without_size_is_refused():
    with pytest.raises(InputError, match="q must be greater than 0"):
        curves(np.zeros((1, 5)), 0.02, q=0.0)
