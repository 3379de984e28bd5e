"""Comparing recordings: what changed, what all of them say together, and what cannot be said."""

import numpy as np
import pytest

from napari_boutonrelease.comparison import CompareSettings, compare_recordings
from napari_boutonrelease.errors import InputError

SETTINGS = CompareSettings(n_max=5, bootstrap=200)
NOISE_SD, Q, Q_CV, TRIALS = 0.1, 0.44, 0.3, 80
PLACES = np.array([(10.0, 15.0), (20.0, 33.0), (30.0, 52.0), (18.0, 70.0), (33.0, 84.0), (12.0, 88.0)])
SITES = np.array([1, 2, 3, 2, 1, 4])


def release(p_site, *, seed, sites=SITES, q=Q, facilitation=1.0, trials=TRIALS):
    """Amplitudes of pairs of pulses (bouton, trial, pulse), vesicle by vesicle."""
    rng = np.random.default_rng(seed)
    p = np.broadcast_to(p_site, len(sites))[:, None, None] * np.array([1.0, facilitation])
    m = rng.binomial(sites[:, None, None], np.broadcast_to(p, (len(sites), trials, 2)))
    size = rng.gamma(np.maximum(m, 1) / Q_CV**2) * Q_CV**2 * (m > 0)
    return np.asarray(q)[..., None, None] * size + rng.normal(0, NOISE_SD, m.shape)


def field(shift=(0.0, 0.0), seed=1):
    y, x = np.indices((48, 100))
    image = sum(60.0 * np.exp(-0.5 * ((y - r - shift[0]) ** 2 + (x - c - shift[1]) ** 2) / 1.6**2) for r, c in PLACES)
    return 100.0 + image + np.random.default_rng(seed).normal(0, 1, y.shape)


@pytest.fixture
def recorded(make_recording):
    def make(name, p_site, *, seed, shift=(0.0, 0.0), order=None, **options):
        amplitude = release(p_site, seed=seed, **options)
        order = np.arange(len(PLACES)) if order is None else np.asarray(order)
        own_p = 1.0 - (1.0 - np.broadcast_to(p_site, len(SITES))) ** SITES
        columns = {
            "trials": np.full(len(order), TRIALS),
            "p_release": own_p[order],
            "p_release_lo": np.maximum(own_p[order] - 0.1, 0.0),
            "p_release_hi": np.minimum(own_p[order] + 0.1, 1.0),
            "ppr": np.full(len(order), 1.2),
            "ppr_lo": np.full(len(order), 1.0),
            "ppr_hi": np.full(len(order), 1.5),
        }
        return make_recording(
            name=name,
            position_px=(PLACES + shift)[order],
            amplitude=amplitude[order],
            noise_sd=NOISE_SD,
            mean_image=field(shift, seed=seed),
            columns=columns,
        )

    return make


def test_two_conditions_tell_sites_and_that_release_changed(recorded):
    low = recorded("low", 0.15, seed=1)
    high = recorded("high", 0.6, seed=2, shift=(2.0, -3.0), order=[5, 4, 3, 2, 1, 0])
    comparison = compare_recordings([low, high], settings=SETTINGS)
    joint, changes = comparison.joint, comparison.changes
    assert joint["bouton"].tolist() == [1, 2, 3, 4, 5, 6]
    assert (joint["recordings"] == 2).all()
    assert np.sum(joint["n_sites"].to_numpy() == SITES) >= 5
    assert (joint["changed"] == "p").sum() >= 5
    assert (joint["q_lo"] < Q).sum() >= 5
    assert (joint["q_hi"] > Q).sum() >= 5
    assert (changes["p_changed_p_adjusted"] < 1e-3).all()
    assert (changes["p_changed_p_adjusted"] >= changes["p_changed_p"]).all()
    assert (changes["p_release_change_lo"] > 0.1).all()
    conditions = comparison.conditions
    there = conditions[conditions["recording"] == "high"]
    assert there["bouton_there"].tolist() == [6, 5, 4, 3, 2, 1]
    assert len(comparison.unmatched) == 0
    assert comparison.summary["pairs"][0]["boutons_p_changed"] == 6
    assert comparison.summary["pairs"][0]["p_release_change_p"] == pytest.approx(2 / 2**6)


def test_a_smaller_vesicle_is_told_from_less_release(recorded):
    control = recorded("control", 0.4, seed=3)
    drug = recorded("drug", 0.4, seed=4, q=np.full(6, 0.7 * Q))
    comparison = compare_recordings([control, drug], settings=SETTINGS)
    assert (comparison.joint["changed"] == "q").sum() >= 4
    ratio = comparison.changes[["q_ratio", "q_ratio_lo", "q_ratio_hi"]].to_numpy(dtype=float)
    assert np.sum((ratio[:, 1] < 0.7) & (ratio[:, 2] > 0.7)) >= 5
    assert (comparison.changes["locus"] == "release").sum() <= 1
    pair = comparison.summary["pairs"][0]
    assert pair["q_ratio_lo"] < 0.7 < pair["q_ratio_hi"]
    assert any("change of the reporter's state" in caution for caution in comparison.cautions)


def test_three_recordings_give_three_pairs_each_adjusted_alone(recorded):
    recordings = [recorded(name, p, seed=seed) for name, p, seed in (("a", 0.1, 5), ("b", 0.3, 6), ("c", 0.6, 7))]
    changes = compare_recordings(recordings, settings=SETTINGS).changes
    pairs = changes.groupby(["recording_a", "recording_b"], sort=False)
    assert list(pairs.groups) == [("a", "b"), ("a", "c"), ("b", "c")]
    assert (pairs.size() == 6).all()
    assert (pairs["p_changed_p_adjusted"].max() <= 1.0).all()


def test_boutons_that_one_recording_lacks_are_listed_and_still_fitted(recorded):
    first = recorded("first", 0.4, seed=8)
    second = recorded("second", 0.4, seed=9, order=[0, 1, 2, 3])
    comparison = compare_recordings([first, second], settings=SETTINGS)
    assert comparison.unmatched["bouton_there"].tolist() == [5, 6]
    assert comparison.unmatched["missing_in"].tolist() == ["second", "second"]
    alone = comparison.joint[comparison.joint["recordings"] == 1]
    assert alone["bouton"].tolist() == [5, 6]
    assert alone["changed"].isna().all()
    assert alone["note"].str.contains("one recording").all()
    assert len(comparison.changes) == 4
    assert any("not found again in second" in caution for caution in comparison.cautions)
    assert any("fewer than six boutons" in caution for caution in comparison.cautions)


def test_silent_boutons_have_no_ratio_and_no_sites_but_an_upper_limit(recorded):
    p = np.array([0.4, 0.4, 0.4, 0.4, 0.4, 0.0])
    comparison = compare_recordings([recorded("a", p, seed=10), recorded("b", p, seed=11)], settings=SETTINGS)
    silent = comparison.joint.iloc[5]
    assert np.isnan(silent["q"])
    assert silent["note"] == "no release told apart from noise"
    assert np.isnan(comparison.changes.iloc[5]["q_ratio"])
    assert (comparison.conditions["p_release_hi"].iloc[-2:] < 1.0).all()
    assert comparison.variance_mean.iloc[5]["note"]


def test_recordings_at_several_intervals_give_a_time_constant(make_recording):
    gaps, recordings = (0.02, 0.05, 0.1, 0.2, 0.5), []
    for k, gap in enumerate(gaps):
        more = 1.0 + 1.2 * np.exp(-gap / 0.1)
        amplitude = release(0.25, seed=20 + k, sites=np.full(6, 3), facilitation=more, trials=200)
        recordings.append(
            make_recording(
                name=f"{1000 * gap:.0f} ms", position_px=PLACES, amplitude=amplitude, noise_sd=NOISE_SD,
                mean_image=field(seed=k), pulse_interval_s=gap,
            )
        )  # fmt: skip
    comparison = compare_recordings(recordings, settings=SETTINGS)
    assert len(comparison.intervals) == 6 * len(gaps)
    assert comparison.intervals["trials"].eq(200).all()
    assert comparison.intervals["interval_s"].to_numpy()[:5] == pytest.approx(gaps)
    chosen = comparison.recovery
    assert (chosen["model"] == "facilitation").sum() >= 4
    covered = (chosen["facilitation_s_lo"] < 0.1) & ~(chosen["facilitation_s_hi"] < 0.1)
    assert covered.sum() >= 4


def test_one_interval_gives_no_time_course(recorded):
    comparison = compare_recordings([recorded("a", 0.4, seed=1), recorded("b", 0.4, seed=2)], settings=SETTINGS)
    assert len(comparison.intervals) == len(comparison.recovery) == 0


def test_one_recording_one_name_or_no_partner_is_refused(recorded, make_recording):
    one = recorded("a", 0.4, seed=1)
    with pytest.raises(InputError, match=r"needs two or more analyses \(given 1\)"):
        compare_recordings([one], settings=SETTINGS)
    with pytest.raises(InputError, match=r"Two recordings are called a"):
        compare_recordings([one, one], settings=SETTINGS)
    away = make_recording(name="b", position_px=[(40.0, 5.0)], mean_image=field(seed=2))
    with pytest.raises(InputError, match=r"No bouton of a was found in b: give the pairs"):
        compare_recordings([one, away], settings=SETTINGS)


def test_the_same_seed_gives_the_same_tables(recorded):
    recordings = [recorded("a", 0.3, seed=1), recorded("b", 0.5, seed=2)]
    one, two = (compare_recordings(recordings, settings=SETTINGS) for _ in range(2))
    assert one.changes.equals(two.changes)
    assert one.variance_mean.equals(two.variance_mean)
