"""Amplitudes of several vesicles of varying size under noise."""

import numpy as np
from numpy.testing import assert_allclose
from scipy.stats import gamma, kstest, norm, pearson3

from napari_boutonrelease.quanta import gamma_vesicles_logpdf, gamma_vesicles_slopes

Q, Q_CV, NOISE = 0.4, 0.3, 0.1
GRID = np.linspace(-1.0, 4.0, 50_001)
STEP = GRID[1] - GRID[0]


def test_densities_have_the_moments_of_the_sum():
    m = np.arange(6)[:, None]
    density = np.exp(gamma_vesicles_logpdf(GRID, vesicles=m, q=Q, q_cv=Q_CV, noise_sd=NOISE))
    area = density.sum(axis=1) * STEP
    mean = (density * GRID).sum(axis=1) * STEP
    variance = (density * (GRID - mean[:, None]) ** 2).sum(axis=1) * STEP
    third = (density * (GRID - mean[:, None]) ** 3).sum(axis=1) * STEP
    m = np.arange(6)
    assert_allclose(area, 1.0, rtol=1e-5)
    assert_allclose(mean, m * Q, atol=1e-4)
    assert_allclose(variance, NOISE**2 + m * (Q * Q_CV) ** 2, rtol=1e-3)
    assert_allclose(third[1:], 2 * m[1:] * Q**3 * Q_CV**4, rtol=0.01)


def test_without_a_vesicle_the_noise_is_normal():
    ours = np.exp(gamma_vesicles_logpdf(GRID, vesicles=0, q=Q, q_cv=Q_CV, noise_sd=NOISE))
    assert np.abs(ours - norm.pdf(GRID, 0, NOISE)).max() < 0.005 * norm.pdf(0, 0, NOISE)


def test_it_is_the_pearson_iii_density():
    skew = 2 * 2 * Q_CV * (Q * Q_CV) ** 3 / (NOISE**2 + 2 * (Q * Q_CV) ** 2) ** 1.5
    expected = pearson3.logpdf([0.5, 0.8, 1.4], skew, 2 * Q, np.sqrt(NOISE**2 + 2 * (Q * Q_CV) ** 2))
    ours = gamma_vesicles_logpdf([0.5, 0.8, 1.4], vesicles=2, q=Q, q_cv=Q_CV, noise_sd=NOISE)
    assert_allclose(ours, expected, rtol=1e-9)


def test_it_describes_gamma_vesicles_drawn_one_by_one():
    rng = np.random.default_rng(12)
    sizes = gamma.rvs(1 / Q_CV**2, scale=Q * Q_CV**2, size=(3, 2000), random_state=rng)
    drawn = sizes.sum(axis=0) + rng.normal(0, NOISE, 2000)
    cumulative = np.cumsum(np.exp(gamma_vesicles_logpdf(GRID, vesicles=3, q=Q, q_cv=Q_CV, noise_sd=NOISE))) * STEP
    assert kstest(drawn, lambda x: np.interp(x, GRID, cumulative)).pvalue > 0.001


def test_numbers_of_vesicles_and_amplitudes_broadcast():
    both = gamma_vesicles_logpdf(
        GRID[:7], vesicles=np.arange(3)[:, None], q=np.full((4, 1, 1), Q), q_cv=Q_CV, noise_sd=np.full(7, NOISE)
    )
    assert both.shape == (4, 3, 7)
    assert_allclose(both[2, 1], gamma_vesicles_logpdf(GRID[:7], vesicles=1, q=Q, q_cv=Q_CV, noise_sd=NOISE))


def test_slopes_are_those_of_the_density():
    amplitude, m = np.linspace(-0.3, 2.5, 80), np.arange(1, 6)[:, None]
    for at in ((0.4, 0.3, 0.1), (0.4, 0.5, 0.03), (0.15, 0.02, 0.1)):  # the last one has the least skewness
        at = np.array(at)

        def density(values, amplitude=amplitude, m=m):
            return gamma_vesicles_logpdf(amplitude, vesicles=m, q=values[0], q_cv=values[1], noise_sd=values[2])

        value, *slopes = gamma_vesicles_slopes(amplitude, vesicles=m.astype(float), q=at[0], q_cv=at[1], noise_sd=at[2])
        assert_allclose(value, density(at), rtol=1e-5, atol=2e-6)
        for k, slope in enumerate(slopes):
            step = np.ones(3)
            step[k] = np.exp(1e-6)
            assert_allclose(slope, (density(at * step) - density(at / step)) / 2e-6, rtol=1e-4, atol=1e-4)
