"""What several tests of quanta draw from."""

import numpy as np
import pytest


def _draw_train(rng, *, trials, pulses, gap_s, u, tau_rec_s, tau_facil_s, sites, noise_sd=0.3):
    """Amplitudes of sites that release vesicle by vesicle, each of size 1 (CV 0.3), in noise."""
    now, full, amplitude = u, np.ones((trials, sites), dtype=bool), np.empty((trials, pulses))
    for j in range(pulses):
        released = full & (rng.random(full.shape) < now)
        full &= ~released
        k = released.sum(axis=1)
        amplitude[:, j] = np.where(k > 0, rng.gamma(np.maximum(k, 1) / 0.09, 0.09), 0.0)
        full |= rng.random(full.shape) < -np.expm1(-gap_s / tau_rec_s)
        now = u + now * (1 - u) * np.exp(-gap_s / tau_facil_s)
    return amplitude + rng.normal(0, noise_sd, amplitude.shape)


@pytest.fixture
def draw_train():
    return _draw_train
