"""Stretches of frames on which responses, or the lack of them, are fitted."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from ..recording import Timing
    from ..response_shape import ResponseShape

_TAIL_DECAYS = 5.0  # after so many time constants a response is gone
_SHORTEST = 0.4  # of the full window: a gap shorter than that holds no pseudo-stimulus
_MAX_FACTOR_RATIO = 5.0  # a fit this much noisier than the others has lost the frames that matter


@dataclass(frozen=True, slots=True, kw_only=True)
class Window:
    """Frames of one fit and the stimuli (or pseudo-stimuli) in them.

    Attributes
    ----------
    frames : (n,) ndarray of int
        Usable frames.
    stimulus_s : (n_pulses,) ndarray
        Times on the recording's clock (s).
    trial : int
        Index of the trial; -1 for a pseudo-stimulus.
    pulses : (n_pulses,) ndarray of int
        Index of each pulse within the trial.
    """

    frames: NDArray[np.intp]
    stimulus_s: NDArray[np.float64]
    trial: int
    pulses: NDArray[np.intp]


@dataclass(frozen=True, slots=True, kw_only=True)
class Projection:
    """Linear weights of frames that give the amplitudes of one window's pulses.

    Attributes
    ----------
    window : Window
    weights : (n_rows, n_pulses, n_frames) ndarray of float32
        One row of the image each, or a single one for all where rows are read at once.
    factor : (n_pulses,) ndarray
        SD of an amplitude in units of the SD of one frame's pixel.
    correlation : (n_pulses, n_pulses) ndarray
        Between the errors of the amplitudes: they share the offset and overlap in time.
    """

    window: Window
    weights: NDArray[np.float32]
    factor: NDArray[np.float64]
    correlation: NDArray[np.float64]


def trial_windows(
    timing: Timing, *, used: NDArray[np.bool_], shape: ResponseShape, pre_s: float, post_s: float
) -> list[Window]:
    """One window a trial, from `pre_s` before its first pulse to `post_s` after its last.

    A window never reaches into another file nor to the next trial's stimulus, and begins after the tail of the one
    before as far as that leaves a baseline.
    """
    windows = []
    n_trials = len(timing.stimulus_s)
    present = np.isfinite(timing.stimulus_s)
    all_times = np.sort(timing.stimulus_s[present])
    for trial in range(n_trials):
        pulses = np.flatnonzero(present[trial])
        if not len(pulses):
            continue
        times = timing.stimulus_s[trial, pulses]
        before = all_times[all_times < times[0]]
        after = all_times[all_times > times[-1]]
        begin, end = times[0] - pre_s, times[-1] + post_s
        if len(before):
            tail = before[-1] + shape.latency_s + 3 * shape.decay_s
            begin = max(begin, min(tail, times[0] - 4 * timing.frame_interval_s))
        if len(after):
            end = min(end, after[0])
        frames = _frames_between(timing, begin, end, segment=int(timing.trial_segment[trial]), used=used)
        windows.append(Window(frames=frames, stimulus_s=times, trial=trial, pulses=pulses))
    return windows


def null_windows(
    timing: Timing, *, used: NDArray[np.bool_], shape: ResponseShape, pre_s: float, post_s: float
) -> list[Window]:
    """Place as many windows as fit, one after the other, where there is neither a stimulus nor its tail."""
    times = np.sort(timing.stimulus_s[np.isfinite(timing.stimulus_s)])
    decay = max(shape.decay_s, shape.slow_decay_s if shape.slow_fraction else 0.0)
    quiet = shape.latency_s + _TAIL_DECAYS * decay
    full = pre_s + post_s
    windows = []
    for segment in np.unique(timing.segment):
        frames = np.flatnonzero(timing.segment == segment)
        start = timing.frame_start_s[frames[0]]
        stop = timing.frame_start_s[frames[-1]] + timing.exposure_s
        inside = times[(times >= start) & (times < stop)]
        for begin, end in zip(np.append(start, inside + quiet), np.append(inside, stop), strict=True):
            length = end - begin
            n_fit = int(length / full) if length >= full else int(length >= _SHORTEST * full)
            each = min(full, length)
            # Spread over the gap; the share of baseline and response is that of a trial.
            firsts = (
                begin + (length - n_fit * each) * (np.arange(n_fit) + 0.5) / max(n_fit, 1) + np.arange(n_fit) * each
            )
            windows += [
                Window(
                    frames=_frames_between(timing, first, first + each, segment=int(segment), used=used),
                    stimulus_s=np.array([first + each * pre_s / full]),
                    trial=-1,
                    pulses=np.zeros(1, dtype=np.intp),
                )
                for first in firsts
            ]
    return windows


def _frames_between(
    timing: Timing, begin: float, end: float, *, segment: int, used: NDArray[np.bool_]
) -> NDArray[np.intp]:
    slack = 1e-6 * timing.frame_interval_s
    first = np.searchsorted(timing.frame_start_s, begin - slack)
    last = np.searchsorted(timing.frame_start_s, end - timing.exposure_s + slack, side="right")
    frames = np.arange(first, last, dtype=np.intp)
    return np.asarray(frames[used[first:last] & (timing.segment[first:last] == segment)])


def project(
    windows: Sequence[Window],
    *,
    timing: Timing,
    shape: ResponseShape,
    height_px: int,
    most_responses: int | None = None,
) -> list[Projection]:
    """Return the least-squares weights of each window that can tell the response from the offset.

    In every window an offset and one amplitude a pulse are fitted together (ordinary least squares), so that the tail
    of a pulse is not read as a response to the next. Where there are more pulses than `most_responses`, groups of
    successive ones share an amplitude.
    """
    rows = np.arange(height_px) * timing.row_time_s if timing.row_time_s > 0 else np.zeros(1)
    projections = []
    for window in windows:
        if len(window.frames) < len(window.pulses) + 2:
            continue
        since = timing.frame_start_s[window.frames] - window.stimulus_s[:, None]
        heights = shape.frame_average(since + rows[:, None, None], exposure_s=timing.exposure_s)
        if most_responses is not None and len(window.pulses) > most_responses:
            groups = np.array_split(np.arange(len(window.pulses)), most_responses)
            heights = np.stack([heights[:, group].sum(axis=1) for group in groups], axis=1)
        design = np.concatenate([heights, np.ones((len(rows), 1, len(window.frames)))], axis=1)
        normal = design @ design.transpose(0, 2, 1)
        if np.min(np.linalg.eigvalsh(normal)[:, 0]) < 1e-4:
            continue
        weights = np.linalg.solve(normal, design)[:, :-1]
        covariance = np.mean(weights @ weights.transpose(0, 2, 1), axis=0)
        factor = np.sqrt(np.diag(covariance))
        projections.append(
            Projection(
                window=window,
                weights=weights.astype(np.float32),
                factor=factor,
                correlation=covariance / np.outer(factor, factor),
            )
        )
    if not projections:
        return []
    typical = float(np.median(np.concatenate([projection.factor for projection in projections])))
    return [projection for projection in projections if np.max(projection.factor) <= _MAX_FACTOR_RATIO * typical]
