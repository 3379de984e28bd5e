import numpy as np
import pytest
from numpy.testing import assert_allclose
from scipy.stats import norm

from napari_boutonrelease.errors import InputError
from napari_boutonrelease.quanta import balanced_threshold, binomial_log_weights, false_call_rate, rogan_gladen

KNOWN = {"n_sensitivity": np.inf, "n_specificity": np.inf, "confidence": 0.95}


def test_few_baseline_samples_leak_more():
    rates = [float(false_call_rate(3.0, n_baseline=n)) for n in (5, 10, 50, None)]
    assert rates == sorted(rates, reverse=True)
    with pytest.raises(InputError, match="at least 2 samples"):
        false_call_rate(3.0, n_baseline=1)


def test_false_calls_happen_as_often_as_said():
    rng = np.random.default_rng(1)
    baseline, sample = rng.normal(size=(60_000, 10)), rng.normal(size=60_000)
    called = sample - baseline.mean(axis=1) > 2.0 * baseline.std(axis=1, ddof=1)
    assert_allclose(called.mean(), false_call_rate(2.0, n_baseline=10), atol=0.003)


def test_correction_recovers_release_from_calls():
    rng = np.random.default_rng(2)
    released = rng.random((3000, 200)) < 0.3
    called = released * 3.0 + rng.normal(size=released.shape) > 2.0
    rates = {"sensitivity": norm.sf(2.0 - 3.0), "specificity": norm.cdf(2.0)}
    estimates = [rogan_gladen(int(k), 200, **rates, **KNOWN)[0] for k in called.sum(axis=1)]
    values = np.array([estimate.value for estimate in estimates])
    assert_allclose(values.mean(), 0.3, atol=0.003)
    assert_allclose(np.mean([estimate.se for estimate in estimates]), values.std(), rtol=0.06)
    covered = np.mean([estimate.lo <= 0.3 <= estimate.hi for estimate in estimates])
    assert 0.93 < covered < 0.97


def test_correction_without_trials_or_information():
    estimate, clipped = rogan_gladen(0, 0, sensitivity=0.9, specificity=0.9, **KNOWN)
    assert np.isnan([estimate.value, estimate.lo, estimate.hi]).all()
    assert not clipped
    with pytest.raises(InputError, match="add up to more than 1"):
        rogan_gladen(3, 10, sensitivity=0.5, specificity=0.5, **KNOWN)
    with pytest.raises(InputError, match="sensitivity must lie"):
        rogan_gladen(3, 10, sensitivity=1.5, specificity=0.5, **KNOWN)


@pytest.mark.parametrize("p_site", [0.05, 0.3, 0.8])
def test_balanced_threshold_balances(p_site):
    weights = np.exp(binomial_log_weights(p_site, n_sites=3, m_max=3))
    threshold = balanced_threshold(weights, q=1.0, q_cv=0.3, noise_sd=0.3)
    m = np.arange(1, 4)
    misses = weights[1:] @ norm.cdf(threshold, m, np.sqrt(0.09 + m * 0.09))
    assert_allclose(misses, weights[0] * norm.sf(threshold / 0.3), rtol=1e-6)


def test_balanced_threshold_follows_release():
    thresholds = [balanced_threshold([1 - p, p], q=1.0, q_cv=0.2, noise_sd=0.25) for p in (0.02, 0.3, 0.95)]
    assert thresholds == sorted(thresholds, reverse=True)
    assert np.isnan(balanced_threshold([1.0, 0.0], q=1.0, q_cv=0.2, noise_sd=0.25))
    assert balanced_threshold([0.0, 1.0], q=1.0, q_cv=0.2, noise_sd=0.25) == pytest.approx(0.0, abs=1e-9)
    with pytest.raises(InputError, match="noise_sd must be greater than 0"):
        balanced_threshold([0.5, 0.5], q=1.0, q_cv=0.2, noise_sd=0.0)
