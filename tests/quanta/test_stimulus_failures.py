"""Failed stimuli: found among enough boutons, p_release freed of them, and nothing found where chance explains it."""

import numpy as np
import pytest

from napari_boutonrelease.errors import InputError
from napari_boutonrelease.quanta import find_stimulus_failures, release_log_ratio

Q, SNR, Q_CV = 0.1, 4.4, 0.3


def record(rng, p, *, trials=60, pulses=1, failed=0.0, rundown=0.0):
    """Draw amplitudes and give back which stimuli failed, and the log ratios."""
    p = np.asarray(p)
    lost = rng.random((trials, pulses)) < failed
    chance = p[:, None, None] * (1 - rundown * np.linspace(0, 1, trials))[None, :, None]
    released = (rng.random((len(p), trials, pulses)) < chance) & ~lost
    size = Q * rng.gamma(1 / Q_CV**2, Q_CV**2, released.shape)
    amplitude = released * size + rng.normal(0, Q / SNR, released.shape)
    ratio = release_log_ratio(
        amplitude,
        np.full(amplitude.shape, Q / SNR),
        q=np.full(len(p), Q),
        q_cv=Q_CV,
        n_sites=np.ones(len(p)),
        p_site=np.clip(np.repeat(p[:, None], pulses, axis=1), 0.01, 0.99),
    )
    return lost, ratio


def study(rng, p, *, repeats, **recording):
    hits = false = missed = rejected = covered = 0
    bias = []
    for _ in range(repeats):
        lost, ratio = record(rng, p, **recording)
        found = find_stimulus_failures(ratio, confidence=0.95)
        suspected = (found.probability > 0.5) & (found.p_none < 0.05)
        hits += np.sum(suspected & lost)
        false += np.sum(suspected & ~lost)
        missed += np.sum(~suspected & lost)
        rejected += found.p_none < 0.05
        covered += found.share.lo <= recording.get("failed", 0.0) <= found.share.hi
        bias.append(found.p_release.mean(axis=1) - p * (1 - recording.get("rundown", 0.0) / 2))
    sensitivity, precision = hits / max(hits + missed, 1), hits / max(hits + false, 1)
    return sensitivity, precision, rejected / repeats, covered / repeats, np.mean(bias, axis=0)


def test_failed_stimuli_among_ten_boutons_are_found_and_p_release_is_free_of_them():
    p = np.linspace(0.1, 0.9, 10)
    sensitivity, precision, rejected, covered, bias = study(
        np.random.default_rng(1), p, repeats=30, trials=80, failed=0.06
    )
    assert sensitivity >= 0.9
    assert precision >= 0.9
    assert rejected > 0.9
    assert covered > 0.8
    assert abs(bias.mean()) < 0.01  # with the failures it would be -0.03
    assert np.abs(bias).max() < 0.04


@pytest.mark.parametrize(("p", "rundown"), [(np.linspace(0.05, 0.4, 6), 0.0), (np.linspace(0.1, 0.5, 8), 0.5)])
def test_without_failures_few_recordings_are_suspected(p, rundown):
    _, _, rejected, covered, bias = study(np.random.default_rng(2), p, repeats=40, trials=60, rundown=rundown)
    assert rejected < 0.2  # 40 draws of 0.05
    assert covered > 0.8
    assert abs(bias.mean()) < 0.02


@pytest.mark.validation
def test_the_test_and_the_interval_keep_their_word():
    for p, options in (
        (np.linspace(0.1, 0.9, 10), {"failed": 0.06}),
        (np.linspace(0.1, 0.9, 10), {}),
        (np.linspace(0.05, 0.4, 6), {}),
        (np.full(6, 0.4), {"failed": 0.1}),
        (np.linspace(0.1, 0.5, 8), {"rundown": 0.5}),
    ):
        _, _, rejected, covered, bias = study(np.random.default_rng(3), p, repeats=600, **options)
        if not options.get("failed"):
            assert rejected < 0.08
        assert covered > 0.92
        assert (
            abs(bias.mean()) < 0.015
        )  # a share cannot be negative: without failures p_release comes out a little high


def test_one_failed_pulse_of_a_trial_is_told_from_the_other():
    rng = np.random.default_rng(4)
    _, ratio = record(rng, np.full(12, 0.6), pulses=2)
    ratio[:, [5, 20, 41], 1] = -8.0
    found = find_stimulus_failures(ratio, confidence=0.95)
    assert np.argwhere(found.probability > 0.5).tolist() == [[5, 1], [20, 1], [41, 1]]
    assert found.share.value == pytest.approx(3 / 120, abs=0.005)
    assert found.all_failed == pytest.approx(3, abs=0.2)
    assert found.all_failed_expected < 0.1


def test_missing_amplitudes_neither_count_nor_fail():
    rng = np.random.default_rng(5)
    lost, ratio = record(rng, np.full(10, 0.6), failed=0.1)
    ratio[:, 7] = np.nan
    ratio[3] = np.nan
    found = find_stimulus_failures(ratio, confidence=0.95)
    assert np.isnan(found.probability[7])
    assert np.isnan(found.p_release[3])
    kept = np.arange(60) != 7
    assert np.array_equal(found.probability[kept] > 0.5, lost[kept])


@pytest.mark.parametrize("boutons", [0, 1])
def test_one_bouton_cannot_tell_a_failed_stimulus(boutons):
    found = find_stimulus_failures(np.zeros((boutons, 20, 1)), confidence=0.95)
    assert found.share.method.startswith("none: needs at least 2 boutons")
    assert np.isnan(found.probability).all()
    assert found.probability.shape == (20, 1)


def test_boutons_that_never_release_say_nothing_of_stimuli():
    rng = np.random.default_rng(6)
    _, ratio = record(rng, np.zeros(4))
    found = find_stimulus_failures(ratio, confidence=0.95)
    assert found.p_none > 0.05
    assert np.isfinite([found.share.value, found.share.lo, found.share.hi]).all()


def test_shapes_must_match():
    with pytest.raises(InputError, match="same boutons and pulses"):
        release_log_ratio(np.zeros((2, 5, 1)), np.ones((2, 5, 1)), q=[0.1], q_cv=0.3, n_sites=[1], p_site=[[0.5]])


def test_a_bouton_without_a_vesicle_has_no_ratio():
    ratio = release_log_ratio(
        np.zeros((2, 3, 1)), np.ones((2, 3, 1)), q=[0.1, np.nan], q_cv=0.3, n_sites=[1, 2], p_site=[[0.5], [0.5]]
    )
    assert np.isfinite(ratio[0]).all()
    assert np.isnan(ratio[1]).all()
