"""Trials needed: against exact formulas, and against simulated recordings measured by the estimators themselves."""

from __future__ import annotations

from dataclasses import replace
from functools import partial

import numpy as np
import pytest
from statsmodels.stats.power import NormalIndPower, TTestPower
from statsmodels.stats.proportion import proportion_effectsize

from napari_boutonrelease import InputError
from napari_boutonrelease.quanta import (
    Doubts,
    JointData,
    LogPrior,
    PlannedBouton,
    change_power,
    effective_trials,
    expected_width,
    fit_axon_release,
    fit_joint,
    measure_pulse_pair,
    paired_change_power,
    ppr_power,
    simulated_ppr_power,
    sites_evidence,
    trials_for_change,
    trials_for_paired_change,
    trials_for_ppr,
    trials_for_sites,
    trials_for_width,
)

ODDS_19 = float(np.log(19.0))
DOUBTS = Doubts(q=0.3, q_cv=0.15, noise=0.02, inverse_sites=0.35)
KNOWN = Doubts(q=0.01, q_cv=0.01, noise=0.001, inverse_sites=0.0)
PERFECT = PlannedBouton(n_sites=1, p_site=0.5, q_over_noise=30.0, q_cv=0.1)
TYPICAL = PlannedBouton(n_sites=2, p_site=0.3, q_over_noise=4.0, q_cv=0.3)

for_width = partial(trials_for_width, doubts=DOUBTS, confidence=0.95, max_trials=100_000)
for_sites = partial(trials_for_sites, power=0.8, doubts=DOUBTS, nats=ODDS_19, max_trials=100_000)
for_ppr = partial(
    trials_for_ppr,
    power=0.8,
    confidence=0.95,
    max_trials=100_000,
    n_simulations=0,
    rng=np.random.default_rng(1),
)
for_change = partial(trials_for_change, power=0.8, doubts=DOUBTS, confidence=0.95, max_trials=100_000)
for_paired = partial(trials_for_paired_change, power=0.8, doubts=DOUBTS, confidence=0.95, max_trials=100_000)


# --- the bouton


def test_mean_and_variance_are_those_of_what_is_drawn():
    amplitude = TYPICAL.draw((200_000,), rng=np.random.default_rng(1))
    assert amplitude.mean() == pytest.approx(TYPICAL.mean, abs=0.03)
    assert amplitude.var() == pytest.approx(TYPICAL.variance, rel=0.02)
    assert TYPICAL.p_release == pytest.approx(1.0 - 0.7**2)


def test_the_same_bouton_can_release_otherwise():
    other = TYPICAL.releasing(0.75)
    assert other.p_site == pytest.approx(0.5)
    assert replace(other, p_site=TYPICAL.p_site) == TYPICAL


@pytest.mark.parametrize(
    ("changed", "words"),
    [
        ({"n_sites": 0}, "n_sites must be at least 1"),
        ({"p_site": 0.0}, "p_site must lie between 0 and 1"),
        ({"p_site": 1.0}, "p_site must lie between 0 and 1"),
        ({"q_over_noise": 0.0}, "q_over_noise must be greater than 0"),
        ({"q_cv": -0.1}, "q_cv must be greater than 0"),
    ],
)
def test_a_bouton_that_cannot_be_is_refused(changed, words):
    with pytest.raises(InputError, match=words):
        replace(TYPICAL, **changed)
    with pytest.raises(InputError, match="doubt of q must be greater than 0"):
        replace(DOUBTS, q=0.0)


# --- width of the interval


def test_22_sweeps_at_one_half_give_a_width_of_0_39():
    assert expected_width(PERFECT, n_trials=22, doubts=KNOWN, confidence=0.95) == pytest.approx(0.39, abs=0.005)
    answer = for_width(PERFECT, width=0.393, doubts=KNOWN)
    assert answer.trials == 22
    assert answer.reached <= 0.393


def test_with_perfect_calls_a_trial_counts_as_one():
    assert effective_trials(PERFECT, n_trials=50, doubts=KNOWN) == pytest.approx(50.0, rel=1e-3)


def test_noise_costs_trials_and_counting_vesicles_saves_some():
    dim = effective_trials(replace(TYPICAL, q_over_noise=2.0), n_trials=100, doubts=DOUBTS)
    clear = effective_trials(TYPICAL, n_trials=100, doubts=DOUBTS)
    bright = effective_trials(replace(TYPICAL, q_over_noise=15.0), n_trials=100, doubts=KNOWN)
    assert dim < 0.7 * clear
    assert clear < 100.0 < bright


@pytest.mark.parametrize(
    ("bouton", "n_trials"),
    [
        (PlannedBouton(n_sites=1, p_site=0.5, q_over_noise=4.5, q_cv=0.3), 40),
        (PlannedBouton(n_sites=2, p_site=0.3, q_over_noise=2.5, q_cv=0.3), 40),
    ],
)
def test_the_axons_fit_reaches_the_promised_width(bouton, n_trials):
    """Measured over seven kinds of boutons: 0 to 9 % wider than promised, SE 1 to 4 %."""
    rng = np.random.default_rng(4)
    q = bouton.q_over_noise * np.exp(rng.normal(0.0, 0.2, 16))
    a = np.concatenate([replace(bouton, q_over_noise=one).draw((1, n_trials, 1), rng=rng) for one in q])
    fit = fit_axon_release(a, np.ones_like(a), n_null=np.full(len(a), n_trials), n_max=6, q_cv=0.3, q_cv_doubt=0.15)
    promised = expected_width(bouton, n_trials=n_trials, doubts=DOUBTS, confidence=0.95)
    assert np.mean(fit.p_release_hi - fit.p_release_lo) == pytest.approx(promised, rel=0.12)


# --- number of sites


def test_the_chance_of_telling_sites_is_that_of_simulated_likelihood_ratios():
    bouton = PlannedBouton(n_sites=1, p_site=0.4, q_over_noise=4.5, q_cv=0.3)
    told = sites_evidence(bouton, n_trials=200, doubts=DOUBTS, nats=ODDS_19)
    rng, other = np.random.default_rng(2), (told.p_site, told.q_over_noise, told.q_cv)
    ratio = _log_likelihood(bouton, rng, n_sites=2, parameters=other, n_recordings=1500, n_trials=200)
    assert ratio.mean() == pytest.approx(told.expected, abs=5.0 * told.sd / np.sqrt(1500) + 0.15)
    assert ratio.std() == pytest.approx(told.sd, rel=0.1)
    assert np.mean(ratio > ODDS_19) == pytest.approx(told.power, abs=0.06)


def _log_likelihood(bouton, rng, *, n_sites, parameters, n_recordings, n_trials):
    """Log-likelihood ratio of drawn recordings; densities of 1 or 2 sites are means over drawn vesicles."""
    from scipy.stats import norm

    p_site, q, q_cv = parameters
    drawn = bouton.draw((n_recordings, n_trials), rng=rng)
    grid = np.arange(-8.0, 40.0, 0.02)

    def density(n, p, size, cv):
        sizes = size * cv**2 * np.random.default_rng(7).standard_gamma(np.full((n, 4000), cv**-2))
        total = norm.pdf(grid[::10]) * (1 - p) ** n
        for m in range(1, n + 1):
            ways = n if m == 1 and n == 2 else 1
            centres = sizes[:m].sum(axis=0)
            total = total + ways * p**m * (1 - p) ** (n - m) * norm.pdf(grid[::10, None] - centres).mean(axis=1)
        return total

    true = density(1, bouton.p_site, bouton.q_over_noise, bouton.q_cv)
    closest = density(n_sites, p_site, q, q_cv)
    term = np.log(true) - np.log(closest)
    return np.interp(drawn, grid[::10], term).sum(axis=1)


@pytest.mark.validation
def test_the_axons_fit_tells_sites_as_often_as_promised():
    """Measured at five kinds of boutons, 24 fits each: 58, 75, 58, 46, 67 % where 53, 74, 48, 46, 76 were promised."""
    rng, n_trials = np.random.default_rng(3), 150
    bouton = PlannedBouton(n_sites=1, p_site=0.6, q_over_noise=4.5, q_cv=0.3)
    told = []
    for _ in range(8):
        q = bouton.q_over_noise * np.exp(rng.normal(0.0, 0.2, 10))
        a = np.concatenate([replace(bouton, q_over_noise=one).draw((1, n_trials, 1), rng=rng) for one in q])
        fit = fit_axon_release(a, np.ones_like(a), n_null=np.full(len(a), n_trials), n_max=6, q_cv=0.3, q_cv_doubt=0.15)
        told += [bouton.n_sites + 1 not in members for members in fit.n_set]
    promised = sites_evidence(bouton, n_trials=n_trials, doubts=DOUBTS, nats=ODDS_19).power
    assert np.mean(told) == pytest.approx(promised, abs=0.2)


def test_sites_are_told_by_bright_vesicles_sooner():
    trials = [for_sites(replace(TYPICAL, q_over_noise=q)).trials for q in (3.0, 6.0, 12.0)]
    assert trials[0] > 2 * trials[1] > 2 * trials[2]


def test_too_dim_a_vesicle_asks_for_light():
    answer = for_sites(replace(TYPICAL, q_over_noise=0.6))
    assert answer.trials is None
    assert np.isnan(answer.reached)
    assert answer.reason.startswith("more than 100,000 trials: q/noise 0.6 is too small, more light")


def test_sites_that_no_light_can_tell_apart_are_said_to_be_so():
    answer = for_sites(PlannedBouton(n_sites=8, p_site=0.02, q_over_noise=4.0, q_cv=0.3))
    assert (answer.trials, answer.reason) == (None, "more than 100,000 trials, at any q/noise")


# --- pulse pairs


@pytest.mark.parametrize(("ratio", "n_trials"), [(1.5, 60), (0.5, 40), (1.2, 300)])
def test_power_of_pulse_pairs_is_that_of_a_paired_t_test(ratio, n_trials):
    second = replace(TYPICAL, p_site=ratio * TYPICAL.p_site)
    effect = abs(second.mean - TYPICAL.mean) / np.sqrt(second.variance + TYPICAL.variance)
    exact = TTestPower().power(effect, n_trials, 0.05, alternative="two-sided")
    wrong_side = TTestPower().power(-effect, n_trials, 0.025, alternative="larger")
    power = ppr_power(TYPICAL, ratio=ratio, n_trials=n_trials, confidence=0.95)
    assert power == pytest.approx(exact - wrong_side, abs=1e-6)


@pytest.mark.parametrize(
    ("bouton", "ratio"),
    [(TYPICAL, 1.5), (PlannedBouton(n_sites=1, p_site=0.15, q_over_noise=3.0, q_cv=0.3), 2.5), (TYPICAL, 0.5)],
)
def test_the_verdict_on_pulse_pairs_comes_as_often_as_promised(bouton, ratio):
    rng = np.random.default_rng(6)
    answer = for_ppr(bouton, ratio=ratio, n_simulations=2000, rng=rng)
    assert 0.8 <= answer.reached < 0.83
    assert answer.simulated.value == pytest.approx(0.8, abs=0.05)
    assert answer.simulated.lo < answer.simulated.value < answer.simulated.hi
    second = replace(bouton, p_site=ratio * bouton.p_site)
    pairs = [
        measure_pulse_pair(
            bouton.draw((answer.trials,), rng=rng),
            second.draw((answer.trials,), rng=rng),
            noise_sd=1.0,
            confidence=0.95,
            n_bootstrap=600,
            rng=rng,
        )
        for _ in range(300)
    ]
    wanted = "facilitation" if ratio > 1 else "depression"
    assert np.mean([pair.verdict == wanted for pair in pairs]) == pytest.approx(0.8, abs=0.09)


def test_a_first_response_within_noise_of_zero_counts_as_not_told():
    """Without that, 80 % would be promised at 100 trials and 73 % found."""
    bouton = PlannedBouton(n_sites=1, p_site=0.15, q_over_noise=3.0, q_cv=0.3)
    simulated = simulated_ppr_power(
        bouton, ratio=2.5, n_trials=100, confidence=0.95, n_simulations=20_000, rng=np.random.default_rng(1)
    )
    assert ppr_power(bouton, ratio=2.5, n_trials=100, confidence=0.95) == pytest.approx(simulated.value, abs=0.02)
    assert simulated.value < 0.78


def test_a_ratio_that_the_sites_have_no_room_for_is_said_to_be_so():
    answer = for_ppr(replace(TYPICAL, p_site=0.8), ratio=1.5)
    assert answer.trials is None
    assert "leaves room for a ratio below 1.2 only" in answer.reason


def test_recordings_too_long_to_draw_are_not_simulated():
    found = simulated_ppr_power(
        TYPICAL, ratio=1.01, n_trials=200_000, confidence=0.95, n_simulations=1000, rng=np.random.default_rng(1)
    )
    assert np.isnan(found.value)
    assert found.method == "not simulated"


# --- changes


@pytest.mark.parametrize(("before", "change"), [(0.5, 0.2), (0.3, -0.2), (0.1, 0.1)])
def test_with_perfect_calls_a_change_needs_the_trials_of_two_proportions(before, change):
    """Sample size of two proportions on the arcsine scale (Cohen 1988)."""
    effect = proportion_effectsize(before + change, before)
    exact = NormalIndPower().solve_power(effect, power=0.8, alpha=0.05, ratio=1.0)
    answer = for_change(PERFECT.releasing(before), change=change, doubts=KNOWN)
    assert answer.trials == pytest.approx(exact, rel=0.02, abs=1.0)


@pytest.mark.validation
@pytest.mark.parametrize(
    ("bouton", "change", "n_trials"),
    [
        (TYPICAL.releasing(0.4), 0.25, 60),
        (PlannedBouton(n_sites=1, p_site=0.6, q_over_noise=3.0, q_cv=0.3), -0.2, 80),
        (PlannedBouton(n_sites=3, p_site=0.1, q_over_noise=5.0, q_cv=0.3), 0.2, 60),
    ],
)
def test_the_joint_fit_sees_a_change_as_often_as_promised(bouton, change, n_trials):
    """Measured with 60 fits each: 65, 48 and 62 % where 72, 52 and 59 were promised."""
    rng = np.random.default_rng(11)
    seen = []
    for _ in range(120):
        before = replace(bouton, q_over_noise=bouton.q_over_noise * np.exp(rng.normal(0.0, 0.2)))
        recordings = [
            JointData(amplitude=one.draw((n_trials, 1), rng=rng), amplitude_sd=np.ones((n_trials, 1)), n_null=n_trials)
            for one in (before, before.releasing(before.p_release + change))
        ]
        prior = LogPrior(centre=bouton.q_over_noise, log_sd=0.3)
        fit = fit_joint(recordings, n_max=6, q_cv=0.3, q_cv_doubt=0.15, q_prior=prior, confidence=0.95)
        seen.append(fit.p_changed_p < 0.05)
    promised = change_power(bouton, change=change, n_trials=n_trials, doubts=DOUBTS, confidence=0.95)
    assert np.mean(seen) == pytest.approx(promised, abs=0.2)


def test_power_over_boutons_is_that_of_a_paired_t_test():
    boutons = [PERFECT.releasing(0.4)] * 8
    power = paired_change_power(boutons, change=0.1, change_sd=0.1, n_trials=40, doubts=KNOWN, confidence=0.95)
    sd = np.sqrt(0.1**2 + 0.4 * 0.6 / 40 + 0.5 * 0.5 / 40)
    exact = TTestPower().power(0.1 / sd, 8, 0.05) - TTestPower().power(-0.1 / sd, 8, 0.025, alternative="larger")
    assert power == pytest.approx(exact, abs=2e-3)


def test_a_change_over_boutons_is_seen_as_often_as_promised():
    rng, n_trials, n_boutons = np.random.default_rng(8), 30, 6
    boutons = [PERFECT.releasing(p) for p in (0.2, 0.3, 0.4, 0.5, 0.6, 0.7)]
    before = np.array([bouton.p_release for bouton in boutons])
    after = np.clip(before + 0.15 + rng.normal(0.0, 0.05, (4000, n_boutons)), 0.0, 1.0)
    shown = (rng.binomial(n_trials, after) - rng.binomial(n_trials, before, after.shape)) / n_trials
    t = shown.mean(axis=1) / shown.std(axis=1, ddof=1) * np.sqrt(n_boutons)
    promised = paired_change_power(
        boutons, change=0.15, change_sd=0.05, n_trials=n_trials, doubts=KNOWN, confidence=0.95
    )
    assert np.mean(t > 2.5706) == pytest.approx(promised, abs=0.035)


def test_too_few_boutons_are_said_to_be_so():
    answer = for_paired([TYPICAL] * 4, change=-0.1, change_sd=0.1)
    assert answer.trials is None
    assert answer.reason == "4 boutons are too few, however many trials, if changes differ by 0.1: at least 10"
    assert for_paired([TYPICAL] * 10, change=-0.1, change_sd=0.1).trials > 0


def test_more_boutons_need_fewer_trials():
    trials = [for_paired([TYPICAL] * n, change=0.2, change_sd=0.05).trials for n in (4, 8, 16)]
    assert trials[0] > trials[1] > trials[2]


@pytest.mark.parametrize(("change", "words"), [(0.6, "cannot rise by 0.6"), (-0.6, "cannot fall by 0.6")])
def test_a_change_without_room_is_said_to_be_so(change, words):
    for answer in (for_change(TYPICAL, change=change), for_paired([TYPICAL] * 3, change=change, change_sd=0.1)):
        assert answer.trials is None
        assert words in answer.reason


# --- all


def test_the_answer_is_the_fewest_that_do():
    width = for_width(TYPICAL, width=0.2)
    assert width.reached <= 0.2 < expected_width(TYPICAL, n_trials=width.trials - 1, doubts=DOUBTS, confidence=0.95)
    change = for_change(TYPICAL, change=0.2)
    fewer = change_power(TYPICAL, change=0.2, n_trials=change.trials - 1, doubts=DOUBTS, confidence=0.95)
    assert fewer < 0.8 <= change.reached


@pytest.mark.parametrize(
    ("ask", "words"),
    [
        (lambda: for_width(TYPICAL, width=1.0), "width must lie between 0 and 1"),
        (lambda: for_sites(TYPICAL, power=1.0), "power must lie between 0 and 1"),
        (lambda: for_ppr(TYPICAL, ratio=1.0), "ratio must differ from 1"),
        (lambda: for_change(TYPICAL, change=0.0), "change must lie between -1 and 1 and differ from 0"),
        (lambda: for_paired([TYPICAL], change=0.1, change_sd=0.0), "at least two"),
    ],
)
def test_a_goal_that_makes_no_sense_is_refused(ask, words):
    with pytest.raises(InputError, match=words):
        ask()


@pytest.mark.parametrize(
    "extreme",
    [
        {"n_sites": 8, "p_site": 0.999, "q_over_noise": 100.0},
        {"n_sites": 1, "p_site": 1e-4, "q_over_noise": 0.1},
        {"n_sites": 1, "p_site": 0.9999, "q_over_noise": 4.0},
    ],
)
def test_extreme_boutons_get_an_answer_or_a_reason(extreme):
    bouton = replace(TYPICAL, **extreme)
    change = -0.3 if bouton.p_release > 0.5 else 0.3
    answers = [
        for_width(bouton, width=0.1),
        for_sites(bouton),
        for_ppr(bouton, ratio=0.5),
        for_change(bouton, change=change),
        for_paired([bouton] * 5, change=change, change_sd=0.1),
    ]
    for answer in answers:
        assert (answer.trials is None) == bool(answer.reason)
        assert (answer.trials is None) == bool(np.isnan(answer.reached))
