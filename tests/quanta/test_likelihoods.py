import numpy as np
import pytest
from numpy.testing import assert_allclose
from scipy import integrate
from scipy.stats import binom, norm, poisson

from napari_boutonrelease.errors import InputError
from napari_boutonrelease.quanta import (
    binomial_gaussian_loglikelihood,
    binomial_log_weights,
    component_logpdf,
    mixture_loglikelihood,
    null_loglikelihood,
    poisson_gaussian_loglikelihood,
    poisson_log_weights,
    poisson_m_max,
    vesicle_posterior,
)

AMPLITUDES = np.random.default_rng(1).normal(0.2, 0.15, 40)
NOISE = np.random.default_rng(2).uniform(0.02, 0.06, 40)


def test_component_densities_are_normal_with_quantal_variance():
    m = np.arange(6)[:, None]
    expected = norm.logpdf(AMPLITUDES, m * 0.12, np.sqrt(NOISE**2 + m * (0.12 * 0.3) ** 2))
    assert_allclose(component_logpdf(AMPLITUDES, noise_sd=NOISE, q=0.12, q_cv=0.3, m_max=5), expected, rtol=1e-12)


def test_many_quantal_sizes_are_scored_at_once():
    sizes = np.array([0.08, 0.12, 0.2])
    together = component_logpdf(AMPLITUDES, noise_sd=NOISE, q=sizes[:, None], q_cv=0.3, m_max=4)
    one_by_one = [component_logpdf(AMPLITUDES, noise_sd=NOISE, q=q, q_cv=0.3, m_max=4) for q in sizes]
    assert_allclose(together, np.stack(one_by_one, axis=1))


@pytest.mark.parametrize("p_site", [0.0, 0.2, 1.0])
def test_binomial_weights_hold_at_both_ends_of_p(p_site):
    weights = np.exp(binomial_log_weights(p_site, n_sites=np.array([1, 4]), m_max=6))
    m = np.arange(7)
    assert_allclose(weights, np.stack([binom.pmf(m, 1, p_site), binom.pmf(m, 4, p_site)], axis=1), atol=1e-14)


@pytest.mark.parametrize("mean", [0.0, 0.01, 1.3, 40.0])
def test_poisson_weights_reach_far_enough(mean):
    m_max = poisson_m_max(mean)
    weights = np.exp(poisson_log_weights(mean, m_max=m_max))
    assert_allclose(weights, poisson.pmf(np.arange(m_max + 1), mean), atol=1e-14)
    assert 1 - weights.sum() < 1e-9


def test_binomial_likelihood_sums_over_vesicles():
    m = np.arange(4)[:, None]
    density = (binom.pmf(m, 3, 0.4) * norm.pdf(AMPLITUDES, m * 0.1, np.sqrt(NOISE**2 + m * 0.03**2))).sum(axis=0)
    score = binomial_gaussian_loglikelihood(AMPLITUDES, n_sites=3, p_site=0.4, q_dff=0.1, q_cv=0.3, noise_sd_dff=NOISE)
    assert_allclose(score, np.log(density).sum(), rtol=1e-12)


def test_mixture_is_a_density():
    def density(a):
        return np.exp(poisson_gaussian_loglikelihood([a], mean_vesicles=1.7, q_dff=0.1, q_cv=0.3, noise_sd_dff=0.03))

    area, _ = integrate.quad(density, -0.3, 2.5, points=[0, 0.1, 0.2, 0.4], limit=200)
    assert_allclose(area, 1.0, atol=1e-7)


def test_many_rare_sites_are_poisson():
    settings = {"q_dff": 0.1, "q_cv": 0.3, "noise_sd_dff": 0.03}
    rare = binomial_gaussian_loglikelihood(AMPLITUDES, n_sites=20_000, p_site=1.2 / 20_000, **settings)
    assert_allclose(rare, poisson_gaussian_loglikelihood(AMPLITUDES, mean_vesicles=1.2, **settings), atol=0.01)


def test_one_site_is_a_bernoulli_mixture():
    score = binomial_gaussian_loglikelihood(AMPLITUDES, n_sites=1, p_site=0.7, q_dff=0.1, q_cv=0.0, noise_sd_dff=0.05)
    bernoulli = np.log(0.3 * norm.pdf(AMPLITUDES, 0, 0.05) + 0.7 * norm.pdf(AMPLITUDES, 0.1, 0.05)).sum()
    assert_allclose(score, bernoulli, rtol=1e-12)


def test_missing_amplitudes_change_nothing():
    settings = {"n_sites": 3, "p_site": 0.4, "q_dff": 0.1, "q_cv": 0.3, "noise_sd_dff": 0.04}
    holed = np.insert(AMPLITUDES, [0, 7], np.nan)
    assert_allclose(
        binomial_gaussian_loglikelihood(holed, **settings, null_amplitudes_dff=[0.01, np.nan]),
        binomial_gaussian_loglikelihood(AMPLITUDES, **settings, null_amplitudes_dff=[0.01]),
        rtol=1e-12,
    )


def test_nulls_are_scored_as_no_vesicle():
    settings = {"n_sites": 3, "p_site": 0.4, "q_dff": 0.1, "q_cv": 0.3, "noise_sd_dff": 0.04}
    nulls = [0.02, -0.05, 0.01]
    joint = binomial_gaussian_loglikelihood(AMPLITUDES, **settings, null_amplitudes_dff=nulls)
    alone = binomial_gaussian_loglikelihood(AMPLITUDES, **settings)
    assert_allclose(joint - alone, norm.logpdf(nulls, 0, 0.04).sum())
    assert_allclose(null_loglikelihood(nulls, noise_sd=0.04), norm.logpdf(nulls, 0, 0.04).sum())


def test_posterior_tells_vesicles_apart_and_keeps_the_prior_where_nothing_was_measured():
    weights = binomial_log_weights(0.4, n_sites=3, m_max=3)
    components = component_logpdf([0.0, 0.1, 0.3, np.nan], noise_sd=0.01, q=0.1, q_cv=0.0, m_max=3)
    posterior = vesicle_posterior(weights, components)
    assert posterior[:, :3].argmax(axis=0).tolist() == [0, 1, 3]
    assert_allclose(posterior.sum(axis=0), 1.0)
    assert_allclose(posterior[:, 3], np.exp(weights))
    assert mixture_loglikelihood(weights, components)[3] == pytest.approx(0.0, abs=1e-12)


@pytest.mark.parametrize(
    ("change", "message"),
    [
        ({"n_sites": 0}, "n_sites must be a whole number"),
        ({"p_site": 1.2}, "p_site must lie between 0 and 1"),
        ({"q_dff": 0.0}, "q_dff must be greater than 0"),
        ({"q_cv": -0.1}, "q_cv must be 0 or more"),
        ({"noise_sd_dff": [0.1, 0.0]}, "noise_sd_dff must be greater than 0"),
    ],
)
def test_parameters_out_of_range_are_named(change, message):
    settings = {"n_sites": 1, "p_site": 0.5, "q_dff": 0.1, "q_cv": 0.3, "noise_sd_dff": 0.02} | change
    with pytest.raises(InputError, match=message):
        binomial_gaussian_loglikelihood([0.0, 0.1], **settings)


def test_amplitudes_that_are_all_missing_are_refused():
    with pytest.raises(InputError, match="at least one finite amplitude"):
        poisson_gaussian_loglikelihood([np.nan], mean_vesicles=1.0, q_dff=0.1, q_cv=0.3, noise_sd_dff=0.02)


def test_nulls_with_a_noise_of_each_amplitude_are_refused():
    with pytest.raises(InputError, match="need one noise_sd_dff"):
        poisson_gaussian_loglikelihood(
            AMPLITUDES, mean_vesicles=1.0, q_dff=0.1, q_cv=0.3, noise_sd_dff=NOISE, null_amplitudes_dff=[0.0]
        )
