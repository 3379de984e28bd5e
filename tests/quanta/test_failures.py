import numpy as np
import pytest
from numpy.testing import assert_allclose

from napari_boutonrelease.errors import InputError
from napari_boutonrelease.quanta import (
    binomial_failures,
    binomial_moments,
    direct_vesicles,
    fit_poisson_histogram,
    poisson_failures,
    variance_of_variance,
    vesicles_from_cv,
)


def responses(rng, vesicles, *, q=1.0, q_cv=0.3, noise_sd=0.2):
    spread = np.sqrt(noise_sd**2 + vesicles * (q * q_cv) ** 2)
    return vesicles * q + spread * rng.normal(size=vesicles.shape)


def coverage(estimates, truth):
    return np.mean([estimate.lo <= truth <= estimate.hi for estimate in estimates])


def test_failures_cover_the_poisson_mean():
    rng = np.random.default_rng(1)
    estimates = [poisson_failures(int(k), 100, confidence=0.95) for k in rng.binomial(100, np.exp(-1.2), 2000)]
    assert 0.93 < coverage(estimates, 1.2) < 0.97
    assert_allclose(np.mean([e.se for e in estimates]), np.std([e.value for e in estimates]), rtol=0.08)


def test_failures_of_sites():
    rng = np.random.default_rng(2)
    estimates = [binomial_failures(int(k), 100, n_sites=3, confidence=0.95) for k in rng.binomial(100, 0.7**3, 2000)]
    assert 0.93 < coverage(estimates, 0.3) < 0.97
    assert_allclose(np.mean([e.se for e in estimates]), np.std([e.value for e in estimates]), rtol=0.08)


def test_failures_at_the_ends():
    never, always = poisson_failures(50, 50, confidence=0.95), poisson_failures(0, 50, confidence=0.95)
    assert (never.value, never.lo) == (0.0, 0.0)
    assert 0 < never.hi < 0.1
    assert always.value == np.inf
    assert np.isfinite(always.lo)
    assert always.hi == np.inf
    sites = binomial_failures(0, 50, n_sites=2, confidence=0.95)
    assert (sites.value, sites.hi) == (1.0, 1.0)
    assert np.isnan(poisson_failures(0, 0, confidence=0.95).value)
    assert np.isnan(binomial_failures(0, 0, n_sites=2, confidence=0.95).value)
    with pytest.raises(InputError, match="n_sites must be at least 1"):
        binomial_failures(1, 2, n_sites=0, confidence=0.95)


def test_direct_and_cv_agree_for_poisson_release():
    rng = np.random.default_rng(3)
    amplitudes = responses(rng, rng.poisson(1.5, (1500, 120)))
    direct = [direct_vesicles(a, q=1.0, q_se=0.0, confidence=0.95) for a in amplitudes]
    from_cv = [vesicles_from_cv(a, noise_sd=0.2, q_cv=0.3, confidence=0.95) for a in amplitudes]
    assert_allclose(np.mean([e.value for e in direct]), 1.5, atol=0.015)
    assert_allclose(np.median([e.value for e in from_cv]), 1.5, atol=0.06)
    assert 0.93 < coverage(direct, 1.5) < 0.97
    assert 0.90 < coverage(from_cv, 1.5) < 0.98


def test_cv_of_binomial_release_is_larger_by_what_the_docstring_says():
    rng = np.random.default_rng(4)
    amplitudes = responses(rng, rng.binomial(4, 0.5, 400_000))
    value = vesicles_from_cv(amplitudes, noise_sd=0.2, q_cv=0.3, confidence=0.95).value
    assert_allclose(value, 2.0 * 1.09 / (1.09 - 0.5), rtol=0.01)


def test_estimates_say_why_there_are_none():
    for call in (
        vesicles_from_cv([1.0, np.nan], noise_sd=0.1, q_cv=0.3, confidence=0.95),
        vesicles_from_cv([0.1, -0.1, 0.05, 0.0], noise_sd=1.0, q_cv=0.3, confidence=0.95),
        vesicles_from_cv([-0.1, -0.3, -0.2], noise_sd=0.0, q_cv=0.3, confidence=0.95),
        direct_vesicles([1.0], q=1.0, q_se=0.1, confidence=0.95),
    ):
        assert np.isnan([call.value, call.lo, call.hi]).all()
        assert call.method.startswith("none: ")
    with pytest.raises(InputError, match="q must be greater than 0"):
        direct_vesicles([1.0, 2.0], q=0.0, q_se=0.1, confidence=0.95)


def test_doubt_about_q_widens_the_direct_estimate():
    sure = direct_vesicles([1.0, 0.0, 2.0, 1.0], q=1.0, q_se=0.0, confidence=0.95)
    unsure = direct_vesicles([1.0, 0.0, 2.0, 1.0], q=1.0, q_se=0.5, confidence=0.95)
    assert unsure.value == sure.value
    assert unsure.se > sure.se


def test_variance_of_variance_is_that_of_repeated_samples():
    rng = np.random.default_rng(5)
    samples = rng.exponential(size=(20_000, 60))
    expected = samples.var(axis=1, ddof=1).var()
    assert_allclose(variance_of_variance(rng.exponential(size=400_000)) * 400_000 / 60, expected, rtol=0.1)
    assert np.isnan(variance_of_variance([1.0]))
    assert variance_of_variance([2.0, 2.0]) == 0.0


def test_moments_of_counts():
    assert_allclose(binomial_moments(2.0, 1.2), (5.0, 0.4))
    assert binomial_moments(2.0, 2.0)[0] == np.inf
    assert binomial_moments(2.0, 3.0)[0] < 0
    assert np.isnan(binomial_moments(0.0, 1.0)).all()


def test_histogram_fit_recovers_what_was_drawn():
    rng = np.random.default_rng(6)
    vesicles = rng.poisson(1.5, 3000)
    amplitudes = (vesicles * 0.4 + np.sqrt(vesicles) * 0.06 * rng.normal(size=3000))[vesicles > 0]
    edges = np.arange(0.05, amplitudes.max() + 0.1, 0.05)
    counts, _ = np.histogram(amplitudes, edges)
    fit = fit_poisson_histogram(
        (edges[:-1] + edges[1:]) / 2, counts, n_failures=int(np.sum(vesicles == 0)), class_width=0.05, m_max=20
    )
    for value, se, truth in (
        (fit.mean_vesicles, fit.mean_vesicles_se, 1.5),
        (fit.q, fit.q_se, 0.4),
        (fit.q_sd, fit.q_sd_se, 0.06),
    ):
        assert abs(value - truth) < 4 * se
        assert se < 0.1 * truth


def test_histogram_without_responses_is_refused():
    with pytest.raises(InputError, match="hold a response"):
        fit_poisson_histogram([0.1, 0.2], [0, 0], n_failures=10, class_width=0.1, m_max=10)
    with pytest.raises(InputError, match="a count for each of 2 classes"):
        fit_poisson_histogram([0.1, 0.2], [1], n_failures=10, class_width=0.1, m_max=10)
