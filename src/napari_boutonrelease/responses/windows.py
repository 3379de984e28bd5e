"""Which frames each fit uses: the window of every trial, and pseudo-stimuli where nothing was stimulated."""

from __future__ import annotations

from dataclasses import dataclass
from itertools import pairwise
from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from ..recording.timing import Timing
    from ..response_shape import ResponseShape

__all__ = ["Windows", "plan_null_windows", "plan_trial_windows", "rest_frames", "rest_s"]

_TAIL_DECAYS = 5.0
"""A response counts as over when it has fallen to exp(-5) of its peak."""

_MAX_NULLS = 2000
"""More pseudo-stimuli than this would only cost time: the SD of 2000 amplitudes is known to 2 %."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Windows:
    """Stretches of frames, each fitted with its own baseline.

    Attributes
    ----------
    start, stop : (n_windows,) ndarray of int
        First frame, and the frame after the last.
    baseline_stop : (n_windows,) ndarray of int
        Frames from `start` to here end before the first pulse.
    pulse_s : (n_windows, n_pulses) ndarray
        Times of the pulses on the recording's clock; NaN where there is none.
    exclusive : bool
        No frame belongs to two windows, so that a response may be followed into later windows.
    """

    start: NDArray[np.intp]
    stop: NDArray[np.intp]
    baseline_stop: NDArray[np.intp]
    pulse_s: NDArray[np.float64]
    exclusive: bool


def rest_s(shape: ResponseShape) -> float:
    """Time after a stimulus until its response has fallen to exp(-5) of its peak, in s."""
    return shape.end_s(remaining=float(np.exp(-_TAIL_DECAYS)))


def plan_trial_windows(*, timing: Timing, tail_s: float, baseline_s: float | None) -> Windows:
    """Give each trial the frames that its fit uses; no frame is given to two trials.

    Parameters
    ----------
    timing : Timing
        Frames and stimuli.
    tail_s : float
        Time after a stimulus until its response is over, in s.
    baseline_s : float or None
        Time before the first pulse that is used, in s. None: all since the previous trial's responses were over, but
        not more than twice `tail_s`, since what lies further back says little about the baseline now. Where the
        trials are so close that this leaves less than a quarter of the gap, that quarter is used: the previous
        tail is fitted with it.

    Returns
    -------
    Windows
        One window a trial, in the order of the trials. A trial without any stimulus has an empty window.
    """
    first_s = np.fmin.reduce(timing.stimulus_s, axis=1)
    last_s = np.fmax.reduce(timing.stimulus_s, axis=1)
    start = np.zeros(first_s.size, dtype=np.intp)
    stop = np.zeros_like(start)
    segment_start, segment_stop = _segment_bounds(timing)
    order = [int(i) for i in np.argsort(first_s, kind="stable") if np.isfinite(first_s[i])]
    for position, trial in enumerate(order):
        segment = timing.trial_segment[trial]
        low, high = segment_start[segment], segment_stop[segment]
        before = order[position - 1] if position else None
        before_s = -np.inf if before is None or timing.trial_segment[before] != segment else last_s[before]
        gap_s = first_s[trial] - before_s
        if baseline_s is None:
            pre_s = min(max(gap_s - tail_s, gap_s / 4), 2 * tail_s)
        else:
            pre_s = min(baseline_s, max(gap_s - tail_s, gap_s / 2))
        start[trial] = max(low, np.searchsorted(timing.frame_start_s, first_s[trial] - pre_s, side="left"))
        stop[trial] = min(high, np.searchsorted(timing.frame_start_s, last_s[trial] + 2 * tail_s, side="left"))
        if before is not None:
            stop[before] = min(stop[before], start[trial])
    return Windows(
        start=start,
        stop=np.maximum(stop, start),
        baseline_stop=_baseline_stop(timing, start, first_s),
        pulse_s=timing.stimulus_s,
        exclusive=True,
    )


def rest_frames(*, timing: Timing, used: NDArray[np.bool_], tail_s: float) -> NDArray[np.bool_]:
    """Tell which usable frames hold neither a stimulus nor the tail of a response.

    Parameters
    ----------
    timing : Timing
        Frames and stimuli.
    used : (n_frames,) ndarray of bool
        Frames that may be used at all.
    tail_s : float
        Time after a stimulus until its response is over, in s.

    Returns
    -------
    (n_frames,) ndarray of bool
    """
    rest = np.array(used, dtype=bool)
    segment_start, segment_stop = _segment_bounds(timing)
    for trial, pulses in enumerate(timing.stimulus_s):
        low, high = segment_start[timing.trial_segment[trial]], segment_stop[timing.trial_segment[trial]]
        for pulse_s in pulses[np.isfinite(pulses)]:
            # A row read late shows up to one frame interval more, hence one interval before.
            begin = np.searchsorted(timing.frame_start_s, pulse_s - 2 * timing.frame_interval_s, side="right")
            end = np.searchsorted(timing.frame_start_s, pulse_s + tail_s, side="left")
            rest[max(low, begin) : min(high, end)] = False
    return rest


def plan_null_windows(
    *, timing: Timing, used: NDArray[np.bool_], shape: ResponseShape, trials: Windows, slope: bool
) -> Windows:
    """Place pseudo-stimuli wherever a window holds no stimulus, no tail of one and no unusable frame.

    The pseudo-stimuli take the sub-frame phases and the pulse patterns of the real ones in turn, and their windows the
    frames before and after of a typical trial, both as far as the gap allows.

    Parameters
    ----------
    timing : Timing
        Frames and stimuli.
    used : (n_frames,) ndarray of bool
        Frames that may be used.
    shape : ResponseShape
        Time course of a response.
    trials : Windows
        Windows of the real trials.
    slope : bool
        The fits have a sloping baseline, which needs longer windows.

    Returns
    -------
    Windows
        One window a pseudo-stimulus, which may overlap; empty where there is no room.
    """
    interval = timing.frame_interval_s
    decay_frames = max(1.0, shape.decay_s / interval)
    least_before = max(3, int(np.ceil(decay_frames))) * (2 if slope else 1)
    least_after = max(3, int(np.ceil((shape.latency_s + shape.rise_s) / interval + 2 * decay_frames))) * (
        2 if slope else 1
    )
    step = max(3, int(np.ceil(2 * decay_frames)))
    real = [int(i) for i in np.flatnonzero(trials.stop > trials.start)]
    empty = np.zeros(0, dtype=np.intp)
    if not real:
        none_s = np.zeros((0, timing.stimulus_s.shape[1]))
        return Windows(start=empty, stop=empty, baseline_stop=empty, pulse_s=none_s, exclusive=False)
    first_s = np.fmin.reduce(timing.stimulus_s, axis=1)
    first_frame = np.clip(np.searchsorted(timing.frame_start_s, first_s[real], side="right") - 1, 0, None)
    before = max(least_before, int(np.median(first_frame - trials.start[real])))
    after = max(least_after, int(np.median(trials.stop[real] - first_frame)))
    phase_s = np.clip(first_s[real] - timing.frame_start_s[first_frame], 0.0, interval)

    rest = rest_frames(timing=timing, used=used, tail_s=rest_s(shape))
    chosen = [
        (position, low, high)
        for low, high in _runs(rest, timing.segment)
        for position in range(low + least_before, high - least_after + 1, step)
    ]
    chosen = chosen[:: max(1, -(-len(chosen) // _MAX_NULLS))]
    start = np.array([max(low, position - before) for position, low, _ in chosen], dtype=np.intp)
    stop = np.array([min(high, position + after) for position, _, high in chosen], dtype=np.intp)
    pulse_s = np.full((len(chosen), timing.stimulus_s.shape[1]), np.nan)
    for k, (position, _, _) in enumerate(chosen):
        like = k % len(real)
        pattern_s = np.sort(timing.stimulus_s[real[like]]) - first_s[real[like]]  # NaN goes last
        pulse_s[k] = timing.frame_start_s[position] + phase_s[like] + pattern_s
        room_s = timing.frame_start_s[stop[k] - 1] - (least_after - 1) * interval + phase_s[like]
        pulse_s[k, pulse_s[k] > room_s + 1e-9] = np.nan
    null_first_s = np.fmin.reduce(pulse_s, axis=1) if chosen else np.zeros(0)
    return Windows(
        start=start,
        stop=stop,
        baseline_stop=_baseline_stop(timing, start, null_first_s),
        pulse_s=pulse_s,
        exclusive=False,
    )


def _segment_bounds(timing: Timing) -> tuple[dict[int, int], dict[int, int]]:
    names, first, count = np.unique(timing.segment, return_index=True, return_counts=True)
    return (
        {int(name): int(low) for name, low in zip(names, first, strict=True)},
        {int(name): int(low + n) for name, low, n in zip(names, first, count, strict=True)},
    )


def _baseline_stop(timing: Timing, start: NDArray[np.intp], first_s: NDArray[np.float64]) -> NDArray[np.intp]:
    """Frames before this one have ended, in every row, when the first pulse comes."""
    early = np.searchsorted(timing.frame_start_s, first_s - timing.frame_interval_s + 1e-9, side="right")
    return np.maximum(np.where(np.isfinite(first_s), early, start), start)


def _runs(mask: NDArray[np.bool_], segment: NDArray[np.intp]) -> list[tuple[int, int]]:
    """Stretches [low, high) of true values that stay within a segment."""
    run = np.where(mask, segment, -1)
    edges = np.flatnonzero(np.diff(run)) + 1
    bounds = np.concatenate([[0], edges, [run.size]])
    return [(int(low), int(high)) for low, high in pairwise(bounds) if high > low and mask[low]]
