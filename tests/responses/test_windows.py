import numpy as np
import pytest

from napari_boutonrelease.response_shape import ResponseShape
from napari_boutonrelease.responses import plan_null_windows, plan_trial_windows, rest_frames, rest_s


def test_a_response_rests_when_exp_minus_five_is_left(shape):
    assert shape.value(rest_s(shape)) == pytest.approx(np.exp(-5), rel=0.2)


def test_trial_windows_are_disjoint_and_hold_their_pulses(make_timing, make_regular, shape):
    timing = make_timing(make_regular(trials=30), n_frames=3100)
    windows = plan_trial_windows(timing=timing, tail_s=rest_s(shape), baseline_s=None)
    assert np.all(windows.start[1:] >= windows.stop[:-1])
    begin, end = timing.frame_start_s[windows.start], timing.frame_start_s[windows.stop - 1]
    assert np.all(begin < timing.stimulus_s[:, 0])
    assert np.all(end > timing.stimulus_s[:, -1] + 3 * shape.decay_s)
    assert np.all(timing.frame_start_s[windows.baseline_stop - 1] + 0.01 <= timing.stimulus_s[:, 0] + 1e-9)
    assert np.all(windows.baseline_stop - windows.start > 10)


def test_a_given_baseline_is_kept(make_timing, make_regular, shape):
    timing = make_timing(make_regular(trials=10, interval_s=2.0), n_frames=2000)
    windows = plan_trial_windows(timing=timing, tail_s=rest_s(shape), baseline_s=0.2)
    assert np.all(windows.baseline_stop - windows.start == 20)


def test_windows_never_leave_their_segment(make_timing, shape):
    timing = make_timing(
        [[0.02], [1.02], [2.02]], n_frames=300, segment=np.repeat([0, 1, 2], 100), trial_segment=[0, 1, 2]
    )
    windows = plan_trial_windows(timing=timing, tail_s=rest_s(shape), baseline_s=None)
    for trial in range(3):
        assert set(timing.segment[windows.start[trial] : windows.stop[trial]]) == {trial}


def test_a_trial_without_stimulus_has_an_empty_window(make_timing, shape):
    timing = make_timing([[0.5, 0.6], [np.nan, np.nan], [2.5, np.nan]], n_frames=400)
    windows = plan_trial_windows(timing=timing, tail_s=rest_s(shape), baseline_s=None)
    assert (windows.stop - windows.start > 0).tolist() == [True, False, True]


def test_null_windows_are_free_of_stimuli_tails_and_bad_frames(make_timing, make_regular, shape):
    rng = np.random.default_rng(1)
    timing = make_timing(make_regular(trials=40, jitter=rng), n_frames=4000)
    used = np.ones(4000, dtype=bool)
    used[rng.integers(0, 4000, 40)] = False
    trials = plan_trial_windows(timing=timing, tail_s=rest_s(shape), baseline_s=None)
    nulls = plan_null_windows(timing=timing, used=used, shape=shape, trials=trials, slope=False)
    assert nulls.start.size > 40
    rest = rest_frames(timing=timing, used=used, tail_s=rest_s(shape))
    for low, high, pulses in zip(nulls.start, nulls.stop, nulls.pulse_s, strict=True):
        assert rest[low:high].all()
        begin, end = timing.frame_start_s[low], timing.frame_start_s[high - 1] + 0.01
        assert not np.any((timing.stimulus_s > begin - rest_s(shape)) & (timing.stimulus_s < end))
        assert begin + 2 * 0.01 < pulses[0] < end - 2 * shape.decay_s


def test_pseudo_stimuli_fall_into_frames_as_stimuli_do(make_timing, make_regular, shape):
    rng = np.random.default_rng(2)
    timing = make_timing(make_regular(trials=60, jitter=rng), n_frames=6000)
    trials = plan_trial_windows(timing=timing, tail_s=rest_s(shape), baseline_s=None)
    nulls = plan_null_windows(timing=timing, used=np.ones(6000, dtype=bool), shape=shape, trials=trials, slope=False)
    phase = np.sort((timing.stimulus_s[:, 0] / 0.01) % 1)
    null_phase = (nulls.pulse_s[:, 0] / 0.01) % 1
    distance = np.abs(null_phase[:, None] - phase)
    assert np.max(np.min(np.minimum(distance, 1 - distance), axis=1)) < 1e-6
    assert len(np.unique(null_phase.round(6))) == 60


def test_no_room_no_null(make_timing, make_regular):
    timing = make_timing(make_regular(trials=20, interval_s=0.5), n_frames=1030)
    slow = ResponseShape(latency_s=0.0, rise_s=0.01, decay_s=1.0)
    trials = plan_trial_windows(timing=timing, tail_s=rest_s(slow), baseline_s=None)
    nulls = plan_null_windows(timing=timing, used=np.ones(1030, dtype=bool), shape=slow, trials=trials, slope=False)
    assert nulls.start.size == 0
    assert nulls.pulse_s.shape == (0, 2)
