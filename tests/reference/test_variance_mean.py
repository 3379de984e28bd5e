"""Variance against mean, and the error of a variance: exact enumeration and worked numbers.

Sources: Reid & Clements 1999; Clements & Silver 2000; Silver 2003; Quastel 1997. Every variance was confirmed by going
through all 2^n_sites outcomes, as is done again here.
"""

from itertools import product

import numpy as np
import pytest

from napari_boutonrelease.quanta import (
    ReleaseVariation,
    fit_parabola,
    release_cumulants,
    release_variance,
    variance_of_variance_from_kurtosis,
)


def variation(**given):
    return ReleaseVariation(
        **({"within_cv": 0.0, "between_cv": 0.0, "within_sd": "same", "p_cv": 0.0, "p_shape": None} | given)
    )


def enumerated_variance(p, q, within_sd):
    """Variance of the response of sites that release or not, over all outcomes."""
    p, q, within_sd = (np.broadcast_to(np.asarray(values, dtype=float), 5) for values in (p, q, within_sd))
    mean = square = 0.0
    for outcome in product([0, 1], repeat=5):
        released = np.array(outcome)
        chance = np.prod(np.where(released, p, 1 - p))
        response = released @ q
        mean += chance * response
        square += chance * (response**2 + released @ within_sd**2)
    return square - mean**2


UNEQUAL_Q = np.array([6.0, 8.0, 10.0, 12.0, 14.0])
UNEQUAL_P = np.array([0.1, 0.2, 0.4, 0.5, 0.8])
CV_B = np.sqrt(0.08)


@pytest.mark.parametrize(
    ("differ", "p", "q", "within_sd", "expected"),
    [
        ({}, 0.4, 10.0, 0.0, 120.0),
        ({"within_cv": 0.3}, 0.4, 10.0, 3.0, 138.0),
        ({"between_cv": CV_B}, 0.4, UNEQUAL_Q, 0.0, 129.6),
        ({"within_cv": 0.3, "between_cv": CV_B}, 0.4, UNEQUAL_Q, 3.0, 147.6),
        (
            {"within_cv": 0.3, "between_cv": CV_B, "within_sd": "proportional"},
            0.4,
            UNEQUAL_Q,
            0.3 * UNEQUAL_Q,
            149.04,
        ),
        ({"p_cv": np.sqrt(0.375)}, UNEQUAL_P, 10.0, 0.0, 90.0),
    ],
)
def test_variance_of_five_sites(differ, p, q, within_sd, expected):
    assert enumerated_variance(p, q, within_sd) == pytest.approx(expected)
    assert release_variance(20.0, q=10.0, n_sites=5, variation=variation(**differ)) == pytest.approx(expected)
    assert release_cumulants(0.4, q=10.0, n_sites=5, variation=variation(**differ))[1] == pytest.approx(expected)


def test_variance_with_beta_distributed_probabilities():
    spread = variation(p_shape=2.0)
    assert release_variance(20.0, q=10.0, n_sites=5, variation=spread) == pytest.approx(100.0)
    assert release_cumulants(0.4, q=10.0, n_sites=5, variation=spread)[1] == pytest.approx(100.0)


def test_unequal_probabilities_look_like_fewer_sites():
    assert np.prod(1 - UNEQUAL_P) == pytest.approx(0.0432)
    relative = (UNEQUAL_P.std() / UNEQUAL_P.mean()) ** 2
    assert relative == pytest.approx(0.375)
    p_apparent = 1 - 90.0 / (20.0 * 10.0)
    assert p_apparent == pytest.approx(0.4 * (1 + relative)) == pytest.approx(0.55)
    assert 20.0 / 10.0 / p_apparent == pytest.approx(5 / (1 + relative)) == pytest.approx(3.636364, abs=1e-6)


def test_inverse_squared_cv_of_equal_sites():
    mean, variance, _, _ = release_cumulants(0.4, q=10.0, n_sites=5, variation=variation())
    assert mean**2 / variance == pytest.approx(3.33333, abs=1e-5)


PROBABILITIES = np.array([0.1, 0.3, 0.5, 0.7, 0.9])
MEANS = 8 * 25.0 * PROBABILITIES


def test_exact_parabola():
    variances = release_variance(MEANS, q=25.0, n_sites=8, variation=variation())
    np.testing.assert_allclose(variances, [450, 1050, 1250, 1050, 450])
    assert fit_parabola(MEANS, variances, weights=np.ones(5)) == pytest.approx((25.0, 0.125))


def test_weighted_and_unweighted_parabola():
    variances = np.array([460.0, 1020, 1270, 1040, 470])
    weights = (50 - 1) / (2 * variances**2)
    q, bend = fit_parabola(MEANS, variances, weights=weights)
    assert (q, bend) == pytest.approx((24.879993, 0.12377128), rel=1e-6)
    assert 1 / bend == pytest.approx(8.079419, rel=1e-6)
    assert fit_parabola(MEANS, variances, weights=np.ones(5)) == pytest.approx((24.777712, 0.12323765), rel=1e-6)


def test_neglected_variation_within_sites_raises_q():
    variances = release_variance(MEANS, q=25.0, n_sites=8, variation=variation(within_cv=0.3))
    q, _ = fit_parabola(MEANS, variances, weights=np.ones(5))
    assert q == pytest.approx(25.0 * 1.09)


@pytest.mark.parametrize(
    ("n_sites", "p_site", "n", "exact", "normal"),
    [(1, 0.3, 3, 0.0259, None), (5, 0.4, 50, 0.0482155, 0.0587755), (8, 0.1, 50, 0.0277832, 0.0211592),
     (1, 0.3, 50, 0.000708, 0.0018)],
)  # fmt: skip
def test_error_of_a_variance(n_sites, p_site, n, exact, normal):
    _, variance, _, fourth = (
        float(one) for one in release_cumulants(p_site, q=1.0, n_sites=n_sites, variation=variation())
    )
    assert variance_of_variance_from_kurtosis(variance, fourth / variance**2, n=n) == pytest.approx(exact, rel=2e-5)
    if normal is not None:
        assert variance_of_variance_from_kurtosis(variance, 0.0, n=n) == pytest.approx(normal, rel=2e-5)


def test_error_of_the_variance_of_three_coins_by_enumeration():
    outcomes = np.array(list(product([0.0, 1.0], repeat=3)))
    chance = np.prod(np.where(outcomes == 1, 0.3, 0.7), axis=1)
    variances = outcomes.var(axis=1, ddof=1)
    assert chance @ variances**2 - (chance @ variances) ** 2 == pytest.approx(0.0259)


def test_kurtosis_of_five_sites():
    _, variance, _, fourth = release_cumulants(0.4, q=1.0, n_sites=5, variation=variation())
    assert fourth / variance**2 == pytest.approx(-0.366667, abs=1e-6)
