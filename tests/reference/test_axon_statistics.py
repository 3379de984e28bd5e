"""Statistics of the boutons of one axon against published data and independent fits.

Status beside each number: published (read in the paper or a copy of its table), recomputed (by the library named),
derived (exact arithmetic), from memory.
"""

import numpy as np
import pytest
from numpy.testing import assert_allclose
from scipy.stats import betabinom, spearmanr

from napari_boutonrelease.quanta import (
    dispersion,
    fit_beta_binomial,
    measure_gradient,
    measure_heterogeneity,
    measure_morans_i,
)

# Geissler 1889: boys among the first twelve children of 6115 families (published)
BOYS = (3, 24, 104, 286, 670, 1033, 1343, 1112, 829, 478, 181, 45, 7)
# Weldon: dice showing 5 or 6 among twelve, 26,306 throws (published; the last three classes from memory)
DICE = (185, 1149, 3265, 5475, 6114, 5194, 3067, 1331, 403, 105, 14, 4, 0)


def counts(classes):
    return np.repeat(np.arange(13), classes), np.full(sum(classes), 12)


def test_geissler_beta_binomial():
    # recomputed: 40-digit root of the score equations; scipy betabinom; the likelihood ratio and the AIC are published
    k, n = counts(BOYS)
    fit = fit_beta_binomial(k, n)
    assert_allclose((fit.a, fit.b), (34.102858, 31.578234), atol=0.02)
    assert_allclose(fit.log_likelihood, -12492.871, atol=5e-4)
    assert_allclose(2 * (fit.log_likelihood - fit.binomial_log_likelihood), 82.6016, atol=2e-3)
    assert_allclose(fit.rho, 0.0149968, atol=1e-5)
    assert_allclose(4 - 2 * fit.log_likelihood, 24989.743, atol=1e-3)
    assert_allclose(2 - 2 * fit.binomial_log_likelihood, 25070.344, atol=1e-3)
    assert_allclose(fit.log_likelihood, betabinom.logpmf(k, n, fit.a, fit.b).sum(), atol=1e-6)


@pytest.mark.parametrize(("classes", "index", "z"), [(BOYS, 1.1650005, 9.518338), (DICE, None, 0.636513)])
def test_tarone(classes, index, z):
    # recomputed with numpy; the formula from memory
    found_index, found_z = dispersion(*counts(classes))
    assert_allclose(found_z, z, atol=1e-6)
    if index is not None:
        assert_allclose(found_index, index, atol=1e-7)


def test_homogeneity_of_three_boutons():
    # recomputed with scipy chi2_contingency(correction=False): chi2 12.126286, df 2, P 0.00232708
    index, _ = dispersion([20, 5, 12], [50, 50, 50])
    assert_allclose(2 * index, 12.126286, atol=1e-6)
    found = measure_heterogeneity(
        [20, 5, 12], [50, 50, 50], confidence=0.95, n_simulations=40_000, rng=np.random.default_rng(1)
    )
    assert_allclose(found.p_equal, 0.0023, atol=0.001)  # exact by chance draws, against the limit of chi-squared
    assert 0 < found.sd.lo < found.sd.value < found.sd.hi


@pytest.mark.parametrize(
    ("weighting", "value", "variance", "z"), [("binary", 0.5, 0.140625, 2.0), ("row", 0.6, 0.158333, None)]
)
def test_morans_i_of_a_chain(weighting, value, variance, z):
    # derived
    found = measure_morans_i(
        [1, 2, 3, 4, 5], position=[0, 3, 5, 9, 14], weighting=weighting, n_permutations=9, rng=np.random.default_rng(1)
    )
    assert_allclose((found.value, found.expected), (value, -0.25), atol=1e-12)
    assert_allclose(found.sd_normal**2, variance, atol=1e-6)
    if z is not None:
        assert_allclose(found.z, z, atol=1e-12)


def test_morans_i_of_all_orders():
    # derived: of the 120 orders of 1..5, as many deviate as much from -1/4 as the sorted one
    from itertools import permutations

    values = np.array(list(permutations(range(1, 6)))) - 3.0
    all_orders = (values[:, :-1] * values[:, 1:]).sum(axis=1) / 4 / 2
    exact = np.mean(np.abs(all_orders + 0.25) >= 0.75 - 1e-12)
    found = measure_morans_i(
        [1, 2, 3, 4, 5], position=range(5), weighting="binary", n_permutations=20_000, rng=np.random.default_rng(1)
    )
    assert_allclose(found.p, exact, atol=5 * np.sqrt(exact / 20_000))


def test_rank_correlation_with_ties():
    # recomputed with scipy
    x, y = [0, 1, 2, 3, 4, 5, 6.0], [0.2, 0.2, 0.5, 0.4, 0.9, 0.5, 0.7]
    found = measure_gradient(y, position=x, confidence=0.95, n_permutations=99, rng=np.random.default_rng(1))
    assert_allclose(found.rank_correlation, spearmanr(x, y).statistic, atol=1e-12)
