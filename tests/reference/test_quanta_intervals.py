"""Intervals, thresholds and tests against published numbers and independent libraries.

Status beside each number: published (read in the paper or a copy of its table), recomputed (by the library named),
derived (exact arithmetic), from memory.
"""

import numpy as np
import pytest
from numpy.testing import assert_allclose
from scipy.stats import binomtest, false_discovery_control, fisher_exact, norm
from statsmodels.stats.contingency_tables import mcnemar
from statsmodels.stats.proportion import confint_proportions_2indep, proportion_confint

from napari_boutonrelease.quanta import (
    benjamini_hochberg,
    clopper_pearson_interval,
    detection_power,
    expected_false_calls,
    false_call_rate,
    fisher_exact_p,
    jeffreys_interval,
    mcnemar_test,
    newcombe_difference_interval,
    peak_false_call_rate,
    ratio_interval,
    rogan_gladen,
    variance_of_variance_from_kurtosis,
    wilson_interval,
    zero_success_upper_limit,
)

K = np.array([81, 15, 0, 1, 20, 0])
N = np.array([263, 148, 20, 29, 50, 50])
# recomputed with statsmodels `proportion_confint`; Wilson of the first four published by Newcombe 1998, Table I
WILSON = [
    (0.255289, 0.366210),
    (0.062386, 0.160487),
    (0.0, 0.161125),
    (0.006113, 0.171755),
    (0.276084, 0.538186),
    (0.0, 0.071348),
]
CLOPPER_PEARSON = [
    (0.252737, 0.367622),
    (0.057844, 0.161650),
    (0.0, 0.168433),
    (0.000873, 0.177644),
    (0.264078, 0.548206),
    (0.0, 0.071122),
]
# lower ends at no success are 0 by the convention of Brown, Cai & DasGupta 2001 (from memory)
JEFFREYS = [
    (0.254522, 0.365647),
    (0.060449, 0.157643),
    (0.0, 0.116639),
    (0.003746, 0.150078),
    (0.272952, 0.538256),
    (0.0, 0.048758),
]


@pytest.mark.parametrize(
    ("interval", "expected"),
    [(wilson_interval, WILSON), (clopper_pearson_interval, CLOPPER_PEARSON), (jeffreys_interval, JEFFREYS)],
)
def test_binomial_intervals(interval, expected):
    assert_allclose(np.transpose(interval(K, N, confidence=0.95)), expected, atol=1e-6)


def test_wilson_published_by_newcombe_1998():
    published = [(0.2553, 0.3662), (0.0624, 0.1605), (0.0, 0.1611), (0.0061, 0.1718)]
    assert_allclose(np.transpose(wilson_interval(K[:4], N[:4], confidence=0.95)), published, atol=5e-5)


@pytest.mark.parametrize("confidence", [0.8, 0.95, 0.99])
def test_binomial_intervals_agree_with_libraries(confidence):
    k, n = np.array([3, 17, 60]), np.array([12, 40, 80])
    for interval, method in ((wilson_interval, "wilson"), (clopper_pearson_interval, "beta")):
        theirs = proportion_confint(k, n, alpha=1 - confidence, method=method)
        assert_allclose(interval(k, n, confidence=confidence), theirs, atol=1e-10)
    exact = binomtest(17, 40).proportion_ci(confidence, "exact")
    assert_allclose(clopper_pearson_interval(17, 40, confidence=confidence), (exact.low, exact.high), atol=1e-10)
    theirs = proportion_confint(k, n, alpha=1 - confidence, method="jeffreys")
    assert_allclose(jeffreys_interval(k, n, confidence=confidence), theirs, atol=1e-10)


def test_one_sided_limit_without_a_success():
    # derived: 1 - 0.05^(1/n)
    limits = zero_success_upper_limit([10, 20, 100], confidence=0.95)
    assert_allclose(limits, [0.258866, 0.139108, 0.029513], atol=1e-6)


def test_two_independent_proportions():
    # published by Fagerland et al. 2015 (0.019, 0.34; 0.91, 54; 1.21, 43), digits recomputed with statsmodels
    counts = (7, 34, 1, 34)
    assert_allclose(newcombe_difference_interval(*counts, confidence=0.95), (0.018921, 0.340369), atol=1e-6)
    log = ratio_interval(*counts, confidence=0.95, method="log")
    score = ratio_interval(*counts, confidence=0.95, method="score")
    assert_allclose(log, (0.909606, 53.8695), rtol=1e-5)
    assert_allclose(score, (1.20857, 43.0330), rtol=1e-5)


@pytest.mark.parametrize("counts", [(12, 60, 9, 55), (30, 40, 33, 40), (3, 50, 20, 45)])
def test_ratios_agree_with_statsmodels(counts):
    for method in ("log", "score"):
        theirs = confint_proportions_2indep(*counts, compare="ratio", method=method)
        assert_allclose(ratio_interval(*counts, confidence=0.95, method=method), theirs, rtol=2e-5)
    theirs = confint_proportions_2indep(*counts, compare="diff", method="newcomb")
    assert_allclose(newcombe_difference_interval(*counts, confidence=0.95), theirs, atol=1e-8)


def test_mcnemar():
    # recomputed with statsmodels
    assert_allclose(mcnemar_test(121, 59, method="chi2"), (21.355556, 3.81514e-6), rtol=1e-5)
    assert_allclose(mcnemar_test(121, 59, method="corrected"), (20.672222, 5.45009e-6), rtol=1e-5)
    assert_allclose(mcnemar_test(121, 59, method="exact"), (59, 4.43445e-6), rtol=1e-5)
    theirs = mcnemar([[10, 6], [3, 20]], exact=True)
    assert_allclose(mcnemar_test(6, 3, method="exact"), (theirs.statistic, theirs.pvalue))


def test_tails_of_the_noise():
    # recomputed with scipy `norm.sf`
    thresholds = [1.5, 2, 2.5, 3, 3.5, 4, 5]
    tails = [0.0668072, 0.0227501, 0.00620967, 0.00134990, 2.32629e-4, 3.16712e-5, 2.86652e-7]
    assert_allclose(false_call_rate(thresholds, n_baseline=None), tails, rtol=5e-6)
    assert_allclose(expected_false_calls(80, threshold_sd=thresholds), 80 * norm.sf(thresholds))


def test_peak_of_several_noise_samples():
    # derived: 1 - (1 - tail)^m at 2 and 3 SD
    for n_samples, rates in ((3, (0.0667095, 0.00404423)), (5, (0.108691, 0.00673129)), (10, (0.205569, 0.0134173))):
        assert_allclose(peak_false_call_rate([2.0, 3.0], n_samples=n_samples), rates, rtol=5e-6)


def test_noise_estimated_from_few_samples():
    # recomputed: t with n - 1 degrees of freedom at k / sqrt(1 + 1/n)
    assert_allclose(false_call_rate([2.0, 3.0], n_baseline=10), (0.0444490, 0.00938426), rtol=5e-6)
    assert_allclose(false_call_rate([2.0, 3.0], n_baseline=20), (0.0329301, 0.00431805), rtol=5e-6)


def test_detection_power():
    # derived: normal tail beyond threshold - amplitude
    assert_allclose(detection_power([3.0, 2.0], threshold_sd=[2.0, 3.0]), (0.841345, 0.158655), atol=1e-6)


KNOWN = {"n_sensitivity": np.inf, "n_specificity": np.inf, "confidence": 0.95}


@pytest.mark.parametrize(
    ("amplitude", "threshold", "apparent", "true"), [(4, 3, 0.2533484, 0.3), (3, 2, 0.1046096, 0.1)]
)
def test_rogan_gladen_undoes_false_calls_and_misses(amplitude, threshold, apparent, true):
    # numbers derived; formula published (Rogan & Gladen 1978)
    sensitivity, specificity = norm.sf(threshold - amplitude), norm.cdf(threshold)
    called = true * sensitivity + (1 - true) * (1 - specificity)
    assert_allclose(called, apparent, atol=5e-8)
    n = 10_000_000
    estimate, clipped = rogan_gladen(round(called * n), n, sensitivity=sensitivity, specificity=specificity, **KNOWN)
    assert_allclose(estimate.value, true, atol=1e-6)
    assert not clipped


def test_rogan_gladen_standard_errors():
    # derived (delta method)
    rates = {"sensitivity": 0.9, "specificity": 0.95, "confidence": 0.95}
    known, _ = rogan_gladen(60, 200, **rates, n_sensitivity=np.inf, n_specificity=np.inf)
    estimated, _ = rogan_gladen(60, 200, **rates, n_sensitivity=100, n_specificity=200)
    assert_allclose((known.value, known.se), (0.2941176, 0.0381220), atol=5e-7)
    assert_allclose((estimated.value, estimated.se), (0.2941176, 0.0415311), atol=5e-7)
    assert known.method != estimated.method


def test_rogan_gladen_at_zero():
    # derived: as many calls as false calls are expected is exactly 0; fewer is clipped and said
    rates = {"sensitivity": 0.9, "specificity": 0.95} | KNOWN
    at_zero, clipped = rogan_gladen(10, 200, **rates)
    assert at_zero.value == pytest.approx(0.0, abs=1e-12)
    assert not clipped
    below, clipped = rogan_gladen(5, 200, **rates)
    assert below.value == 0.0
    assert clipped


def test_benjamini_hochberg():
    # published example of Benjamini & Hochberg 1995; adjusted values recomputed with scipy
    p = [
        0.0001,
        0.0004,
        0.0019,
        0.0095,
        0.0201,
        0.0278,
        0.0298,
        0.0344,
        0.0459,
        0.3240,
        0.4262,
        0.5719,
        0.6528,
        0.7590,
        1,
    ]
    adjusted = benjamini_hochberg(p)
    expected = [0.0015, 0.003, 0.0095, 0.035625, 0.0603, 0.063857, 0.063857, 0.0645, 0.0765, 0.486]
    assert_allclose(adjusted[:10], expected, atol=5e-7)
    assert (np.sum(adjusted <= 0.05), np.sum(adjusted <= 0.10)) == (4, 9)
    assert_allclose(adjusted, false_discovery_control(p))


def test_fisher_exact():
    # recomputed with scipy; 17/35 exactly
    assert_allclose(fisher_exact_p(3, 1, 1, 3), 17 / 35)
    for table in ([[12, 5], [3, 14]], [[0, 6], [7, 9]], [[5, 0], [0, 5]], [[0, 0], [3, 4]]):
        (a, b), (c, d) = table
        assert_allclose(fisher_exact_p(a, b, c, d), fisher_exact(table).pvalue)


@pytest.mark.parametrize(
    ("n_values", "variance", "kurtosis", "expected"),
    [
        (3, 0.21, 1 / 0.21 - 6, 0.0259),  # Bernoulli(0.3)
        (50, 1.2, (1 - 6 * 0.24) / 1.2, 0.0482155),  # binomial(5, 0.4)
        (50, 1.2, 0.0, 0.0587755),  # its normal formula
        (50, 0.72, (1 - 6 * 0.09) / 0.72, 0.0277832),  # binomial(8, 0.1)
        (50, 0.72, 0.0, 0.0211592),
        (50, 0.21, 1 / 0.21 - 6, 0.000708),  # Bernoulli(0.3)
        (50, 0.21, 0.0, 0.0018),
    ],
)
def test_sampling_variance_of_a_variance(n_values, variance, kurtosis, expected):
    # derived: s⁴ (2 / (n - 1) + K / n)
    assert_allclose(variance_of_variance_from_kurtosis(variance, kurtosis, n=n_values), expected, rtol=2e-6)
