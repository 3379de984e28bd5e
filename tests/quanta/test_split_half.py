"""Paired-pulse ratio against p_release: no correlation where there is none, and the true one where there is."""

import numpy as np
import pytest

from napari_boutonrelease.errors import InputError
from napari_boutonrelease.quanta import correlate_release_with_ratio

Q, SNR = 0.1, 4.4


def record(rng, p, ratio, trials=60):
    chance = np.stack([p, np.clip(p * ratio, 0, 1)], axis=-1)[:, None, :]
    released = rng.random((len(p), trials, 2)) < chance
    size = Q * rng.gamma(1 / 0.09, 0.09, released.shape)
    return released[:, :, 0].astype(float), released * size + rng.normal(0, Q / SNR, released.shape)


def correlate(rng, p, ratio, trials=60, n=49):
    released, amplitude = record(rng, p, ratio, trials)
    return correlate_release_with_ratio(
        released,
        amplitude,
        noise_sd=np.full(len(p), Q / SNR),
        confidence=0.95,
        n_permutations=n,
        rng=rng,
    )


def study(seed, *, dependent, boutons=16, repeats=100):
    rng = np.random.default_rng(seed)
    found = []
    for _ in range(repeats):
        p = rng.uniform(0.15, 0.6, boutons)
        ratio = 1.7 - 1.3 * (p - 0.15) / 0.45 if dependent else np.clip(rng.normal(1, 0.25, boutons), 0.5, 1.6)
        found.append(correlate(rng, p, ratio))
    return found


def test_independent_numbers_are_not_correlated_though_they_share_noise():
    found = study(1, dependent=False)
    corrected = np.mean([one.corrected.value for one in found])
    plain = np.mean([one.plain.value for one in found])
    assert abs(corrected) < 0.09  # SE 0.022
    assert plain < corrected - 0.07
    assert np.mean([one.corrected_p <= 0.05 for one in found]) < 0.16


def test_a_true_dependence_shows():
    found = study(2, dependent=True, repeats=40)
    assert np.mean([one.corrected.value for one in found]) < -0.45
    assert np.mean([one.corrected.hi < 0 for one in found]) > 0.25


@pytest.mark.validation
def test_the_corrected_correlation_is_centred_on_zero_and_its_interval_covers():
    found = study(3, dependent=False, repeats=1500)
    assert abs(np.mean([one.corrected.value for one in found])) < 0.03
    assert 0.92 < np.mean([one.corrected.lo <= 0 <= one.corrected.hi for one in found]) < 0.985
    assert 0.03 < np.mean([one.corrected_p <= 0.05 for one in found]) < 0.07


def test_few_boutons_get_words():
    rng = np.random.default_rng(4)
    found = correlate(rng, np.full(4, 0.5), np.ones(4))
    assert found.n_boutons == 4
    assert found.corrected.method == "none: needs 5 boutons with a ratio (given 4)"
    assert np.isnan(found.plain.value)


def test_silent_and_missing_boutons_are_left_out():
    rng = np.random.default_rng(5)
    released, amplitude = record(rng, np.array([0.3, 0.4, 0.5, 0.6, 0.7, 0.0]), np.ones(6))
    released = np.concatenate([released, np.full((1, 60), np.nan)])
    amplitude = np.concatenate([amplitude, np.full((1, 60, 2), np.nan)])
    found = correlate_release_with_ratio(
        released, amplitude, noise_sd=np.full(7, 0.02), confidence=0.95, n_permutations=19, rng=rng
    )
    assert found.n_boutons in (5, 6)  # the silent one may rise above noise, seldom
    assert -1 <= found.corrected.lo <= found.corrected.value <= found.corrected.hi <= 1


def test_shapes_must_match():
    with pytest.raises(InputError, match="with two pulses"):
        correlate_release_with_ratio(
            np.zeros((3, 10)),
            np.zeros((3, 10, 3)),
            noise_sd=np.ones(3),
            confidence=0.95,
            n_permutations=9,
            rng=np.random.default_rng(1),
        )
