"""Variance against mean of one bouton: estimates, intervals, and words where there is no answer."""

import numpy as np
import pytest

from napari_boutonrelease.errors import InputError
from napari_boutonrelease.quanta import (
    ReleaseVariation,
    fit_parabola,
    fit_variance_mean,
    release_cumulants,
    release_variance,
)

Q, Q_CV = 0.3, 0.3


def variation(**given):
    return ReleaseVariation(
        **({"within_cv": Q_CV, "between_cv": 0.0, "within_sd": "same", "p_cv": 0.0, "p_shape": None} | given)
    )


def sizes(vesicles, rng, *, q=Q, q_cv=Q_CV):
    shape = np.maximum(vesicles, 1e-9) / q_cv**2
    return np.where(vesicles > 0, rng.gamma(shape, q * q_cv**2), 0.0)


def recordings(n_sites, probabilities, *, trials, rng, noise=0.07, q=Q):
    return [
        sizes(rng.binomial(n_sites, p, (trials, 1)), rng, q=q) + rng.normal(0, noise, (trials, 1))
        for p in probabilities
    ]


def fit(amplitudes, *, rng, noise=0.07, n_bootstrap=400, **differ):
    return fit_variance_mean(
        amplitudes,
        [np.full(np.shape(a), noise) for a in amplitudes],
        n_null=[np.inf] * len(amplitudes),
        variation=variation(**differ),
        confidence=0.95,
        n_bootstrap=n_bootstrap,
        rng=rng,
    )


def test_many_trials_give_the_truth():
    rng = np.random.default_rng(1)
    probabilities = [0.15, 0.4, 0.65, 0.9]
    found = fit(recordings(5, probabilities, trials=4000, rng=rng), rng=rng)
    assert found.q.value == pytest.approx(Q, rel=0.04)
    assert found.n_sites == pytest.approx(5, rel=0.06)
    assert [one.value for one in found.p_site] == pytest.approx(probabilities, abs=0.04)
    assert found.n_sites_lo < found.n_sites < found.n_sites_hi
    assert found.bend_p < 0.01
    assert found.fit_p > 0.001
    assert found.reason == ""


def test_sites_whose_probabilities_differ_look_like_small_vesicles_unless_said():
    from scipy.stats import beta

    rng = np.random.default_rng(2)
    shape, n_sites = 1.0, 8
    given = []
    for p in (0.2, 0.5, 0.8):
        of_site = beta.ppf((np.arange(n_sites) + 0.5) / n_sites, shape, shape * (1 - p) / p)
        vesicles = (rng.random((6000, n_sites)) < of_site).sum(axis=1)
        given.append(sizes(vesicles, rng) + rng.normal(0, 0.07, 6000))
    plain, told = fit(given, rng=rng), fit(given, rng=rng, p_shape=shape)
    assert plain.q.value < 0.9 * Q
    assert plain.fit_p < 0.01
    assert told.q.value == pytest.approx(Q, rel=0.06)
    assert told.n_sites == pytest.approx(n_sites, rel=0.08)
    assert told.fit_p > 0.001


def test_pulses_of_a_trial_are_conditions():
    rng = np.random.default_rng(3)
    first = rng.binomial(5, 0.7, 3000)
    second = rng.binomial(5 - first, 0.6)  # a site that has released is empty
    amplitudes = [sizes(np.stack([first, second], axis=1), rng) + rng.normal(0, 0.07, (3000, 2))]
    found = fit(amplitudes, rng=rng)
    assert list(found.pulse) == [0, 1]
    assert found.n_sites == pytest.approx(5, rel=0.1)
    assert [one.value for one in found.p_site] == pytest.approx([0.7, 0.18], abs=0.05)
    assert np.isnan(found.fit_p)
    assert "two conditions" in found.reason


@pytest.mark.parametrize("trials", [60])
def test_intervals_cover(trials):
    rng = np.random.default_rng(4)
    runs = 150
    hits = np.zeros(3)
    for _ in range(runs):
        found = fit(recordings(3, [0.25, 0.5, 0.75], trials=trials, rng=rng), rng=rng, n_bootstrap=300)
        hi = np.inf if found.n_sites_hi is None else found.n_sites_hi
        hits += [
            found.q.lo <= Q <= found.q.hi,
            found.n_sites_lo <= 3 <= hi,
            found.p_site[0].lo <= 0.25 <= found.p_site[0].hi,
        ]
    assert np.all(hits / runs > 0.87)  # 0.95 less four and a half standard errors


@pytest.mark.validation
@pytest.mark.parametrize(
    ("n_sites", "probabilities", "noise", "trials"),
    [
        (1, (0.3, 0.8), 0.07, 60),
        (2, (0.2, 0.5, 0.8), 0.07, 60),
        (5, (0.2, 0.5, 0.8), 0.07, 80),
        (5, (0.2, 0.5, 0.8), 0.07, 200),
        (8, (0.1, 0.3, 0.5, 0.7, 0.9), 0.1, 60),
    ],
)
def test_intervals_cover_in_many_boutons(n_sites, probabilities, noise, trials):
    rng = np.random.default_rng(5)
    runs = 1500
    hits = np.zeros(2 + len(probabilities))
    for _ in range(runs):
        amplitudes = recordings(n_sites, probabilities, trials=trials, rng=rng, noise=noise)
        found = fit(amplitudes, rng=rng, noise=noise, n_bootstrap=600)
        if np.isnan(found.q.value):
            hits += 0.95
            continue
        hi = np.inf if found.n_sites_hi is None else found.n_sites_hi
        hits += [
            found.q.lo <= Q <= found.q.hi,
            not found.n_sites_lo > n_sites and n_sites <= hi,
            *(one.lo <= p <= one.hi for one, p in zip(found.p_site, probabilities, strict=True)),
        ]
    assert np.all(np.abs(hits / runs - 0.95) < 0.02 + 3.3 * np.sqrt(0.05 * 0.95 / runs))


def test_scaling_amplitudes_scales_q_alone():
    given = recordings(4, [0.2, 0.5, 0.8], trials=80, rng=np.random.default_rng(6))
    one = fit(given, rng=np.random.default_rng(7))
    ten = fit([10 * a for a in given], rng=np.random.default_rng(7), noise=0.7)
    assert ten.q.value == pytest.approx(10 * one.q.value)
    assert ten.n_sites == pytest.approx(one.n_sites)
    assert ten.bend_p == one.bend_p


def test_unequal_noise_is_taken_off_trial_by_trial():
    rng = np.random.default_rng(8)
    clean = recordings(4, [0.2, 0.5, 0.8], trials=3000, rng=rng, noise=0.0)
    sds = [rng.choice([0.05, 0.25], a.shape) for a in clean]
    noisy = [a + sd * rng.standard_normal(a.shape) for a, sd in zip(clean, sds, strict=True)]
    found = fit_variance_mean(
        noisy, sds, n_null=[np.inf] * 3, variation=variation(), confidence=0.95, n_bootstrap=200, rng=rng
    )
    assert found.q.value == pytest.approx(Q, rel=0.06)
    expected = release_variance(np.array([0.24, 0.6, 0.96]), q=Q, n_sites=4, variation=variation())
    np.testing.assert_allclose(found.variance, expected, rtol=0.1)


def test_noise_that_is_ill_known_widens_intervals():
    given = recordings(4, [0.2, 0.5, 0.8], trials=80, rng=np.random.default_rng(9), noise=0.2)

    def width(n_null):
        found = fit_variance_mean(
            given, [np.full(a.shape, 0.2) for a in given], n_null=[n_null] * 3, variation=variation(),
            confidence=0.95, n_bootstrap=2000, rng=np.random.default_rng(10),
        )  # fmt: skip
        return found.q.hi - found.q.lo

    assert width(5) > 1.15 * width(np.inf)


def test_missing_amplitudes_are_left_out():
    rng = np.random.default_rng(11)
    pulses = sizes(rng.binomial(4, [0.7, 0.3], (400, 2)), rng) + rng.normal(0, 0.07, (400, 2))
    pulses[rng.random((400, 2)) < 0.2] = np.nan
    found = fit([pulses], rng=rng)
    np.testing.assert_allclose(found.mean, np.nanmean(pulses, axis=0))
    np.testing.assert_allclose(found.variance, np.nanvar(pulses, axis=0, ddof=1) - 0.07**2)


def test_low_probabilities_give_a_lower_limit_of_sites():
    rng = np.random.default_rng(12)
    found = fit(recordings(10, [0.02, 0.04, 0.08], trials=60, rng=rng), rng=rng)
    assert found.n_sites is None
    assert found.n_sites_hi is None
    assert found.n_sites_lo > 0
    assert "not bent enough" in found.reason
    assert found.q.lo < Q < found.q.hi
    assert all(one.lo == 0.0 and np.isnan(one.value) and 0 < one.hi <= 1 for one in found.p_site)


@pytest.mark.parametrize(
    ("probabilities", "trials", "noise", "words"),
    [
        ([0.5], 60, 0.07, "fewer than two conditions"),
        ([0.5, 0.6], 4, 0.07, "fewer than two conditions"),
        ([0.0, 0.0], 60, 0.07, "within noise of zero"),
        ([0.5, 0.5], 60, 0.07, "do not differ"),
    ],
)
def test_no_answer_comes_in_words(probabilities, trials, noise, words):
    rng = np.random.default_rng(14)
    found = fit(recordings(3, probabilities, trials=trials, rng=rng, noise=noise), rng=rng, noise=noise)
    assert words in found.reason
    assert found.n_sites is None
    assert np.isnan(found.q.value)
    assert words in found.q.method
    assert len(found.p_site) == len(probabilities)


def test_variance_below_noise_comes_in_words():
    rng = np.random.default_rng(15)
    given = recordings(3, [0.2, 0.8], trials=60, rng=rng)
    found = fit(given, rng=rng, noise=1.0)
    assert "no more than the noise" in found.reason
    assert np.isnan(found.q.value)


def test_equal_amplitudes_come_in_words():
    found = fit([np.full((20, 1), 0.1), np.full((20, 1), 0.4)], rng=np.random.default_rng(1))
    assert "are equal" in found.reason


def test_nothing_measured_comes_in_words():
    found = fit([np.full((20, 2), np.nan)], rng=np.random.default_rng(1))
    assert "fewer than two" in found.reason
    assert np.isnan(found.mean).all()


@pytest.mark.parametrize("within_sd", ["same", "proportional"])
def test_cumulants_are_those_of_the_sites_one_by_one(within_sd):
    from scipy.stats import gamma

    between, within, p = 0.3, 0.4, 0.35
    means = gamma.ppf((np.arange(20_000) + 0.5) / 20_000, between**-2, scale=between**2)
    scale = means if within_sd == "proportional" else 1.0
    centred = [0.0, within**2 * scale**2, 2 * within**4 * scale**3, (3 * within**4 + 6 * within**6) * scale**4]
    m1, m2 = means, means**2 + centred[1]
    m3 = means**3 + 3 * means * centred[1] + centred[2]
    m4 = means**4 + 6 * means**2 * centred[1] + 4 * means * centred[2] + centred[3]
    m1, m2, m3, m4 = (p * m for m in (m1, m2, m3, m4))
    expected = [
        m1,
        m2 - m1**2,
        m3 - 3 * m2 * m1 + 2 * m1**3,
        m4 - 4 * m3 * m1 - 3 * m2**2 + 12 * m2 * m1**2 - 6 * m1**4,
    ]
    differ = variation(within_cv=within, between_cv=between, within_sd=within_sd)
    found = release_cumulants(p, q=1.0, n_sites=1, variation=differ)
    np.testing.assert_allclose(found, [one.mean() for one in expected], rtol=2e-3, atol=1e-3)


def test_bad_input_is_refused():
    rng = np.random.default_rng(1)
    settings = {"variation": variation(), "confidence": 0.95, "rng": rng}
    with pytest.raises(InputError, match="one entry a recording"):
        fit_variance_mean([], [], n_null=[], n_bootstrap=200, **settings)
    with pytest.raises(InputError, match="same shape"):
        fit_variance_mean([np.zeros((3, 2))], [np.zeros(3)], n_null=[9], n_bootstrap=200, **settings)
    with pytest.raises(InputError, match="at least 100"):
        fit_variance_mean([np.zeros(9)], [np.zeros(9)], n_null=[9], n_bootstrap=10, **settings)
    with pytest.raises(InputError, match="either p_cv or p_shape"):
        variation(p_cv=0.2, p_shape=1.0)
    with pytest.raises(InputError, match="'same' or 'proportional'"):
        variation(within_sd="other")
    with pytest.raises(InputError, match="two different means"):
        fit_parabola([1.0, 1.0], [2.0, 2.0], weights=[1.0, 1.0])
