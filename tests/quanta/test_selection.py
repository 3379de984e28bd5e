"""The mean over all boutons from those that a detection found."""

import numpy as np
import pytest

from napari_boutonrelease.boutons import mixture_evidence
from napari_boutonrelease.errors import InputError
from napari_boutonrelease.quanta import correct_for_detection, fit_detection_curve

TRIALS, Q_SD, CUT = 60, 4.0, 11.0
P_PLANTED = np.array([0.005, 0.01, 0.015, 0.02, 0.03, 0.045, 0.07, 0.1, 0.15, 0.2, 0.3, 0.45, 0.7, 1.0])
ANGLE = (np.arange(80) + 0.5) * np.pi / 160
P = np.sin(ANGLE) ** 2


def record(p, rng):
    """Amplitudes of boutons: whether the evidence finds each, and the likelihood of its p_release."""
    z = rng.standard_normal((TRIALS, len(p))) + Q_SD * (rng.random((TRIALS, len(p))) < p)
    ratio = np.expm1(Q_SD * z - Q_SD**2 / 2)
    log_likelihood = np.stack([np.log1p(one * ratio).sum(axis=0) for one in P], axis=1)
    likelihood = np.exp(log_likelihood - log_likelihood.max(axis=1, keepdims=True))
    return mixture_evidence(z.astype(np.float32)) > CUT, likelihood


@pytest.fixture(scope="module")
def curve():
    rng = np.random.default_rng(1)
    found = [record(np.full(400, p), rng)[0].sum() for p in P_PLANTED]
    return fit_detection_curve(P_PLANTED, found, np.full(len(P_PLANTED), 400), n_draws=60, rng=rng)


def correct(likelihood, curve, **changes):
    options = {"real": np.ones(len(likelihood)), "least_share": 0.1, "confidence": 0.95} | changes
    return correct_for_detection(likelihood, P, curve=curve, **options)


def few_and_often(n, rng):
    return np.where(rng.random(n) < 0.6, rng.beta(3, 40, n), rng.beta(8, 8, n))


def study(draw, *, n_boutons, n_axons, curve, rng):
    """Corrected and plain means of axons, and whether the interval holds the mean of the law."""
    law = draw(400_000, rng)
    rows = []
    for _ in range(n_axons):
        p = draw(n_boutons, rng)
        found, likelihood = record(p, rng)
        if found.sum() < 3:
            continue
        result = correct(likelihood[found], curve)
        truth = law[law >= result.smallest].mean()
        rows.append((result.mean_found - truth, result.mean.value - truth, result.mean.lo < truth < result.mean.hi))
    return np.array(rows, dtype=float)


LAWS = {
    "rare": lambda n, rng: rng.beta(1, 4, n),
    "very rare": lambda n, rng: rng.beta(0.6, 3, n),
    "even": lambda n, rng: rng.random(n),
    "two kinds": few_and_often,
}


def test_corrected_mean_is_much_less_biased_than_that_of_the_found(curve):
    rows = study(few_and_often, n_boutons=20, n_axons=60, curve=curve, rng=np.random.default_rng(2))
    plain, corrected, covered = rows.mean(axis=0)
    assert plain > 0.035
    assert abs(corrected) < 0.5 * plain
    assert covered > 0.83


@pytest.mark.validation
@pytest.mark.parametrize("law", LAWS)
def test_interval_of_the_corrected_mean_covers(law, curve):
    rows = np.concatenate(
        [
            study(LAWS[law], n_boutons=n, n_axons=250, curve=curve, rng=np.random.default_rng([n, 3]))
            for n in (8, 20, 60)
        ]
    )
    plain, corrected, covered = rows.mean(axis=0)
    assert abs(corrected) < max(0.6 * plain, 0.012)
    assert 0.92 < covered < 0.995


def test_expected_misses_agree_with_those_missed(curve):
    rng = np.random.default_rng(4)
    found, likelihood = record(rng.beta(1, 6, 1500), rng)
    rng = np.random.default_rng(4)
    p = rng.beta(1, 6, 1500)
    result = correct(likelihood[found], curve)
    missed = np.sum(~found & (p > result.smallest)) / found.sum()
    assert result.missed_per_found.lo < missed < result.missed_per_found.hi
    assert result.missed_per_found.value == pytest.approx(missed, abs=0.08)


def test_where_all_are_found_nothing_changes():
    rng = np.random.default_rng(5)
    perfect = fit_detection_curve([0.01, 1.0], [100_000, 100_000], [100_000, 100_000], n_draws=20, rng=rng)
    _, likelihood = record(rng.uniform(0.2, 0.8, 200), rng)
    result = correct(likelihood, perfect)
    assert result.mean.value == pytest.approx(result.mean_found, abs=0.01)
    assert result.missed_per_found.value == pytest.approx(0.0, abs=1e-3)


def test_what_is_no_bouton_does_not_count(curve):
    rng = np.random.default_rng(6)
    _, often = record(np.full(10, 0.6), rng)
    _, never = record(np.zeros(10), rng)
    both = correct(np.concatenate([often, never]), curve, real=np.repeat([1.0, 1e-9], 10))
    assert both.mean.value == pytest.approx(correct(often, curve).mean.value, abs=1e-3)


def test_too_few_boutons_and_blind_detections_answer_in_words(curve):
    _, likelihood = record(np.full(4, 0.5), np.random.default_rng(7))
    few = correct(likelihood[:2], curve)
    assert np.isnan(few.mean.value)
    assert few.mean.method == "none: needs 3 boutons found by their responses"
    assert 0.3 < few.mean_found < 0.7
    blind = fit_detection_curve([0.1, 1.0], [0, 3], [100, 100], n_draws=20, rng=np.random.default_rng(8))
    assert "even boutons that always release" in correct(likelihood, blind).mean.method
    nothing = correct(np.full((5, len(P)), np.nan), curve)
    assert nothing.n_boutons == 0
    assert np.isnan(nothing.mean_found)
    with pytest.raises(InputError, match="must have a row each"):
        correct(likelihood, curve, real=np.ones(3))


def test_curve_rises_and_says_where_it_reaches_a_share():
    rng = np.random.default_rng(9)
    curve = fit_detection_curve([0.05, 0.1, 0.2, 0.4], [10, 60, 40, 95], [100, 100, 100, 100], n_draws=200, rng=rng)
    assert curve.share.tolist() == [0.1, 0.5, 0.5, 0.95]
    assert curve.at([0.0, 0.1, 0.15, 1.0]) == pytest.approx([0.0, 0.5, 0.5, 0.95])
    assert np.all(np.diff(curve.draws, axis=1) >= 0)
    half = curve.smallest(0.5, confidence=0.95)
    assert half.value == pytest.approx(0.1)
    assert 0.05 < half.lo < half.value < half.hi < 0.4
    assert curve.smallest(0.01, confidence=0.95).value == 0.05  # not below what was measured
    never = curve.smallest(0.99, confidence=0.95)
    assert np.isnan(never.value)
    assert "no p_release" in never.method
    assert np.isinf(curve.smallest(0.95, confidence=0.95).hi)


@pytest.mark.parametrize(
    ("p", "found", "planted", "message"),
    [
        ([0.2, 0.1], [1, 1], [2, 2], "must increase"),
        ([0.1, 0.2], [1, 3], [2, 2], "between 0 and planted"),
        ([0.1, 0.2], [1], [2, 2], "one value each"),
    ],
)
def test_impossible_counts_are_refused(p, found, planted, message):
    with pytest.raises(InputError, match=message):
        fit_detection_curve(p, found, planted, n_draws=2, rng=np.random.default_rng(1))
