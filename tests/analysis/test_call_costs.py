"""What a threshold costs: the misses that the fitted model expects are those that simulated releases suffer."""

from types import SimpleNamespace

import numpy as np
import pytest

from napari_boutonrelease.analysis.quantal_step import expected_misses

Q, Q_CV = 0.4, 0.3


def model(*, n_sites, p_site):
    return SimpleNamespace(n_sites=np.array(n_sites), p_site=np.array(p_site), q=np.full(len(n_sites), Q), q_cv=Q_CV)


@pytest.mark.parametrize("threshold", [0.2, 0.35, 0.6])
def test_expected_misses_are_those_of_simulated_releases(threshold):
    rng = np.random.default_rng(4)
    n_trials, sites, p_site = 200_000, 3, (0.3, 0.6)
    noise_sd = np.where(np.arange(n_trials) % 2, 0.05, 0.15)  # each trial has its own noise
    vesicles = rng.binomial(sites, p_site, (n_trials, 2))
    amplitude = Q * vesicles + Q * Q_CV * np.sqrt(vesicles) * rng.standard_normal((n_trials, 2))
    amplitude += noise_sd[:, None] * rng.standard_normal((n_trials, 2))
    missed = np.sum((vesicles > 0) & (amplitude <= threshold), axis=0)

    expected = expected_misses(
        model(n_sites=[sites], p_site=[p_site]),
        amplitude_se=np.broadcast_to(noise_sd[:, None], (1, n_trials, 2)),
        threshold=np.array([threshold]),
    )
    # 4.5 SD of a count: a chance failure is rarer than 1 in 100,000.
    np.testing.assert_allclose(missed, expected[0], atol=4.5 * np.sqrt(expected.max()))


def test_misses_without_model_or_threshold_are_unknown_and_missing_trials_do_not_count():
    noise = np.full((3, 10, 1), 0.1)
    noise[0, 5:] = np.nan
    axon = model(n_sites=[2, 2, 2], p_site=[[0.5], [np.nan], [0.5]])
    missed = expected_misses(axon, amplitude_se=noise, threshold=np.array([0.3, 0.3, np.nan]))
    assert np.isnan(missed[1:]).all()
    full = expected_misses(axon, amplitude_se=np.full((3, 10, 1), 0.1), threshold=np.array([0.3, 0.3, np.nan]))
    assert full[0, 0] == pytest.approx(2 * missed[0, 0])
    assert missed[0, 0] > 0
