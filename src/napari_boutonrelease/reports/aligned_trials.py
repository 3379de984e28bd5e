"""The trials of one bouton cut out of its trace and laid on one clock, with their mean and the fitted response."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from ..response_shape import ResponseShape

_MOST_BINS = 90


@dataclass(frozen=True, slots=True, kw_only=True)
class AlignedTrials:
    """Some trials of one bouton on one clock.

    Attributes
    ----------
    trial : (n_trials,) ndarray of int
        Which trials, from 0.
    since_s : (n_trials, n_bins) ndarray
        Middle of each bin after pulse 1, s; NaN where there is no frame.
    level : (n_trials, n_bins) ndarray
        dF/F less its level before the pulse, a bin of frames averaged.
    called : (n_trials,) ndarray of bool
        Whether pulse 1 was called a release.
    frames_a_bin : int
        Frames averaged.
    exposure_s : float
        Time for which a bin gathers light, s.
    """

    trial: NDArray[np.intp]
    since_s: NDArray[np.float64]
    level: NDArray[np.float64]
    called: NDArray[np.bool_]
    frames_a_bin: int
    exposure_s: float


def cut_trials(
    dff: NDArray[np.float64],
    *,
    time_s: NDArray[np.float64],
    stimulus_s: NDArray[np.float64],
    wanted: NDArray[np.bool_],
    called: NDArray[np.float64],
    shape: ResponseShape,
    frame_interval_s: float,
    exposure_s: float,
) -> AlignedTrials | None:
    """Cut trials out of a trace, from before pulse 1 until the response has decayed.

    Parameters
    ----------
    dff : (n_frames,) ndarray
        The trace.
    time_s : (n_frames,) ndarray
        Start of each frame, s.
    stimulus_s : (n_trials, n_pulses) ndarray
        Stimuli on the same clock, s.
    wanted : (n_trials,) ndarray of bool
        Trials to cut out.
    called : (n_trials,) ndarray
        1 where pulse 1 was called a release.
    shape : ResponseShape
        Says how long a response lasts.
    frame_interval_s, exposure_s : float
        From frame to frame, and how long each gathers light, s.

    Returns
    -------
    AlignedTrials or None
        None where no trial can be used.
    """
    used = wanted & np.isfinite(stimulus_s[:, 0])
    if not used.any() or not frame_interval_s > 0:
        return None
    stimuli = stimulus_s[used]
    room = np.diff(stimulus_s[np.isfinite(stimulus_s[:, 0]), 0])
    until = float(np.nanmax(stimulus_s - stimulus_s[:, :1])) + 4.0 * shape.decay_s
    until = min(until, 0.8 * float(np.min(room))) if room.size else until
    size = max(1, math.ceil(1.3 * until / frame_interval_s / _MOST_BINS))
    before, after = (math.ceil(part * until / frame_interval_s / size) for part in (0.3, 1.0))
    frames = np.searchsorted(time_s, stimuli[:, :1]) + np.arange(-before * size, after * size)
    inside = (frames >= 0) & (frames < len(time_s))
    frames = np.clip(frames, 0, len(time_s) - 1)
    since = time_s[frames] + 0.5 * exposure_s - stimuli[:, :1]
    inside &= (since > -(before * size + 1) * frame_interval_s) & (since < (after * size + 1) * frame_interval_s)
    level = np.where(inside, dff[frames], np.nan)
    if not np.isfinite(level).any():
        return None
    quiet = known_mean(np.where(since < -0.5 * exposure_s, level, np.nan))
    level -= np.nan_to_num(quiet)[:, None]
    bins = (len(stimuli), before + after, size)
    return AlignedTrials(
        trial=np.flatnonzero(used),
        since_s=known_mean(np.where(np.isfinite(level), since, np.nan).reshape(bins)),
        level=known_mean(level.reshape(bins)),
        called=called[used] == 1,
        frames_a_bin=size,
        exposure_s=exposure_s if size == 1 else size * frame_interval_s,
    )


def mean_of_trials(trials: AlignedTrials) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Average the trials at each time since the pulse that at least half of them reach.

    Returns
    -------
    time_s, mean : (n,) ndarray
    """
    known = np.isfinite(trials.level)
    steps = np.diff(trials.since_s, axis=1)
    step = float(np.nanmedian(steps)) if np.isfinite(steps).any() else 1.0
    bins = np.round(trials.since_s[known] / step).astype(int)
    bins -= bins.min()
    count = np.bincount(bins)
    kept = count >= 0.5 * len(trials.level)
    count = np.maximum(count, 1)
    time_s = np.bincount(bins, trials.since_s[known]) / count
    mean = np.bincount(bins, trials.level[known]) / count
    return time_s[kept], mean[kept]


def mean_delays(stimulus_s: NDArray[np.float64]) -> NDArray[np.float64]:
    """Mean time of each pulse after pulse 1 (n_pulses,), s; NaN where no trial has the pulse."""
    return known_mean((stimulus_s - stimulus_s[:, :1]).T)


def fitted_response(
    time_s: NDArray[np.float64],
    *,
    amplitude: NDArray[np.float64],
    delay_s: NDArray[np.float64],
    shape: ResponseShape,
    exposure_s: float,
) -> NDArray[np.float64]:
    """Sum the responses of mean amplitude to all pulses, as the camera would see them.

    Parameters
    ----------
    time_s : (n,) ndarray
        Middles of exposures after pulse 1, s.
    amplitude, delay_s : (n_pulses,) ndarray
        Mean amplitude (dF/F) and time after pulse 1 (s) of each pulse; pulses with a NaN are left out.
    shape : ResponseShape
        Time course.
    exposure_s : float
        Length of an exposure, s.

    Returns
    -------
    (n,) ndarray
    """
    fitted = np.zeros(len(time_s))
    for size, delay in zip(amplitude, delay_s, strict=True):
        if math.isfinite(size) and math.isfinite(delay):
            fitted += size * shape.frame_average(time_s - 0.5 * exposure_s - delay, exposure_s=exposure_s)
    return fitted


def known_mean(values: NDArray[np.float64]) -> NDArray[np.float64]:
    """Mean over the last axis of what is known there, NaN where nothing is."""
    known = np.isfinite(values)
    count = known.sum(axis=-1)
    total = np.where(known, values, 0.0).sum(axis=-1)
    return np.asarray(np.where(count > 0, total / np.maximum(count, 1), np.nan))
