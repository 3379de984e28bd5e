"""The trials of one bouton laid over one another, with their mean and the fitted response."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from matplotlib.axes import Axes
from matplotlib.collections import LineCollection
from matplotlib.lines import Line2D
from numpy.typing import NDArray

from ..analysis.results import AnalysisResult
from .facts import amplitude_grid, frame_interval_s, number
from .figures_style import EVOKED, FIT, HAIRLINE, INK, NULL, say_nothing_to_show

_MOST_BINS = 90
_MANY_POINTS = 20_000
_IN_MS = 2.0  # s; longer spans are drawn in seconds


@dataclass(frozen=True, slots=True, kw_only=True)
class AlignedTrials:
    """The usable trials of one bouton on one clock.

    Attributes
    ----------
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

    since_s: NDArray[np.float64]
    level: NDArray[np.float64]
    called: NDArray[np.bool_]
    frames_a_bin: int
    exposure_s: float


def draw_trials(axes: Axes, result: AnalysisResult, row: int) -> None:
    """Overlay the trials on their first stimulus, with their mean and the fitted response."""
    trials = align_trials(result, row)
    if trials is None:
        say_nothing_to_show(axes, "no usable trial")
        return
    first, last = float(np.nanmin(trials.since_s)), float(np.nanmax(trials.since_s))
    factor, unit = (1e3, "ms") if last < _IN_MS else (1.0, "s")
    for called, colour in ((False, NULL), (True, EVOKED)):
        lines = [
            np.column_stack([factor * since, level])[np.isfinite(level)]
            for since, level in zip(
                trials.since_s[trials.called == called], trials.level[trials.called == called], strict=True
            )
        ]
        axes.add_collection(
            LineCollection(
                lines, colors=colour, linewidths=0.35, alpha=0.4, rasterized=trials.level.size > _MANY_POINTS
            )
        )
    time_s, mean = mean_of_trials(trials)
    axes.plot(factor * time_s, mean, color=INK, linewidth=1.2)
    _draw_fit(axes, result, row, np.linspace(first, last, 400), trials.exposure_s, factor)
    low, high = np.nanpercentile(trials.level, [0.5, 99.8])
    axes.set_ylim(low - 0.1 * (high - low), high + 0.12 * (high - low))
    axes.set_xlim(factor * time_s[0], factor * time_s[-1])
    axes.set_xlabel(f"time from pulse 1 ({unit})")
    axes.set_ylabel("dF/F" if trials.frames_a_bin == 1 else f"dF/F, means of {trials.frames_a_bin} frames")
    _legend(axes, trials)


def _draw_fit(
    axes: Axes, result: AnalysisResult, row: int, time_s: NDArray[np.float64], exposure_s: float, factor: float
) -> None:
    """Draw the sum of the fitted responses of mean amplitude, as the camera would see it."""
    amplitudes = [_mean(one) for one in amplitude_grid(result, "amplitude")[row].T]
    delays = result.stimulus_s - result.stimulus_s[:, :1]
    fitted = np.zeros(len(time_s))
    for pulse, amplitude in enumerate(amplitudes):
        delay = _mean(delays[:, pulse])
        if math.isfinite(amplitude) and math.isfinite(delay):
            fitted += amplitude * result.shape.frame_average(time_s - 0.5 * exposure_s - delay, exposure_s=exposure_s)
            axes.axvline(factor * delay, color=HAIRLINE, linewidth=0.8, zorder=0)
    axes.plot(factor * time_s, fitted, color=FIT, linewidth=1.2)


def _legend(axes: Axes, trials: AlignedTrials) -> None:
    entries = [("called at pulse 1", EVOKED)] if trials.called.any() else []
    entries += [("not called", NULL)] if not trials.called.all() else []
    entries += [("mean", INK), ("fit", FIT)]
    handles = [Line2D([], [], color=colour, linewidth=1.0, label=label) for label, colour in entries]
    axes.legend(
        handles=handles, loc="lower left", bbox_to_anchor=(-0.02, 1.01), ncols=2, columnspacing=1.2, labelspacing=0.25
    )


def align_trials(result: AnalysisResult, row: int) -> AlignedTrials | None:
    """Cut the trials of a bouton out of its trace, from before pulse 1 until the response has decayed.

    Returns
    -------
    AlignedTrials or None
        None where no trial can be used.
    """
    interval = frame_interval_s(result)
    used = np.isfinite(amplitude_grid(result, "amplitude")[row]).any(axis=1)
    used &= np.isfinite(result.stimulus_s[:, 0])
    if not used.any() or not interval > 0:
        return None
    stimuli = result.stimulus_s[used]
    room = np.diff(result.stimulus_s[np.isfinite(result.stimulus_s[:, 0]), 0])
    until = float(np.nanmax(stimuli - stimuli[:, :1])) + 4.0 * result.shape.decay_s
    until = min(until, 0.8 * float(np.min(room))) if room.size else until
    size = max(1, math.ceil(1.3 * until / interval / _MOST_BINS))
    before, after = math.ceil(0.3 * until / interval / size), math.ceil(until / interval / size)
    exposure = number(result, "recording.exposure_s")
    exposure = exposure if exposure > 0 else interval
    frames = np.searchsorted(result.time_s, stimuli[:, :1]) + np.arange(-before * size, after * size)
    inside = (frames >= 0) & (frames < len(result.time_s))
    frames = np.clip(frames, 0, len(result.time_s) - 1)
    since = result.time_s[frames] + 0.5 * exposure - stimuli[:, :1]
    inside &= (since > -(before * size + 1) * interval) & (since < (after * size + 1) * interval)
    level = np.where(inside, result.dff[row][frames], np.nan)
    if not np.isfinite(level).any():
        return None
    quiet = [_mean(one[early]) for one, early in zip(level, since < -0.5 * exposure, strict=True)]
    level -= np.nan_to_num(quiet)[:, None]
    shape = (len(stimuli), before + after, size)
    return AlignedTrials(
        since_s=_binned(np.where(np.isfinite(level), since, np.nan).reshape(shape)),
        level=_binned(level.reshape(shape)),
        called=amplitude_grid(result, "called")[row, used, 0] == 1,
        frames_a_bin=size,
        exposure_s=exposure if size == 1 else size * interval,
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


def _binned(blocks: NDArray[np.float64]) -> NDArray[np.float64]:
    """Mean over the last axis of what is known there, NaN where nothing is."""
    known = np.isfinite(blocks)
    count = known.sum(axis=-1)
    total = np.where(known, blocks, 0.0).sum(axis=-1)
    return np.where(count > 0, total / np.maximum(count, 1), np.nan)


def _mean(numbers: NDArray[np.float64]) -> float:
    known = numbers[np.isfinite(numbers)]
    return float(known.mean()) if known.size else math.nan
