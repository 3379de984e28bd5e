import numpy as np
import pytest

from napari_boutonrelease.errors import InputError
from napari_boutonrelease.responses import call_releases, measure_rundown, release_trend


def test_calls_are_amplitudes_above_the_threshold():
    amplitude = np.array([[[0.1, 0.3], [0.25, np.nan], [0.6, -0.4]]])
    calls = call_releases(amplitude, amplitude_se=np.full((1, 3, 2), 0.1), noise_sd=np.array([0.1]), threshold_sd=2.5)
    assert calls.threshold == pytest.approx([0.25])
    np.testing.assert_array_equal(calls.called, [[[0, 1], [0, np.nan], [1, 0]]])
    assert calls.n_trials.tolist() == [[3, 2]]
    assert calls.n_called.tolist() == [[1, 1]]
    assert calls.false_calls_expected == pytest.approx(np.array([[3, 2]]) * 0.00620967, rel=1e-5)


def test_false_calls_are_as_many_as_expected():
    rng = np.random.default_rng(1)
    se = np.linspace(0.06, 0.14, 2000)[None, :, None] * np.ones((20, 1, 1))
    calls = call_releases(
        se * rng.normal(size=(20, 2000, 1)), amplitude_se=se, noise_sd=np.full(20, 0.1), threshold_sd=2.0
    )
    expected = calls.false_calls_expected.sum()
    assert abs(calls.n_called.sum() - expected) < 4 * np.sqrt(expected)
    assert expected > 1.1 * 0.0227501 * 20 * 2000  # noisy trials make more false calls than quiet ones save


def test_thresholds_may_differ_between_boutons():
    amplitude = np.full((3, 4, 1), 0.3)
    calls = call_releases(
        amplitude,
        amplitude_se=np.full((3, 4, 1), 0.1),
        noise_sd=np.array([0.1, 0.1, np.nan]),
        threshold_sd=np.array([2.0, 4.0, 2.0]),
    )
    assert calls.n_called[:, 0].tolist() == [4, 0, 0]
    assert calls.n_trials[:, 0].tolist() == [4, 4, 0]


def test_a_threshold_must_be_positive():
    with pytest.raises(InputError, match="threshold_sd must be greater than 0"):
        call_releases(np.zeros((1, 1, 1)), amplitude_se=np.ones((1, 1, 1)), noise_sd=np.ones(1), threshold_sd=0.0)


def test_trend_of_calls_that_never_or_always_happen_is_none():
    assert release_trend(np.zeros(30)) == (0.0, 1.0)
    assert release_trend(np.ones(30)) == (0.0, 1.0)
    assert release_trend([np.nan, np.nan]) == (0.0, 1.0)


def test_a_clean_break_has_infinite_odds():
    log_odds, p_value = release_trend(np.repeat([1.0, 0.0], 15))
    assert log_odds == -np.inf
    assert p_value < 1e-8


def test_rundown_finds_a_falling_bouton_and_spares_steady_ones():
    rng = np.random.default_rng(2)
    p = np.full((200, 60), 0.5)
    p[0] = np.linspace(0.95, 0.1, 60)
    called = (rng.random((200, 60)) < p).astype(float)[:, :, None]
    amplitude = called * 0.4 + 0.1 * rng.normal(size=(200, 60, 1))
    called[1:, 5], amplitude[1:, 5] = np.nan, np.nan
    found = measure_rundown(amplitude, called=called)
    assert found.release_p[0] < 0.01
    assert found.release_log_odds[0] < 0
    assert found.amplitude_p[0] < 0.01
    assert found.amplitude_change[0] < -0.2
    assert np.mean(found.release_p[1:] < 0.05) < 0.13
    assert np.mean(found.amplitude_p[1:] < 0.05) < 0.13
