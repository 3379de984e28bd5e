"""Frames and stimuli stand on one clock; what the protocol states wins; what does not fit is refused."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
import tifffile

from napari_boutonrelease.errors import ProtocolError
from napari_boutonrelease.recording import (
    Movie,
    Protocol,
    RegularStimuli,
    StimulusTable,
    Timing,
    frame_times_s,
    movie_from_array,
    open_movie,
    resolve_timing,
    segment_frames,
    stimulus_frame,
)


def movie_of(n_frames: int = 100, **options: object) -> Movie:
    return movie_from_array(np.zeros((n_frames, 8, 6), np.uint16), **options)


def regular(
    trials: int, *, first_s: float = 0.5, trial_interval_s: float | None = 1.0, pulses: int = 1
) -> RegularStimuli:
    return RegularStimuli(
        first_s=first_s,
        trials=trials,
        trial_interval_s=trial_interval_s,
        pulses=pulses,
        pulse_interval_s=0.1 if pulses > 1 else None,
    )


def timing_of(movie: Movie, stimuli: RegularStimuli | StimulusTable, **stated: float) -> Timing:
    return resolve_timing(movie, Protocol(stimuli=stimuli, **stated))


def test_one_movie_runs_on_one_clock() -> None:
    timing = timing_of(movie_of(), regular(4, pulses=2), frame_interval_s=0.05)
    np.testing.assert_allclose(timing.frame_start_s, 0.05 * np.arange(100))
    np.testing.assert_allclose(timing.stimulus_s, [[0.5, 0.6], [1.5, 1.6], [2.5, 2.6], [3.5, 3.6]])
    assert stimulus_frame(timing).tolist() == [[10, 12], [30, 32], [50, 52], [70, 72]]
    assert not timing.segment.any()
    assert timing.trial_segment.tolist() == [0, 0, 0, 0]
    assert segment_frames(timing, 0) == slice(0, 100)


def test_one_file_a_trial_counts_from_each_file() -> None:
    movie = movie_of(100, file_frames=(30, 45, 25))
    timing = timing_of(movie, regular(3, trial_interval_s=None, pulses=2), frame_interval_s=0.1)
    np.testing.assert_allclose(timing.stimulus_s, [[0.5, 0.6], [3.5, 3.6], [8.0, 8.1]])
    np.testing.assert_allclose(timing.frame_start_s, 0.1 * np.arange(100))
    assert timing.trial_segment.tolist() == [0, 1, 2]
    assert timing.segment.tolist() == [0] * 30 + [1] * 45 + [2] * 25
    assert [segment_frames(timing, k) for k in range(3)] == [slice(0, 30), slice(30, 75), slice(75, 100)]
    assert stimulus_frame(timing)[:, 0].tolist() == [5, 35, 80]
    with_interval = timing_of(movie, regular(3, trial_interval_s=12.0, pulses=2), frame_interval_s=0.1)
    np.testing.assert_array_equal(with_interval.stimulus_s, timing.stimulus_s)


def test_a_table_may_hold_trials_of_unlike_trains() -> None:
    stimuli = StimulusTable(trial=[1, 1, 2, 2], pulse=[1, 2, 1, 3], time_s=[0.2, 0.4, 0.3, 0.9])
    apart = timing_of(movie_of(40, file_frames=(20, 20)), stimuli, frame_interval_s=0.1)
    np.testing.assert_allclose(apart.stimulus_s, [[0.2, 0.4, np.nan], [2.3, np.nan, 2.9]])
    assert stimulus_frame(apart).tolist() == [[2, 4, -1], [23, -1, 29]]
    together = timing_of(movie_of(40), stimuli, frame_interval_s=0.1)
    np.testing.assert_allclose(together.stimulus_s, [[0.2, 0.4, np.nan], [0.3, np.nan, 0.9]])


def test_the_protocol_wins_over_the_movie_and_says_so() -> None:
    movie = movie_of(frame_interval_s=0.05, pixel_size_um=0.1)
    from_movie = timing_of(movie, regular(2))
    assert (from_movie.frame_interval_s, from_movie.pixel_size_um) == (0.05, 0.1)
    assert from_movie.found_in == {
        "frame_interval_s": "given with the array",
        "pixel_size_um": "given with the array",
        "exposure_s": "default: the frame interval",
        "row_time_s": "default: all rows at once",
        "camera_offset": "not stated",
    }
    stated = {"frame_interval_s": 0.04, "pixel_size_um": 0.1, "exposure_s": 0.03, "row_time_s": 1e-3}
    from_protocol = timing_of(movie, regular(2), camera_offset=90.0, **stated)
    assert {key: getattr(from_protocol, key) for key in stated} == stated
    assert from_protocol.camera_offset == 90.0
    assert from_protocol.found_in == {
        "frame_interval_s": "protocol (given with the array says 0.05)",
        "pixel_size_um": "protocol",
        "exposure_s": "protocol",
        "row_time_s": "protocol",
        "camera_offset": "protocol",
    }


def test_the_file_is_named_as_the_source(tmp_path: Path) -> None:
    metadata = {"axes": "TYX", "finterval": 0.05}
    tifffile.imwrite(tmp_path / "m.tif", np.zeros((60, 8, 6), np.uint16), imagej=True, metadata=metadata)
    timing = timing_of(open_movie(tmp_path / "m.tif"), regular(2))
    assert timing.frame_interval_s == pytest.approx(0.05)
    assert timing.exposure_s == timing.frame_interval_s
    assert timing.found_in["frame_interval_s"] == "ImageJ finterval"


def test_rows_begin_one_after_the_other() -> None:
    timing = timing_of(movie_of(), regular(1), frame_interval_s=0.05, row_time_s=0.002)
    np.testing.assert_allclose(frame_times_s(timing, 0), timing.frame_start_s)
    rows = frame_times_s(timing, [0, 3.5])
    assert rows.shape == (2, 100)
    np.testing.assert_allclose(rows[1] - rows[0], 0.007)


def test_a_stimulus_at_a_frame_boundary_falls_into_the_frame_that_begins() -> None:
    timing = timing_of(movie_of(1000), regular(9, first_s=0.3, trial_interval_s=0.7), frame_interval_s=0.1)
    assert stimulus_frame(timing)[:, 0].tolist() == [3 + 7 * k for k in range(9)]


def test_a_frame_interval_that_is_nowhere_is_asked_for() -> None:
    with pytest.raises(ProtocolError, match=r"neither by the movie nor by the protocol: add frame_interval_s"):
        timing_of(movie_of(), regular(1))


def test_stimuli_after_the_end_are_refused() -> None:
    with pytest.raises(
        ProtocolError,
        match=r"^Protocol has 40 stimuli but the movie ends after 31 \(31\.0 s at 0\.050 s a frame\): check "
        r"frame_interval_s or trials\.$",
    ):
        timing_of(movie_of(620), regular(40), frame_interval_s=0.05)
    late = StimulusTable(trial=[1, 2], pulse=[1, 1], time_s=[1.0, 5.0])
    with pytest.raises(ProtocolError, match=r"has 2 stimuli but the movie ends after 1 .* frame_interval_s or times"):
        timing_of(movie_of(), late, frame_interval_s=0.05)
    timing_of(movie_of(620), regular(31), frame_interval_s=0.05)


def test_a_stimulus_after_the_end_of_its_file_is_refused() -> None:
    movie = movie_of(100, file_frames=(60, 40))
    stimuli = StimulusTable(trial=[1, 2], pulse=[1, 1], time_s=[5.0, 5.0])
    with pytest.raises(ProtocolError, match=r"Trial 2 has a stimulus at 5 s but its file part 2 of movie ends at 4 s"):
        timing_of(movie, stimuli, frame_interval_s=0.1)


def test_the_file_that_ends_too_early_is_named(tmp_path: Path) -> None:
    for name, n_frames in (("t2.tif", 20), ("t10.tif", 5)):
        tifffile.imwrite(tmp_path / name, np.zeros((n_frames, 8, 6), np.uint16))
    with pytest.raises(ProtocolError, match=r"Trial 2 has .* file t10\.tif ends at 0\.5 s \(0\.1 s a frame\)"):
        timing_of(open_movie(tmp_path), regular(2), frame_interval_s=0.1)


def test_files_and_trials_must_be_as_many() -> None:
    movie = movie_of(100, file_frames=(50, 50))
    with pytest.raises(ProtocolError, match=r"is 2 files, one a trial, but the protocol has 3 trials: set trials to 2"):
        timing_of(movie, regular(3), frame_interval_s=0.1)


def test_one_movie_of_many_trials_needs_their_interval() -> None:
    with pytest.raises(ProtocolError, match=r"trial_interval_s is missing: movie is one movie of 2 trials"):
        timing_of(movie_of(), regular(2, trial_interval_s=None), frame_interval_s=0.1)
    assert timing_of(movie_of(), regular(1, trial_interval_s=None), frame_interval_s=0.1).stimulus_s.tolist() == [[0.5]]


def test_a_stimulus_listed_twice_is_refused() -> None:
    stimuli = StimulusTable(trial=[1, 2], pulse=[1, 1], time_s=[1.0, 1.0])
    with pytest.raises(ProtocolError, match="Two trials have a stimulus at the same time, 1 s: check times"):
        timing_of(movie_of(), stimuli, frame_interval_s=0.1)


def test_exposure_and_rows_must_fit_the_frame() -> None:
    movie = movie_of(frame_interval_s=0.05)
    with pytest.raises(ProtocolError, match=r"exposure_s = 0\.06 is longer than the frame interval of 0\.05 s"):
        timing_of(movie, regular(1), exposure_s=0.06)
    with pytest.raises(ProtocolError, match=r"row_time_s = 0\.007 makes the 8 rows of movie take 0\.056 s"):
        timing_of(movie, regular(1), row_time_s=0.007)
    assert timing_of(movie, regular(1), exposure_s=0.05, row_time_s=0.05 / 8).exposure_s == 0.05
