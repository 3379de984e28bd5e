"""Trains against numbers that were worked out by other means."""

import numpy as np
import pytest
from scipy.integrate import solve_ivp

from napari_boutonrelease.quanta import measure_train, release_shares

SETTINGS = {"noise_sd": 0.5, "confidence": 0.95, "n_bootstrap": 200}


def depletion(pulses, *, pool=100.0, p=0.4, refill=5.0):
    """A pool of 100 of which each pulse releases 40 % and each interval adds 5: 40, 26, 17.6, ... toward 5."""
    amplitudes, left = [], pool
    for _ in range(pulses):
        amplitudes.append(p * left)
        left = left * (1 - p) + refill
    return np.array(amplitudes)


def test_the_depletion_model_by_hand():
    assert depletion(5) == pytest.approx([40, 26, 17.6, 12.56, 9.536])


@pytest.mark.parametrize(("origin", "intercept"), [("index 0", 87.49501), ("first pulse", 92.495187)])
def test_back_extrapolation_of_the_depletion_model(origin, intercept):
    """Responses 21 to 30; pool - refill / p = 87.5 at index 0, 92.5 where the first pulse is time 0."""
    rng = np.random.default_rng(1)
    noise = rng.normal(0, 0.5, (20, 30))
    amplitude = depletion(30) + noise - noise.mean(axis=0)
    train = measure_train(amplitude, n_late=10, origin=origin, rng=rng, **SETTINGS)
    assert train.replenished.value == pytest.approx(5.000177, abs=1e-6)
    assert train.pool.value == pytest.approx(intercept, abs=1e-4)
    assert train.steady_ratio.value == pytest.approx(5 / 40, abs=1e-3)


@pytest.mark.parametrize(("u", "tau_rec_s", "tau_facil_s"), [(0.5, 0.8, 0.001), (0.04, 0.1, 1.0), (0.2, 0.3, 0.25)])
def test_the_recursion_is_the_differential_equation_between_pulses(u, tau_rec_s, tau_facil_s):
    """dx/dt = (1 - x) / tau_rec, du/dt = -u / tau_facil; at a pulse u rises by U (1 - u) and then u x is released."""
    times = np.cumsum([0.0, 0.02, 0.05, 0.05, 0.3, 0.01, 0.01, 0.7])
    x, before, released = 1.0, 0.0, []
    for index, now in enumerate(times):
        if index:
            between = solve_ivp(
                lambda _, state: [(1 - state[0]) / tau_rec_s, -state[1] / tau_facil_s],
                (times[index - 1], now),
                [x, before],
                rtol=1e-10,
                atol=1e-13,
                method="LSODA",
            )
            x, before = between.y[:, -1]
        before += u * (1 - before)
        released.append(before * x)
        x -= before * x
    ours = release_shares(times, u=u, tau_rec_s=tau_rec_s, tau_facil_s=tau_facil_s)
    assert ours == pytest.approx(released, rel=1e-7)


def test_a_depressing_synapse_settles_where_release_equals_recovery():
    """Without facilitation x settles at (1 - e) / (1 - (1 - U) e), e = exp(-gap / tau_rec) (Tsodyks & Markram 1997)."""
    e = np.exp(-0.05 / 0.8)
    shares = release_shares(0.05 * np.arange(300), u=0.5, tau_rec_s=0.8, tau_facil_s=0.0)
    assert shares[-1] == pytest.approx(0.5 * (1 - e) / (1 - 0.5 * e), rel=1e-9)
