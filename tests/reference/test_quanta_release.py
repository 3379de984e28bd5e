"""Release models against published data and independent fits.

Status beside each number: published (read in the paper or a copy of its table), recomputed (by the library named),
derived (exact arithmetic), from memory.
"""

import numpy as np
import pytest
from numpy.testing import assert_allclose
from scipy.stats import binom, norm, poisson
from sklearn.mixture import GaussianMixture

from napari_boutonrelease.quanta import (
    LogPrior,
    ReleasePriors,
    binomial_failures,
    binomial_log_weights,
    binomial_moments,
    direct_vesicles,
    fieller_interval,
    fit_binomial,
    fit_poisson_histogram,
    measure_pulse_pair,
    mixture_loglikelihood,
    poisson_failures,
    poisson_log_weights,
    vesicles_from_cv,
)

# Boyd & Martin 1956, end-plate potentials in mV: class counts as read off the figures by a published teaching script
SPONTANEOUS = {0.2: 1, 0.3: 25, 0.4: 30, 0.5: 20, 0.6: 2}
EVOKED = {
    0.3: 11, 0.4: 20, 0.5: 13, 0.6: 6, 0.7: 14, 0.8: 18, 0.9: 17, 1.0: 6, 1.1: 11, 1.2: 10, 1.3: 9, 1.4: 4, 1.5: 7,
    1.6: 9, 1.7: 5, 1.8: 5, 1.9: 3, 2.0: 2, 2.1: 2, 2.2: 1, 2.3: 1, 2.4: 2, 2.5: 1, 2.6: 1, 2.7: 1, 3.0: 1,
}  # fmt: skip
FAILURES = 18


def expanded(histogram, zeros=0):
    return np.concatenate([np.zeros(zeros), np.repeat(list(histogram), list(histogram.values()))])


def test_boyd_martin_moments():
    # recomputed with numpy
    spontaneous, evoked = expanded(SPONTANEOUS), expanded(EVOKED, FAILURES)
    assert (spontaneous.size, evoked.size) == (78, 198)
    assert_allclose(
        (spontaneous.mean(), spontaneous.std(ddof=1), evoked.mean(), evoked.var(ddof=1)),
        (0.3961538, 0.0859512, 0.9328283, 0.3769371),
        atol=1e-7,
    )


def test_boyd_martin_quantal_content():
    # published: 2.33 direct (q rounded to 0.4 mV), 2.40 from failures; more digits recomputed with numpy
    spontaneous, evoked = expanded(SPONTANEOUS), expanded(EVOKED, FAILURES)
    q, q_cv = spontaneous.mean(), spontaneous.std(ddof=1) / spontaneous.mean()
    q_se = spontaneous.std(ddof=1) / np.sqrt(spontaneous.size)
    direct = direct_vesicles(evoked, q=q, q_se=q_se, confidence=0.95)
    assert_allclose(direct.value, 2.354712, atol=1e-5)
    assert_allclose(direct_vesicles(evoked, q=0.4, q_se=0.0, confidence=0.95).value, 2.332, atol=1e-3)
    failures = poisson_failures(FAILURES, 198, confidence=0.95)
    assert_allclose((failures.value, failures.se), (2.397895, 0.224733), atol=1e-5)
    plain = vesicles_from_cv(evoked, noise_sd=0.0, q_cv=0.0, confidence=0.95)
    corrected = vesicles_from_cv(evoked, noise_sd=0.0, q_cv=q_cv, confidence=0.95)
    assert_allclose((plain.value, corrected.value), (2.308524, 2.417195), atol=1e-5)


def test_boyd_martin_expected_counts():
    # recomputed with scipy, m = 2.33, N = 198
    expected = [19.265, 44.886, 52.293, 40.614, 23.658, 11.024, 4.281, 1.425]
    assert_allclose(198 * np.exp(poisson_log_weights(2.33, m_max=7)), expected, atol=1e-3)


def test_boyd_martin_mixture_of_the_histogram():
    # recomputed: scipy and iminuit agree
    fit = fit_poisson_histogram(list(EVOKED), list(EVOKED.values()), n_failures=FAILURES, class_width=0.1, m_max=39)
    assert_allclose((fit.mean_vesicles, fit.q, fit.q_sd), (2.33565, 0.39932, 0.07488), atol=2e-4)
    assert_allclose(fit.log_likelihood, -592.06874, atol=1e-4)
    assert_allclose((fit.mean_vesicles_se, fit.q_se, fit.q_sd_se), (0.115, 0.0074, 0.0067), rtol=0.01)
    assert fit.converged
    assert fit.n_trials == 198


def test_ten_junctions_by_both_methods():
    # published (read in a secondary copy); correlation and slope recomputed with numpy
    direct = np.array([3.36, 2.89, 2.64, 2.33, 1.86, 1.50, 1.15, 1.04, 0.58, 0.38])
    failures = np.array([3.22, 3.19, 2.72, 2.40, 1.95, 1.48, 1.08, 1.08, 0.59, 0.31])
    n = 200_000  # enough trials that counting the failures of each m gives it back
    counted = [poisson_failures(round(n * np.exp(-m)), n, confidence=0.95).value for m in failures]
    assert_allclose(np.corrcoef(direct, counted)[0, 1], 0.993966, atol=2e-5)
    assert_allclose(direct @ counted / (direct @ direct), 1.020884, atol=2e-5)


def test_failures_of_five_sites():
    # derived
    p_release = 1 - np.exp(binomial_log_weights(0.4, n_sites=5, m_max=0))[0]
    assert_allclose(p_release, 0.92224, atol=1e-12)
    assert_allclose(binomial_failures(7776, 100_000, n_sites=5, confidence=0.95).value, 0.4, atol=1e-12)


def profile_over_n(counts, n_values):
    """Log likelihood of binomial counts at each n, with p at its maximum."""
    counts = np.asarray(counts)
    scores = []
    for n in n_values:
        weights = binomial_log_weights(counts.mean() / n, n_sites=n, m_max=int(counts.max()))
        scores.append(weights[counts].sum())
    return np.array(scores)


def test_number_of_sites_from_counts_is_unstable():
    # published and recomputed: Olkin, Petkau & Zidek 1981
    counts = np.array([16, 18, 22, 25, 27])
    n_values = np.arange(27, 400)
    scores = profile_over_n(counts, n_values)
    assert n_values[scores.argmax()] == 99
    assert_allclose(scores.max(), -14.181119, atol=1e-6)
    assert_allclose(poisson_log_weights(counts.mean(), m_max=27)[counts].sum(), -14.248753, atol=1e-6)
    assert_allclose(binomial_moments(counts.mean(), counts.var())[0], 102.32, atol=5e-3)
    assert_allclose(binomial_moments(counts.mean(), counts.var(ddof=1))[0], 1555.2, atol=0.05)
    counts[-1] = 28
    assert 190 <= n_values[profile_over_n(counts, n_values).argmax()] <= 192
    assert_allclose(binomial_moments(counts.mean(), counts.var())[0], 194.77, atol=5e-3)
    assert_allclose(binomial_moments(counts.mean(), counts.var(ddof=1))[0], -198.0, atol=0.05)


WELDON = [
    185,
    1149,
    3265,
    5475,
    6114,
    5194,
    3067,
    1331,
    403,
    105,
    14,
    4,
    0,
]  # published; the split 14, 4, 0 from memory


def test_weldons_dice_have_twelve_dice():
    # recomputed with scipy
    throws = np.repeat(np.arange(13), WELDON)
    assert (throws.size, throws.sum()) == (26_306, 106_602)
    n_sites, p_site = binomial_moments(throws.mean(), throws.var(ddof=1))
    assert_allclose((p_site, n_sites), (0.334154, 12.12729), atol=1e-5)
    scores = profile_over_n(throws, np.arange(11, 16))
    assert scores.argmax() == 1
    assert_allclose(scores.max(), -50241.6591, atol=1e-3)
    for p, expected in ((1 / 3, 35.4943), (106_602 / (12 * 26_306), 8.1798)):
        likely = 26_306 * np.exp(binomial_log_weights(p, n_sites=12, m_max=12))
        pooled = np.append(likely[:10], likely[10:].sum())
        seen = np.append(WELDON[:10], sum(WELDON[10:]))
        assert_allclose(((seen - pooled) ** 2 / pooled).sum(), expected, atol=1e-3)


def test_rutherford_geiger_alpha_particles():
    # counts published 1910; statistics recomputed with scipy
    seen = np.array([57, 203, 383, 525, 532, 408, 273, 139, 45, 27, 10, 4, 0, 1, 1])
    counts = np.repeat(np.arange(15), seen)
    assert (counts.size, counts.sum()) == (2608, 10_097)
    assert_allclose((counts.mean(), counts.var(ddof=1)), (3.871549, 3.696191), atol=1e-6)
    weights = poisson_log_weights(counts.mean(), m_max=14)
    assert_allclose(weights[counts].sum(), -5352.10502, atol=1e-4)
    assert_allclose(2608 * np.exp(weights[:6]), [54.31, 210.28, 407.06, 525.31, 508.44, 393.69], atol=5e-3)
    likely = 2608 * np.append(np.exp(weights[:11]), poisson.sf(10, counts.mean()))
    assert_allclose(((np.append(seen[:11], seen[11:].sum()) - likely) ** 2 / likely).sum(), 12.9613, atol=1e-3)


@pytest.mark.parametrize(
    ("seen", "mean", "from_failures"),
    [([213, 128, 37, 18, 3, 1], 0.6825, 0.630172), ([103, 143, 98, 42, 8, 4, 2], 1.3225, 1.356736)],
)
def test_students_yeast(seen, mean, from_failures):
    # counts published (Student 1907); estimates recomputed with numpy. In the first plate over-dispersion parts them.
    cells = np.repeat(np.arange(len(seen)), seen)
    assert_allclose(cells.mean(), mean, atol=1e-6)
    assert_allclose(poisson_failures(seen[0], cells.size, confidence=0.95).value, from_failures, atol=1e-6)


OLD_FAITHFUL = {
    43: 1, 45: 3, 46: 5, 47: 4, 48: 3, 49: 5, 50: 5, 51: 6, 52: 5, 53: 7, 54: 9, 55: 6, 56: 4, 57: 3, 58: 4, 59: 7,
    60: 6, 62: 4, 63: 3, 64: 4, 65: 3, 66: 2, 67: 1, 68: 1, 69: 2, 70: 4, 71: 5, 72: 1, 73: 7, 74: 6, 75: 8, 76: 9,
    77: 12, 78: 15, 79: 10, 80: 8, 81: 13, 82: 12, 83: 14, 84: 10, 85: 6, 86: 6, 87: 2, 88: 6, 89: 3, 90: 6, 91: 1,
    92: 1, 93: 2, 94: 1, 96: 1,
}  # fmt: skip


@pytest.mark.parametrize(
    ("weight", "means", "sds", "score"),
    [
        (0.3608498, (54.61364, 80.09031), (5.869089, 5.869089), -1034.00176),  # Benaglia et al. 2009 (published)
        (0.360886, (54.61486, 80.09107), (5.87122, 5.86773), -1034.00175),  # published, recomputed with scikit-learn
    ],
)
def test_mixture_score_of_old_faithful(weight, means, sds, score):
    waiting = expanded(OLD_FAITHFUL)
    assert (waiting.size, waiting.sum()) == (272, 19_284)
    components = norm.logpdf(waiting, np.array(means)[:, None], np.array(sds)[:, None])
    ours = mixture_loglikelihood(np.log([weight, 1 - weight]), components).sum()
    assert_allclose(ours, score, atol=1e-4)


def test_one_site_agrees_with_a_free_gaussian_mixture():
    # one site without quantal variation is a mixture of two normals of one SD, which scikit-learn fits by EM; its
    # first mean is free, ours is 0 and known from the nulls: shift the sample so that both agree
    rng = np.random.default_rng(8)
    amplitudes = rng.binomial(1, 0.4, 4000) + rng.normal(0, 0.2, 4000)
    mixture = GaussianMixture(2, covariance_type="tied", tol=1e-9, max_iter=2000, random_state=0)
    mixture.fit(amplitudes[:, None])
    low, high = np.sort(mixture.means_.ravel())
    priors = ReleasePriors(q=None, q_cv=LogPrior(centre=0.02, log_sd=0.0), noise=None)
    fit = fit_binomial(
        amplitudes - low, [], relative_noise=None, n_sites=1, priors=priors, confidence=0.95, n_bootstrap=0, rng=rng
    )
    assert_allclose(fit.p_site.value, mixture.weights_[mixture.means_.argmax()], atol=2e-3)
    assert_allclose(fit.q.value, high - low, atol=2e-3)
    assert_allclose(fit.noise_sd, np.sqrt(mixture.covariances_[0, 0]), atol=2e-3)


def test_mean_of_ratios_is_biased_and_ratio_of_means_is_not():
    # derived; statement published (Kim & Alger 2001). Both pulses independent and uniform on {1, 2, 3}
    first, second = (values.ravel() for values in np.meshgrid([1.0, 2.0, 3.0], [1.0, 2.0, 3.0]))
    assert_allclose((second / first).mean(), 1.222222, atol=1e-6)
    pair = measure_pulse_pair(
        first, second, noise_sd=0.1, confidence=0.95, n_bootstrap=200, rng=np.random.default_rng(1)
    )
    assert pair.ratio_of_means == pytest.approx(1.0)


@pytest.mark.parametrize(
    ("n_sites", "p_site", "expected"),
    [(1, 0.3, 0.3), (3, 0.3, 0.745890), (5, 0.4, 1.149480), (10, 0.4, 1.213081), (50, 0.4, 1.032738)],
)
def test_dropping_failures_biases_the_mean_of_ratios_either_way(n_sites, p_site, expected):
    # derived: E[A2] E[1/A1 | A1 > 0] of identical binomial releases, with our release weights
    weights = np.exp(binomial_log_weights(p_site, n_sites=n_sites, m_max=n_sites))
    assert_allclose(weights, binom.pmf(np.arange(n_sites + 1), n_sites, p_site), atol=1e-12)
    inverse = (weights[1:] / np.arange(1, n_sites + 1)).sum() / weights[1:].sum()
    assert_allclose(n_sites * p_site * inverse, expected, atol=1e-6)


DRUG_1 = [0.7, -1.6, -0.2, -1.2, -0.1, 3.4, 3.7, 0.8, 0.0, 2.0]  # Student's sleep data (published)
DRUG_2 = [1.9, 0.8, 1.1, 0.1, -0.1, 4.4, 5.5, 1.6, 4.6, 3.4]


def test_fieller_bounded():
    # recomputed by inverting scipy `ttest_1samp(y - r x)`
    interval = fieller_interval(DRUG_1, DRUG_2, confidence=0.95)
    assert_allclose((interval.ratio, interval.g), (0.3218884, 0.3778938), atol=1e-7)
    assert_allclose((interval.lo, interval.hi), (-0.4849198, 0.6565967), atol=1e-6)
    assert interval.bounded
    assert interval.excluded is None


def test_fieller_unbounded():
    # recomputed as above: the set is everything outside these two numbers
    interval = fieller_interval(DRUG_2, DRUG_1, confidence=0.95)
    assert_allclose((interval.ratio, interval.g), (3.1066667, 2.9117), rtol=1e-5)
    assert not interval.bounded
    assert (interval.lo, interval.hi) == (-np.inf, np.inf)
    assert_allclose(interval.excluded, (-2.0621968, 1.5230050), atol=1e-6)
