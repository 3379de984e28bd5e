"""The release of all boutons of an axon together. Its statistics are in tests/recovery."""

import numpy as np
import pytest

from napari_boutonrelease.errors import InputError
from napari_boutonrelease.quanta.whole_axon.pooled import fit_axon_release

NOISE = 0.1


def draw_axon(rng, *, n_sites, p_release, q, n_trials=80, n_pulses=1, q_cv=0.3):
    """Amplitudes (bouton, trial, pulse) of boutons with gamma-distributed vesicles, and the vesicles released."""
    n_sites, p_release, q = (np.asarray(values)[:, None, None] for values in (n_sites, p_release, q))
    p_site = 1 - (1 - p_release) ** (1 / n_sites)
    vesicles = rng.binomial(n_sites, p_site, (len(n_sites), n_trials, n_pulses))
    shape = 1 / q_cv**2
    sizes = np.where(vesicles > 0, rng.gamma(np.maximum(vesicles, 1) * shape) / shape, 0.0)
    return q * sizes + rng.normal(0, NOISE, sizes.shape), vesicles


def fit(amplitude, *, n_null=300, n_max=6, q_cv=0.3, q_cv_doubt=0.15, noise=NOISE, tells=None):
    return fit_axon_release(
        amplitude,
        np.full(amplitude.shape, noise),
        n_null=np.full(len(amplitude), n_null),
        n_max=n_max,
        q_cv=q_cv,
        q_cv_doubt=q_cv_doubt,
        tells=tells,
    )


@pytest.fixture(scope="module")
def axon():
    rng = np.random.default_rng(3)
    n_sites, p_release = np.array([1, 2, 3, 1, 2]), np.array([0.3, 0.6, 0.8, 0.15, 0.5])
    amplitude, vesicles = draw_axon(rng, n_sites=n_sites, p_release=p_release, q=np.full(5, 0.6), n_pulses=2)
    return amplitude, vesicles, p_release


def test_release_probability_is_recovered_with_its_interval(axon):
    amplitude, _, truth = axon
    found = fit(amplitude)
    # 10 intervals: fewer than 7 holding the truth has a chance below 1e-3 at 95 %
    holds = (found.p_release_lo <= truth[:, None]) & (truth[:, None] <= found.p_release_hi)
    assert holds.sum() >= 7
    assert np.all(found.p_release_lo <= found.p_release)
    assert np.all(found.p_release <= found.p_release_hi)
    assert found.axon_q == pytest.approx(0.6, rel=0.12)
    # the mean number of vesicles is the mean amplitude over q
    np.testing.assert_allclose(found.vesicles, amplitude.mean(axis=1) / found.q[:, None], rtol=0.25)
    assert np.all(found.vesicles_lo < found.vesicles)
    assert np.all(found.vesicles < found.vesicles_hi)


def test_single_pulses_are_told_apart(axon):
    amplitude, vesicles, _ = axon
    found = fit(amplitude)
    # one vesicle is 6 noise SD with q_cv 0.3: 98 % of single pulses can be told (simulated), 800 pulses
    assert np.mean((found.p_released > 0.5) == (vesicles > 0)) > 0.955


def test_order_of_boutons_and_unit_of_amplitude_do_not_matter(axon):
    amplitude, _, _ = axon
    found = fit(amplitude)
    turned = fit(amplitude[::-1])
    np.testing.assert_allclose(turned.p_release[::-1], found.p_release, rtol=1e-4)
    scaled = fit(amplitude * 50, noise=NOISE * 50)
    np.testing.assert_allclose(scaled.p_release, found.p_release, rtol=1e-3, atol=1e-4)
    np.testing.assert_allclose(scaled.q, found.q * 50, rtol=1e-3)


def test_a_seldom_releasing_bouton_leans_on_the_axon_for_its_vesicle():
    rng = np.random.default_rng(8)
    n_sites, p_release = np.ones(6, dtype=int), np.array([0.5, 0.6, 0.4, 0.7, 0.5, 0.02])
    amplitude, _ = draw_axon(rng, n_sites=n_sites, p_release=p_release, q=np.full(6, 0.5))
    found = fit(amplitude)
    assert found.q_own[:5].min() > found.q_own[5]
    assert found.q[5] == pytest.approx(found.axon_q, rel=0.15)


def test_a_silent_axon_has_upper_limits_only():
    rng = np.random.default_rng(11)
    amplitude = rng.normal(0, NOISE, (8, 80, 1))
    found = fit(amplitude)
    assert np.all(found.p_release < 0.05)
    assert np.all(found.p_release_lo == 0)
    assert np.all(found.p_release_hi < 0.2)
    assert np.median(found.silent_probability) > 0.5
    assert np.median(found.p_released) < 0.01


def test_a_silent_bouton_among_active_ones_has_a_tight_upper_limit():
    rng = np.random.default_rng(12)
    n_sites, p_release = np.array([1, 2, 1, 2, 1]), np.array([0.5, 0.6, 0.7, 0.4, 0.0])
    amplitude, _ = draw_axon(rng, n_sites=n_sites, p_release=p_release, q=np.full(5, 0.5))
    found = fit(amplitude)
    # 80 failures in 80 trials: exact one-sided 97.5 % limit 1 - 0.025**(1/80) = 0.045 (binomial)
    assert found.p_release[4, 0] < 0.01
    assert found.silent_probability[4] > 0.5
    assert found.p_release_hi[4, 0] < 0.07


def test_sites_that_many_clear_trials_resolve_are_resolved():
    rng = np.random.default_rng(5)
    n_sites, p_release = np.array([1, 2, 3]), np.array([0.5, 0.7, 0.85])
    amplitude, _ = draw_axon(rng, n_sites=n_sites, p_release=p_release, q=np.full(3, 1.2), n_trials=400, q_cv=0.1)
    found = fit(amplitude, q_cv=0.1, q_cv_doubt=0.1)
    assert found.n_sites.tolist() == [1, 2, 3]
    assert found.n_set == ((1,), (2,), (3,))
    np.testing.assert_allclose(found.n_probability.sum(axis=1), 1.0)


@pytest.mark.parametrize(
    "release", [np.zeros((2, 30, 1)), np.ones((2, 30, 1))], ids=["all trials fail", "all trials release"]
)
def test_extremes_stay_within_limits(release):
    rng = np.random.default_rng(2)
    found = fit(0.6 * release + rng.normal(0, NOISE, release.shape))
    for values in (found.p_release, found.p_release_lo, found.p_release_hi, found.p_site, found.p_released):
        assert np.all((values >= 0) & (values <= 1))
    assert np.all(np.abs(found.p_release - release.mean()) < 0.05)


def test_missing_amplitudes_are_left_out():
    rng = np.random.default_rng(4)
    amplitude, _ = draw_axon(rng, n_sites=[2, 1], p_release=[0.5, 0.4], q=[0.6, 0.6])
    holes = np.concatenate([amplitude, np.full((2, 20, 1), np.nan)], axis=1)
    with_holes, without = fit(holes), fit(amplitude)
    np.testing.assert_allclose(with_holes.p_release, without.p_release, atol=0.01)
    assert np.isnan(with_holes.p_released[:, 80:]).all()


def test_a_bouton_without_amplitudes_has_no_numbers_and_does_no_harm():
    rng = np.random.default_rng(4)
    amplitude, _ = draw_axon(rng, n_sites=[2, 1], p_release=[0.5, 0.4], q=[0.6, 0.6])
    found = fit(np.concatenate([amplitude, np.full((1, 80, 1), np.nan)]))
    assert np.isnan(found.p_release[2, 0])
    assert np.isnan(found.q[2])
    assert np.isnan(found.p_released[2]).all()
    np.testing.assert_allclose(found.p_release[:2], fit(amplitude).p_release, atol=0.01)


def test_boutons_that_do_not_tell_how_large_a_vesicle_is_learn_it_from_the_others():
    rng = np.random.default_rng(6)
    amplitude, _ = draw_axon(rng, n_sites=[2, 1, 1, 1], p_release=[0.6, 0.5, 0.5, 0.9], q=[0.6, 0.6, 0.6, 0.6])
    amplitude[2:] = np.minimum(amplitude[2:], 0.25)  # clipped
    tells = np.array([True, True, False, False])
    found, alone = fit(amplitude, tells=tells), fit(amplitude[:2])
    np.testing.assert_allclose(found.p_release[:2], alone.p_release, atol=0.01)
    np.testing.assert_allclose(found.q[:2], alone.q, rtol=0.02)
    assert found.axon_q == pytest.approx(alone.axon_q, rel=0.02)
    assert fit(amplitude).axon_q < 0.85 * found.axon_q
    assert np.all(np.isfinite(found.p_release))
    nobody = fit(amplitude, tells=np.zeros(4, dtype=bool))
    np.testing.assert_allclose(nobody.q, fit(amplitude).q)


@pytest.mark.parametrize("n_boutons", [0, 1])
def test_few_boutons(n_boutons):
    rng = np.random.default_rng(4)
    amplitude, _ = draw_axon(rng, n_sites=[1], p_release=[0.5], q=[0.6])
    found = fit(amplitude[:n_boutons])
    assert found.p_release.shape == (n_boutons, 1)


def test_wrong_input_is_named():
    good = np.zeros((2, 5, 1))
    with pytest.raises(InputError, match="must describe the same boutons"):
        fit_axon_release(good, good[:1], n_null=[1, 1], n_max=3, q_cv=0.3, q_cv_doubt=0.2)
    with pytest.raises(InputError, match="tells must have one entry a bouton, 2"):
        fit(good + 1, tells=[True])
    with pytest.raises(InputError, match="n_max must be at least 1"):
        fit_axon_release(good, good + 1, n_null=[1, 1], n_max=0, q_cv=0.3, q_cv_doubt=0.2)
    with pytest.raises(InputError, match="q_cv_doubt must be greater than 0"):
        fit_axon_release(good, good + 1, n_null=[1, 1], n_max=2, q_cv=0.3, q_cv_doubt=0)
