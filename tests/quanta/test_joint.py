"""One bouton over pulses and recordings. Its statistics are in tests/recovery."""

import numpy as np
import pytest

from napari_boutonrelease.errors import InputError
from napari_boutonrelease.quanta import JointData, LogPrior, fit_joint, gamma_vesicles_logpdf

NOISE = 0.1


def record(rng, *, n_sites, p_site, q, trials=80, q_cv=0.3):
    vesicles = rng.binomial(n_sites, p_site, (trials, len(p_site)))
    sizes = rng.gamma(np.maximum(vesicles, 1) / q_cv**2) * q_cv**2 * (vesicles > 0)
    return data(q * sizes + rng.normal(0, NOISE, vesicles.shape))


def data(amplitude, *, noise=NOISE, n_null=300):
    return JointData(amplitude=amplitude, amplitude_sd=np.full(np.shape(amplitude), noise), n_null=n_null)


def fit(recordings, *, n_max=5, q_cv=0.3, q_cv_doubt=0.15, q_prior=None, confidence=0.95):
    return fit_joint(recordings, n_max=n_max, q_cv=q_cv, q_cv_doubt=q_cv_doubt, q_prior=q_prior, confidence=confidence)


def estimates(table):
    return [one for row in table for one in row]


@pytest.fixture(scope="module")
def calcium():
    """A bouton of three sites at low and high release, with its joint fit."""
    rng = np.random.default_rng(4)
    recordings = [record(rng, n_sites=3, p_site=p, q=0.5, trials=150) for p in ((0.15, 0.25), (0.7, 0.5))]
    return recordings, fit(recordings)


def test_sites_size_and_probability_are_recovered(calcium):
    _, found = calcium
    assert found.n_sites in (2, 3, 4)
    assert 3 in found.n_set
    assert found.n_sites_lo <= found.n_sites <= found.n_sites_hi
    assert found.q.lo < found.q.value < found.q.hi
    assert found.q.value == pytest.approx(0.5, rel=0.15)
    p_site = np.array([0.15, 0.25, 0.7, 0.5])
    for table, truth in ((found.p_site, p_site), (found.p_release, 1 - (1 - p_site) ** 3)):
        # four intervals of 95 %: two missing have a chance of 1 %, three of 5e-4
        assert sum(one.lo <= p <= one.hi for one, p in zip(estimates(table), truth, strict=True)) >= 2
        assert all(0 <= one.lo <= one.value <= one.hi <= 1 for one in estimates(table))
    assert found.noise_scale == pytest.approx(1.0, abs=0.2)
    assert found.shared_q
    assert found.n_trials == (150, 150)


def test_the_ratio_of_two_vesicles_is_known_better_than_either():
    rng = np.random.default_rng(8)
    # four sites at a middling release probability: n_sites, and with it either q, stays open; their ratio does not
    found = fit([record(rng, n_sites=4, p_site=(0.4, 0.4), q=q) for q in (0.4, 0.3)], n_max=8)
    one, other = found.q_by_recording
    assert len(found.n_set) > 1
    assert found.q_ratio.value == pytest.approx(other.value / one.value)
    assert found.q_ratio.lo < 0.75 < found.q_ratio.hi
    width = np.log(found.q_ratio.hi / found.q_ratio.lo)
    apart = np.hypot(np.log(other.hi / other.lo), np.log(one.hi / one.lo))
    assert width < 0.85 * apart


def test_the_interval_of_the_ratio_ends_where_its_test_says():
    rng = np.random.default_rng(9)
    for _ in range(4):
        found = fit([record(rng, n_sites=1, p_site=(0.5,), q=q, trials=60) for q in (0.4, 0.33)], n_max=1)
        excluded = not found.q_ratio.lo <= 1.0 <= found.q_ratio.hi
        assert excluded == (found.q_changed_p < 0.05)


def test_a_change_of_release_is_told_from_one_of_vesicle_size(calcium):
    _, found = calcium
    assert found.changed == "p"
    assert found.changed_p < 1e-6
    assert found.p_changed_p < 1e-6
    assert found.q_changed_p > 0.01
    likelihood = found.log_likelihood
    assert likelihood["none"] <= min(likelihood["p"], likelihood["q"])
    assert max(likelihood["p"], likelihood["q"]) <= likelihood["both"] + 1e-3
    rng = np.random.default_rng(5)
    smaller = fit([record(rng, n_sites=2, p_site=(0.5, 0.4), q=q, trials=150) for q in (0.6, 0.3)])
    assert smaller.changed == "q"
    assert smaller.q_changed_p < 1e-6
    assert smaller.p_changed_p > 0.01
    assert not smaller.shared_q
    one, other = smaller.q_by_recording
    assert one.lo > other.hi
    assert smaller.q_ratio.lo < 0.5 < smaller.q_ratio.hi < 1.0
    both = fit([record(rng, n_sites=2, p_site=(p,), q=q, trials=200) for p, q in ((0.15, 0.8), (0.8, 0.4))])
    assert both.changed == "both"
    assert "neither" in both.reason


def density(amplitude, *, n_sites, p, q, q_cv, noise):
    """Log-likelihood by its definition."""
    from scipy.stats import binom, norm

    m = np.arange(n_sites + 1)[:, None]
    each = gamma_vesicles_logpdf(amplitude, vesicles=m, q=q, q_cv=q_cv, noise_sd=noise)
    each[0] = norm.logpdf(amplitude, 0, noise)
    return np.logaddexp.reduce(np.log(binom.pmf(m, n_sites, p)) + each, axis=0).sum()


@pytest.mark.parametrize(("kind", "n_free"), [("none", 6), ("p", 8), ("q", 7), ("both", 9)])
def test_maxima_are_those_of_a_general_optimiser(calcium, kind, n_free):
    from scipy.optimize import minimize

    recordings, _ = calcium
    recordings = [data(np.asarray(one.amplitude)[:40]) for one in recordings]
    found = fit(recordings, n_max=1 if kind == "none" else 2)
    n_sites = found.n_sites

    def cost(x):
        q = np.exp(x[:2]) if kind in ("q", "both") else np.exp([x[0], x[0]])
        x = x[2 if kind in ("q", "both") else 1 :]
        q_cv, scale, p = np.exp(x[0]), np.exp(x[1:3]), x[3:]
        p = p.reshape(2, 2) if kind in ("p", "both") else np.tile(p, (2, 1))
        doubt = np.hypot(np.sqrt(0.5 / 300), 0.02)
        total = -0.5 * (np.log(q_cv / 0.3) / 0.15) ** 2 - 0.5 * np.sum((x[1:3] / doubt) ** 2)
        for r, one in enumerate(recordings):
            for j in range(2):
                total += density(
                    one.amplitude[:, j], n_sites=n_sites, p=p[r, j], q=q[r], q_cv=q_cv, noise=scale[r] * NOISE
                )
        return -total

    best = np.inf
    for log_q, p in ((np.log(0.5), 0.5), (np.log(1.0), 0.3), (np.log(0.7), 0.7)):
        n_q, n_p = (2 if kind in ("q", "both") else 1), (4 if kind in ("p", "both") else 2)
        start = np.concatenate([np.full(n_q, log_q), [np.log(0.3), 0.0, 0.0], np.full(n_p, p)])
        assert start.size == n_free
        bounds = [(-2.0, 1.0)] * n_q + [(np.log(0.165), np.log(0.546))] + [(-0.5, 0.5)] * 2 + [(1e-6, 1 - 1e-6)] * n_p
        best = min(best, minimize(cost, start, method="L-BFGS-B", bounds=bounds).fun)
    assert found.log_likelihood[kind] + np.log(n_sites) == pytest.approx(-best, abs=0.02)


def test_an_interval_ends_where_the_profile_likelihood_has_fallen(calcium):
    recordings, _ = calcium
    recordings = [data(np.asarray(one.amplitude)[:, :1]) for one in recordings]
    found = fit(recordings, n_max=1)
    top = found.log_likelihood["p"]
    # a prior so narrow that it holds q at the end of the interval, its own density aside
    for end in (found.q.lo, found.q.hi):
        held = fit(recordings, n_max=1, q_prior=LogPrior(centre=end, log_sd=1e-4))
        assert top - held.log_likelihood["p"] == pytest.approx(1.92, abs=0.12)
    assert found.q.lo < found.q.value < found.q.hi


def test_order_and_unit_do_not_matter(calcium):
    recordings, found = calcium
    turned = fit(recordings[::-1])
    assert turned.n_set == found.n_set
    np.testing.assert_allclose(turned.n_objective, found.n_objective, atol=0.01)
    assert turned.q_changed_p == pytest.approx(found.q_changed_p, abs=0.01)
    for one, other in zip(estimates(turned.p_release[::-1]), estimates(found.p_release), strict=True):
        assert one.value == pytest.approx(other.value, abs=0.005)
        assert one.lo == pytest.approx(other.lo, abs=0.01)
    scaled = fit([data(50 * np.asarray(one.amplitude), noise=50 * NOISE) for one in recordings])
    assert scaled.n_set == found.n_set
    assert scaled.q.value == pytest.approx(50 * found.q.value, rel=0.01)


def test_a_prior_of_q_tells_sites_apart(calcium):
    recordings, _ = calcium
    alone = fit(recordings[:1])
    helped = fit(recordings[:1], q_prior=LogPrior(centre=0.5, log_sd=0.05))
    assert helped.q.hi / helped.q.lo < alone.q.hi / alone.q.lo
    assert helped.q.lo < 0.5 < helped.q.hi


def test_one_recording_and_one_pulse():
    rng = np.random.default_rng(6)
    found = fit([record(rng, n_sites=1, p_site=(0.4,), q=0.5)])
    assert found.changed is None
    assert "one recording" in found.reason
    assert np.isnan([found.changed_p, found.p_changed_p, found.q_changed_p]).all()
    assert found.q_by_recording == (found.q,)
    assert found.p_release[0][0].lo < 0.4 < found.p_release[0][0].hi


def test_a_silent_bouton_has_upper_limits_only():
    rng = np.random.default_rng(7)
    found = fit([data(rng.normal(0, NOISE, (80, 2))) for _ in range(2)])
    assert "silent" in found.flags
    assert "n_unresolved" not in found.flags
    assert found.n_sites is None
    assert found.n_set == (1, 2, 3, 4, 5)
    assert found.changed is None
    assert "no release" in found.reason
    assert np.isnan(found.q.value)
    for one in estimates(found.p_release):
        assert one.value == one.lo == 0
        assert 0 < one.hi < 0.7
    known = fit([data(rng.normal(0, NOISE, (80, 2))) for _ in range(2)], q_prior=LogPrior(centre=0.5, log_sd=0.1))
    # 80 failures in 80 trials: exact one-sided 97.5 % limit 0.045
    assert all(one.hi < 0.07 for one in estimates(known.p_release))


def test_a_condition_without_release_is_one():
    rng = np.random.default_rng(8)
    found = fit([record(rng, n_sites=2, p_site=(0.5, 0.4), q=0.5), data(rng.normal(0, NOISE, (80, 2)))])
    assert found.changed == "p"
    for one in found.p_release[1]:
        assert one.lo == 0
        assert one.hi < 0.1


def test_a_bouton_that_never_fails_has_no_upper_limit():
    rng = np.random.default_rng(9)
    found = fit([record(rng, n_sites=1, p_site=(1.0,), q=0.8, q_cv=0.1)], q_cv=0.1, n_max=1)
    assert found.p_release[0][0].hi == 1
    assert found.p_release[0][0].lo > 0.9


@pytest.mark.filterwarnings("error")
@pytest.mark.parametrize("value", [np.nan, 0.3], ids=["missing", "all equal"])
def test_amplitudes_that_allow_no_fit(value):
    found = fit([data(np.full((30, 2), value)), data(np.full((30, 2), value))])
    assert found.n_sites is None
    assert found.n_set == ()
    assert found.changed is None
    assert "too few amplitudes" in found.reason
    assert all(np.isnan(one.value) for one in estimates(found.p_site))
    assert np.isnan(found.n_objective).all()


def test_a_recording_or_pulse_without_amplitudes_does_no_harm(calcium):
    recordings, found = calcium
    holes = [recordings[0], data(np.full((20, 2), np.nan)), recordings[1]]
    with_hole = fit(holes)
    assert with_hole.n_set == found.n_set
    assert with_hole.changed == "p"
    assert with_hole.n_trials == (150, 0, 150)
    assert "few_trials" in with_hole.flags
    assert np.isnan(with_hole.q_by_recording[1].value)
    assert np.isnan(with_hole.noise_scale[1])
    assert np.isnan(with_hole.p_release[1][0].value)
    assert with_hole.p_release[2][0].value == pytest.approx(found.p_release[1][0].value, abs=1e-3)
    first, second = (np.array(one.amplitude) for one in recordings)
    first[:, 1], second[:, 0] = np.nan, np.nan
    nothing_shared = fit([data(first), data(second)])
    assert nothing_shared.changed is None
    assert "no pulse was measured in two recordings" in nothing_shared.reason


def test_recordings_may_differ_in_trials_and_pulses():
    rng = np.random.default_rng(10)
    found = fit(
        [
            record(rng, n_sites=2, p_site=(0.3, 0.4), q=0.5, trials=60),
            record(rng, n_sites=2, p_site=(0.7,), q=0.5, trials=90),
        ]
    )
    assert [len(row) for row in found.p_site] == [2, 1]
    assert found.changed == "p"


def test_wrong_input_is_named():
    good = data(np.ones((5, 1)))
    with pytest.raises(InputError, match="at least one recording"):
        fit([])
    with pytest.raises(InputError, match=r"amplitude \(5, 1\) and amplitude_sd \(4, 1\) of recording 2"):
        fit([good, JointData(amplitude=np.ones((5, 1)), amplitude_sd=np.ones((4, 1)), n_null=9)])
    with pytest.raises(InputError, match="amplitude of recording 1 must have 2 axes"):
        fit([data(np.ones(5))])
    with pytest.raises(InputError, match="n_max must be at least 1"):
        fit([good], n_max=0)
    with pytest.raises(InputError, match="q_cv_doubt must be greater than 0"):
        fit([good], q_cv_doubt=0.0)
    with pytest.raises(InputError, match="log_sd of q_prior must be greater than 0"):
        fit([good], q_prior=LogPrior(centre=1.0, log_sd=0.0))
    with pytest.raises(InputError, match="confidence must lie between 0 and 1"):
        fit([good], confidence=95)
