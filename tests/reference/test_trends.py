"""Trend tests against published and independently computed numbers."""

import numpy as np
import pytest
import statsmodels.api as sm
from scipy.stats import theilslopes

from napari_boutonrelease.responses import amplitude_trend, release_trend


def test_mann_kendall_with_ties():
    # S = 3, variance 83.666667, z = 0.218652 (pymannkendall 1.4.3).
    _, p_value = amplitude_trend([23, 24, 29, 6, 29, 24, 24, 29, 23])
    assert p_value == pytest.approx(0.826921, abs=1e-6)


def test_theil_sen_slope_with_a_gap():
    rng = np.random.default_rng(4)
    trial = np.delete(np.arange(40), [3, 17, 18])
    y = rng.normal(size=40) - 0.02 * np.arange(40)
    y[[3, 17, 18]] = np.nan
    slope, _ = amplitude_trend(y)
    assert slope == pytest.approx(theilslopes(y[trial], trial).slope, rel=1e-12)


def test_logistic_regression():
    rng = np.random.default_rng(5)
    x = np.linspace(-0.5, 0.5, 60)
    called = (rng.random(60) < 1 / (1 + np.exp(-(0.2 - 2.0 * x)))).astype(float)
    log_odds, p_value = release_trend(called)
    reference = sm.Logit(called, sm.add_constant(x)).fit(disp=0)
    assert log_odds == pytest.approx(reference.params[1], rel=1e-6)
    assert p_value == pytest.approx(reference.llr_pvalue, rel=1e-6)
