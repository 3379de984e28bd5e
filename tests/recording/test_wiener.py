"""Wiener's filter keeps what stands out of the noise."""

import numpy as np
import pytest

from napari_boutonrelease.recording.wiener import without_noise


def test_a_clear_image_is_left_and_a_noisy_one_comes_closer_to_the_truth():
    rng = np.random.default_rng(3)
    y, x = np.mgrid[0:60, 0:80]
    truth = 50.0 + 30.0 * np.exp(-((y - 30) ** 2 + (x - 40) ** 2) / 18.0)
    np.testing.assert_allclose(without_noise(truth, noise_variance=1e-12), truth, atol=1e-4)
    noisy = truth + rng.normal(0.0, 2.0, truth.shape)
    assert np.std(without_noise(noisy, noise_variance=4.0) - truth) < 0.3 * 2.0


def test_noise_alone_vanishes_and_its_mean_stays():
    noise = np.random.default_rng(4).normal(20.0, 1.0, (64, 64))
    flat = without_noise(noise, noise_variance=1.0)
    assert np.std(flat) < 0.25
    assert flat.mean() == pytest.approx(noise.mean())
