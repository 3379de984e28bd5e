"""Response maps of small noise-free movies, whose amplitudes are known exactly."""

from dataclasses import replace

import numpy as np
import pytest

from napari_boutonrelease.boutons import project_responses, scan_shapes
from napari_boutonrelease.boutons.windows import null_windows, trial_windows
from napari_boutonrelease.errors import InputError
from napari_boutonrelease.recording import Timing, movie_from_array
from napari_boutonrelease.recording.motion import Drift
from napari_boutonrelease.response_shape import ResponseShape

from .conftest import spot

FRAME_S = 0.01
SIZE = (12, 20)
SHAPE = ResponseShape(latency_s=0.002, rise_s=0.003, decay_s=0.05)


def timing(stimulus_s, *, n_frames, row_time_s=0.0, segment=None, trial_segment=None, exposure_s=FRAME_S):
    stimulus_s = np.asarray(stimulus_s, dtype=float)
    return Timing(
        frame_interval_s=FRAME_S,
        exposure_s=exposure_s,
        row_time_s=row_time_s,
        pixel_size_um=0.2,
        camera_offset=None,
        found_in={},
        frame_start_s=FRAME_S * np.arange(n_frames),
        segment=np.zeros(n_frames, dtype=np.int64) if segment is None else segment,
        stimulus_s=stimulus_s,
        trial_segment=np.zeros(len(stimulus_s), dtype=np.int64) if trial_segment is None else trial_segment,
    )


def still(n_frames, *, size=SIZE, **changes):
    drift = Drift(
        dy_px=np.zeros(n_frames),
        dx_px=np.zeros(n_frames),
        match=np.ones(n_frames),
        used=np.ones(n_frames, dtype=bool),
        reference=np.zeros(size),
        noise_px=float("nan"),
        corrected=False,
    )
    return replace(drift, **changes)


def film(when, amplitudes, *, image=None, size=SIZE):
    """Frames of an image whose brightness responds to every pulse, row by row at its own time."""
    image = np.ones(size) if image is None else image
    frames = np.full((len(when.frame_start_s), *size), 200.0)
    for row in range(size[0]):
        since = when.frame_start_s + row * when.row_time_s
        for times, heights in zip(when.stimulus_s, amplitudes, strict=True):
            for time, height in zip(times[np.isfinite(times)], heights, strict=False):
                course = height * SHAPE.frame_average(since - time, exposure_s=when.exposure_s)
                frames[:, row] += course[:, None] * image[row]
    return movie_from_array(frames, frame_interval_s=FRAME_S, pixel_size_um=0.2)


def project(movie, when, drift=None, **kwargs):
    settings = {
        "shape": SHAPE,
        "pre_s": 0.1,
        "post_s": 0.25,
        "memory_bytes": 1e8,
        "block_frames": 37,
        "progress": None,
    }
    return project_responses(
        movie, timing=when, drift=drift or still(movie.shape[0], size=movie.shape[1:]), **{**settings, **kwargs}
    )


@pytest.mark.parametrize("row_time_s", [0.0, 0.0006])
def test_amplitudes_are_exact_pulse_by_pulse_and_row_by_row(row_time_s):
    when = timing([[0.503, 0.558], [1.5071, 1.5571], [2.5, 2.55]], n_frames=350, row_time_s=row_time_s)
    truth = np.array([[10.0, 4.0], [0.0, 7.0], [-3.0, 20.0]])
    stack = project(film(when, truth), when)
    np.testing.assert_array_equal(stack.evoked_trial, [0, 0, 1, 1, 2, 2])
    np.testing.assert_array_equal(stack.evoked_pulse, [0, 1, 0, 1, 0, 1])
    np.testing.assert_allclose(stack.evoked[:, 5, 7], truth.ravel(), atol=2e-3)
    np.testing.assert_allclose(stack.evoked, np.broadcast_to(truth.ravel()[:, None, None], (6, *SIZE)), atol=2e-3)
    assert stack.null_from == "gaps"
    assert np.abs(stack.null).max() < 0.2  # tails of five decays hold a hundred-and-fiftieth of a response


def test_noise_factors_are_what_white_noise_gets():
    rng = np.random.default_rng(1)
    when = timing(0.5 + np.arange(8)[:, None] + [[0.0, 0.05]], n_frames=900)
    movie = movie_from_array(rng.normal(200, 3.0, (900, 40, 40)), frame_interval_s=FRAME_S)
    stack = project(movie, when)
    measured = stack.evoked.std(axis=(1, 2)) / 3.0
    np.testing.assert_allclose(measured, stack.evoked_factor, rtol=0.1)
    np.testing.assert_allclose(stack.null.std(axis=(1, 2)) / 3.0, stack.null_factor, rtol=0.1)
    pairs = stack.evoked.reshape(8, 2, -1)
    seen = np.mean([np.corrcoef(pair)[0, 1] for pair in pairs])
    assert seen == pytest.approx(stack.evoked_correlation[0][0, 1], abs=0.05)


def test_frames_left_out_do_not_touch_the_fit():
    when = timing([[0.5], [1.5]], n_frames=250)
    movie = film(when, [[10.0], [5.0]])
    frames = movie.read(0, 250).copy()
    used = np.ones(250, dtype=bool)
    used[[52, 53, 90]] = False
    frames[~used] = 1e6
    stack = project(movie_from_array(frames, frame_interval_s=FRAME_S), when, still(250, used=used))
    np.testing.assert_allclose(stack.evoked[:, 3, 3], [10.0, 5.0], atol=2e-3)
    assert stack.evoked_factor[0] > stack.evoked_factor[1]


def test_a_trial_without_its_response_frames_is_left_out():
    when = timing([[0.5], [1.5], [2.5]], n_frames=350)
    used = np.ones(350, dtype=bool)
    used[150:200] = False
    stack = project(film(when, [[1.0]] * 3), when, still(350, used=used))
    np.testing.assert_array_equal(stack.evoked_trial, [0, 2])


def test_drift_is_followed():
    size = (24, 30)
    when = timing(0.5 + np.arange(4.0)[:, None], n_frames=450)
    dy = 1.3 * np.sin(np.arange(450) / 40)
    dx = -0.8 * np.cos(np.arange(450) / 55)
    frames = np.empty((450, *size))
    for index, (a, b) in enumerate(zip(dy, dx, strict=True)):
        response = sum(
            SHAPE.frame_average(when.frame_start_s[index] - time, exposure_s=FRAME_S) for time in when.stimulus_s[:, 0]
        )
        frames[index] = 100 + (300 + 60 * response) * spot(12 + a, 15 + b, shape=size, sigma=1.8)
    movie = movie_from_array(frames, frame_interval_s=FRAME_S)
    moved = still(450, size=size, dy_px=dy, dx_px=dx, corrected=True)
    stack = project(movie, when, moved)
    expected = 60 * spot(12, 15, shape=size, sigma=1.8)
    inner = np.s_[3:-3, 3:-3]
    assert np.abs(stack.evoked.mean(axis=0) - expected)[inner].max() < 2.5
    assert np.abs(stack.mean_image - 100 - 300 * spot(12, 15, shape=size, sigma=1.8))[inner].max() < 12
    unmoved = project(movie, when)
    assert np.abs(unmoved.evoked.mean(axis=0) - expected)[inner].max() > 10


def test_windows_stay_in_their_file_and_off_other_stimuli():
    segment = np.repeat([0, 1, 2], 100)
    when = timing([[0.2], [1.95], [2.3]], n_frames=300, segment=segment, trial_segment=np.array([0, 1, 2]))
    used = np.ones(300, dtype=bool)
    trials = trial_windows(when, used=used, shape=SHAPE, pre_s=0.1, post_s=0.25)
    for window, file in zip(trials, (0, 1, 2), strict=True):
        assert set(segment[window.frames]) == {file}
    assert trials[1].frames.max() == 199
    for window in null_windows(when, used=used, shape=SHAPE, pre_s=0.1, post_s=0.25):
        assert len(set(segment[window.frames])) == 1
        starts = when.frame_start_s[window.frames]
        for time in when.stimulus_s[:, 0]:
            in_file = when.segment[round(time / FRAME_S)] == segment[window.frames[0]]
            assert not (in_file and np.any((starts + FRAME_S > time) & (starts < time + 0.002 + 5 * 0.05 - 1e-9)))


def test_null_windows_fill_a_long_gap_without_overlap():
    when = timing([[0.5]], n_frames=1000)
    windows = null_windows(when, used=np.ones(1000, dtype=bool), shape=SHAPE, pre_s=0.1, post_s=0.25)
    frames = np.concatenate([window.frames for window in windows])
    assert len(np.unique(frames)) == len(frames)
    assert len(windows) == int(0.5 / 0.35) + int((10 - 0.5 - 0.252) / 0.35)


def test_without_gaps_the_noise_comes_from_differences():
    rng = np.random.default_rng(2)
    when = timing(0.1 + 0.3 * np.arange(30.0)[:, None], n_frames=920)
    movie = movie_from_array(rng.normal(100, 2.0, (920, 30, 30)), frame_interval_s=FRAME_S)
    stack = project(movie, when, pre_s=0.08, post_s=0.2)
    assert stack.null_from == "differences"
    assert len(stack.null) == 29
    np.testing.assert_allclose(stack.null.std(axis=(1, 2)) / 2.0, stack.null_factor, rtol=0.12)


def test_memory_bounds_the_number_of_maps():
    when = timing(0.5 + np.arange(10)[:, None] + [[0.0, 0.05, 0.1]], n_frames=1100)
    truth = np.arange(30.0).reshape(10, 3)
    movie = film(when, truth)
    a_map = 4 * SIZE[0] * SIZE[1]
    two = project(movie, when, memory_bytes=46 * a_map)
    assert two.evoked.nbytes + two.null.nbytes <= 46 * a_map
    np.testing.assert_array_equal(np.unique(two.evoked_pulse), [0, 1])
    np.testing.assert_allclose(two.evoked[:, 4, 4], truth[:, :2].ravel(), atol=5e-3)
    few = project(movie, when, memory_bytes=16 * a_map)
    np.testing.assert_array_equal(few.evoked_pulse, np.zeros(8))
    assert few.evoked_trial[0] == 0
    assert few.evoked_trial[-1] == 9


def test_trials_may_hold_different_numbers_of_pulses():
    when = timing([[0.5, 0.55], [1.5, np.nan]], n_frames=260)
    stack = project(film(when, [[10.0, 5.0], [8.0]]), when)
    np.testing.assert_array_equal(stack.evoked_trial, [0, 0, 1])
    np.testing.assert_allclose(stack.evoked[:, 2, 2], [10.0, 5.0, 8.0], atol=2e-3)


def test_too_few_trials_are_refused():
    when = timing([[0.5]], n_frames=100)
    with pytest.raises(InputError, match="1 of 1 trials can be fitted"):
        project(film(when, [[1.0]]), when)


def test_progress_ends_with_all_blocks():
    when = timing([[0.5], [1.5]], n_frames=250)
    seen = []
    project(film(when, [[1.0], [1.0]]), when, progress=lambda done, total: seen.append((done, total)))
    assert seen[-1][0] == seen[-1][1] == len(seen)


def test_the_right_kinetics_show_most_clearly():
    rng = np.random.default_rng(3)
    size = (40, 40)
    when = timing(0.5 + np.arange(12.0)[:, None], n_frames=1250)
    clean = film(when, [[40.0]] * 12, image=spot(20, 20, shape=size, sigma=1.4), size=size).read(0, 1250)
    movie = movie_from_array(clean + rng.normal(0, 10.0, clean.shape), frame_interval_s=FRAME_S)
    decays = [0.0125, 0.05, 0.2]
    scores = scan_shapes(
        movie,
        timing=when,
        drift=still(1250, size=size),
        candidates=[replace(SHAPE, decay_s=decay) for decay in decays],
        pre_s=0.1,
        post_s=0.3,
        spot_sigma_px=1.4,
        block_frames=100,
        progress=None,
    )
    assert np.argmax(scores) == 1
    assert scores[1] > 1.1 * max(scores[0], scores[2])


@pytest.mark.parametrize("heights", [[40.0, 40.0], [40.0, 15.0], [60.0, 50.0, 40.0, 30.0, 20.0, 15.0]])
def test_pulses_of_a_train_may_differ_in_height(heights):
    """The true decay wins though pulses overlap and are not alike."""
    rng = np.random.default_rng(7)
    size = (40, 40)
    when = timing(0.5 + np.arange(12.0)[:, None] + 0.05 * np.arange(len(heights)), n_frames=1250)
    clean = film(when, [heights] * 12, image=spot(20, 20, shape=size, sigma=1.4), size=size).read(0, 1250)
    movie = movie_from_array(clean + rng.normal(0, 10.0, clean.shape), frame_interval_s=FRAME_S)
    decays = [0.02, 0.035, 0.05, 0.07, 0.12]
    scores = scan_shapes(
        movie,
        timing=when,
        drift=still(1250, size=size),
        candidates=[replace(SHAPE, decay_s=decay) for decay in decays],
        pre_s=0.1,
        post_s=0.2,
        spot_sigma_px=1.4,
        block_frames=100,
        progress=None,
    )
    assert decays[int(np.argmax(scores))] == SHAPE.decay_s
