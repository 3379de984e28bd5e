"""Paired-pulse ratio against pulse interval: known time courses come back, too little data answers in words."""

import numpy as np
import pytest

from napari_boutonrelease.errors import InputError
from napari_boutonrelease.quanta import (
    fit_pulse_intervals,
    paired_means,
    pulse_interval_groups,
    pulse_patterns,
    ratio_as_means,
)

INTERVALS_S = np.array([0.02, 0.05, 0.1, 0.2, 0.5])
UNCERTAIN = np.array([0.04, 0.04, 0.03, 0.03, 0.03])
CURVES = {
    "facilitation": lambda t: 1 + 0.8 * np.exp(-t / 0.1),
    "depression": lambda t: 1 - 0.6 * np.exp(-t / 0.15),
}


def ratios(values, *, se=UNCERTAIN, n_trials=60):
    return [ratio_as_means(r, ratio_se=s, n_trials=n_trials) for r, s in zip(values, se, strict=True)]


def released(rng, k):
    """Response to k vesicles (CV 0.3) in noise of a quarter vesicle."""
    return np.where(k > 0, rng.gamma(np.maximum(k, 1) / 0.09, 0.09), 0.0) + rng.normal(0, 0.25, k.shape)


def draw_pairs(rng, intervals_s, *, trials, gain=0.0, gain_s=0.1, recovery_s=0.0, sites=4, p=0.35):
    """Means of paired pulses at sites that facilitate and are refilled."""
    means = []
    for gap in intervals_s:
        first = rng.binomial(sites, p, trials)
        refill = 1.0 if recovery_s == 0 else -np.expm1(-gap / recovery_s)
        full = sites - first + rng.binomial(first, refill)
        second = rng.binomial(full, p * (1 + gain * np.exp(-gap / gain_s)))
        means.append(paired_means(released(rng, first), released(rng, second)))
    return means


@pytest.mark.parametrize("model", CURVES)
def test_exact_ratios_give_their_own_curve(model):
    fit = fit_pulse_intervals(INTERVALS_S, ratios(CURVES[model](INTERVALS_S)), confidence=0.95)
    assert fit.model == model
    size, time_s = getattr(fit, model), getattr(fit, f"{model}_s")
    assert (size.value, time_s.value) == pytest.approx((0.8, 0.1) if model == "facilitation" else (0.6, 0.15), rel=1e-4)
    assert size.lo < size.value < size.hi
    assert 0 < time_s.lo < time_s.value < time_s.hi
    at = np.array([0.0, 0.03, 0.3])
    assert fit.ratio(at) == pytest.approx(CURVES[model](at), rel=1e-4)
    assert fit.p_fit > 0.99
    assert fit.p_constant < 1e-6


def test_facilitation_over_depression_needs_both_terms():
    intervals = np.geomspace(0.01, 3.0, 9)
    truth = 1 + 1.5 * np.exp(-intervals / 0.04) - 0.5 * np.exp(-intervals / 0.8)
    fit = fit_pulse_intervals(intervals, ratios(truth, se=np.full(9, 0.02)), confidence=0.95)
    assert fit.model == "both"
    found = [one.value for one in (fit.facilitation, fit.facilitation_s, fit.depression, fit.depression_s)]
    assert found == pytest.approx([1.5, 0.04, 0.5, 0.8], rel=1e-2)
    assert fit.depression_s.lo < 0.8 < fit.depression_s.hi


def test_the_interval_of_a_profile_is_where_the_deviance_rises_by_the_quantile():
    """With no doubt in the first mean and many trials, the deviance is chi-square of the ratios."""
    ratio = CURVES["facilitation"](INTERVALS_S) + np.array([0.03, -0.02, 0.01, 0.02, -0.03])
    fit = fit_pulse_intervals(INTERVALS_S, ratios(ratio, n_trials=100_000), confidence=0.95)

    def chi2(size, time_s):
        return np.sum(((ratio - 1 - size * np.exp(-INTERVALS_S / time_s)) / UNCERTAIN) ** 2)

    sizes = np.linspace(0, 4, 8001)
    least = min(chi2(fit.facilitation.value, fit.facilitation_s.value), np.inf)
    for end in (fit.facilitation_s.lo, fit.facilitation_s.hi):
        assert min(chi2(size, end) for size in sizes) - least == pytest.approx(3.8415, abs=0.02)


@pytest.mark.parametrize(
    ("intervals", "words"), [([0.05], "1 different pulse"), ([0.05, 0.1], "2 different"), ([0.1, 0.1, 0.1], "1 diff")]
)
def test_fewer_than_three_intervals_answer_in_words(intervals, words):
    fit = fit_pulse_intervals(
        intervals, ratios(np.full(len(intervals), 1.5), se=UNCERTAIN[: len(intervals)]), confidence=0.95
    )
    assert fit.model == "none"
    assert words in fit.reason
    assert np.isnan(fit.facilitation.value)
    assert np.isnan(fit.ratio([0.05])).all()


@pytest.mark.parametrize(("n", "tried"), [(4, False), (5, True)])
def test_both_terms_need_five_intervals(n, tried):
    fit = fit_pulse_intervals(INTERVALS_S[:n], ratios([2.0, 0.5, 1.4, 0.8, 1.3][:n], se=UNCERTAIN[:n]), confidence=0.95)
    assert ("both" in fit.aicc) == tried


def test_ratios_that_are_all_one_have_no_time_course():
    fit = fit_pulse_intervals(INTERVALS_S, ratios([1.02, 0.98, 1.01, 1.0, 0.99]), confidence=0.95)
    assert fit.model == "constant"
    assert "do not differ from 1" in fit.reason
    assert np.isnan(fit.facilitation_s.value)
    assert (fit.ratio(INTERVALS_S) == 1).all()


def test_a_ratio_that_does_not_change_leaves_the_time_constant_open():
    fit = fit_pulse_intervals(INTERVALS_S, ratios(np.full(5, 1.5)), confidence=0.95)
    assert fit.model == "facilitation"
    assert np.isnan(fit.facilitation_s.value)
    assert fit.ratio(INTERVALS_S) == pytest.approx(np.full(5, 1.5), abs=0.05)
    assert fit.facilitation_s.hi == np.inf
    assert fit.facilitation_s.lo > 0.5
    assert "facilitation_s has no upper limit" in fit.reason


def test_responses_without_spread_answer_in_words():
    means = [paired_means([1.0, 1.0, 1.0], [2.0, 2.0, 2.0])] * 3
    fit = fit_pulse_intervals([0.1, 0.2, 0.3], means, confidence=0.95)
    assert fit.model == "none"
    assert "do not vary" in fit.reason


def test_first_responses_within_noise_of_zero_end_without_a_time_course_or_an_open_one():
    rng = np.random.default_rng(5)
    means = [paired_means(rng.normal(0, 1, 20), rng.normal(0, 1, 20)) for _ in INTERVALS_S]
    fit = fit_pulse_intervals(INTERVALS_S, means, confidence=0.95)
    assert np.isfinite(list(fit.aicc.values())).all()
    assert fit.model in ("constant", "facilitation", "depression")


def test_input_that_cannot_be_right_is_refused():
    with pytest.raises(InputError, match="5 intervals and 4 means"):
        fit_pulse_intervals(INTERVALS_S, ratios(np.ones(4), se=UNCERTAIN[:4]), confidence=0.95)
    with pytest.raises(InputError, match="greater than 0 s"):
        fit_pulse_intervals([0.0, 0.1, 0.2], ratios(np.ones(3), se=UNCERTAIN[:3]), confidence=0.95)
    with pytest.raises(InputError, match="ratio_se must be greater than 0"):
        ratio_as_means(1.0, ratio_se=0.0, n_trials=10)
    assert paired_means([1.0, np.nan, 2.0], [1.0, 2.0, 3.0]) is None


def coverage(seed, repeats, *, trials):
    """Share of repeats whose intervals hold the truth: size and time constant of facilitation and depression."""
    rng = np.random.default_rng(seed)
    hits = {"facilitation": [0, 0, 0], "depression": [0, 0, 0]}
    for _ in range(repeats):
        for model, truth, settings in (
            ("facilitation", (1.2, 0.1), {"gain": 1.2}),
            ("depression", (0.35, 0.15), {"recovery_s": 0.15}),
        ):
            means = draw_pairs(rng, INTERVALS_S, trials=trials, **settings)
            fit = fit_pulse_intervals(INTERVALS_S, means, confidence=0.95)
            if fit.model == model:
                size, time_s = getattr(fit, model), getattr(fit, f"{model}_s")
                hits[model][0] += 1
                hits[model][1] += size.lo <= truth[0] <= size.hi
                hits[model][2] += time_s.lo <= truth[1] <= time_s.hi
    return hits


def test_intervals_hold_the_truth_as_often_as_they_say():
    for chosen, size, time_s in coverage(7, 60, trials=80).values():
        assert chosen >= 45
        # of 60 intervals of 95 %, 11 or more miss the truth with probability 2e-4
        assert min(size, time_s) >= chosen - 10


@pytest.mark.validation
def test_intervals_cover_at_length():
    for chosen, size, time_s in coverage(8, 500, trials=100).values():
        assert chosen > 400
        assert 0.915 < size / chosen < 0.98
        assert 0.915 < time_s / chosen < 0.98


def test_without_an_effect_a_time_course_is_rarely_chosen():
    """Chi-square with two degrees of freedom exceeds 4, what two parameters cost, in 14 %: 17 of 40 in 1e-5."""
    rng = np.random.default_rng(9)
    chosen = [
        fit_pulse_intervals(INTERVALS_S, draw_pairs(rng, INTERVALS_S, trials=40), confidence=0.95).model
        for _ in range(40)
    ]
    assert sum(model != "constant" for model in chosen) < 17


def test_trials_are_grouped_by_their_interval():
    rng = np.random.default_rng(2)
    gaps = rng.permutation(np.repeat([0.02, 0.05, 0.2], 6))
    first = np.cumsum(rng.uniform(1, 2, 18))
    stimulus = np.column_stack([first, first + gaps + rng.normal(0, 1e-5, 18)])
    stimulus[3, 1] = np.nan
    groups = pulse_interval_groups(stimulus, tolerance_s=0.001)
    assert [group.interval_s for group in groups] == pytest.approx([0.02, 0.05, 0.2], abs=1e-4)
    for group, gap in zip(groups, (0.02, 0.05, 0.2), strict=True):
        assert group.trials.tolist() == [row for row in np.flatnonzero(gaps == gap) if row != 3]
    assert pulse_interval_groups(stimulus[:, :1], tolerance_s=0.001) == ()
    assert pulse_interval_groups(np.full((3, 2), np.nan), tolerance_s=0.001) == ()


def test_patterns_tell_trains_apart_that_share_their_first_interval():
    train = np.array([0.0, 0.1, 0.2, 0.3])
    stimulus = np.array(
        [train, train + 1, [2.0, 2.1, 2.2, 2.8], [3.0, 3.1, np.nan, np.nan], [4.0, np.nan, np.nan, np.nan]]
    )
    groups = pulse_patterns(stimulus, tolerance_s=0.001)
    assert [group.trials.tolist() for group in groups] == [[4], [3], [0, 1], [2]]
    assert groups[2].pulse_s == pytest.approx(train)
    assert len(pulse_interval_groups(stimulus, tolerance_s=0.001)) == 1
