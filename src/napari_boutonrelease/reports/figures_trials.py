"""The trials of one bouton laid over one another, with their mean and the fitted response."""

from __future__ import annotations

import numpy as np
from matplotlib.axes import Axes
from matplotlib.collections import LineCollection
from matplotlib.lines import Line2D
from numpy.typing import NDArray

from ..analysis.results import AnalysisResult
from .aligned_trials import AlignedTrials, cut_trials, fitted_response, known_mean, mean_delays, mean_of_trials
from .facts import amplitude_grid, frame_interval_s, number
from .figures_style import EVOKED, FIT, HAIRLINE, INK, NULL, say_nothing_to_show

__all__ = ["align_trials", "draw_trials", "mean_of_trials", "time_unit"]

_MANY_POINTS = 20_000
_IN_MS = 2.0  # s; longer spans are drawn in seconds


def draw_trials(axes: Axes, result: AnalysisResult, row: int) -> None:
    """Overlay the trials on their first stimulus, with their mean and the fitted response."""
    trials = align_trials(result, row)
    if trials is None:
        say_nothing_to_show(axes, "no usable trial")
        return
    first, last = float(np.nanmin(trials.since_s)), float(np.nanmax(trials.since_s))
    factor, unit = time_unit(last)
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


def time_unit(last_s: float) -> tuple[float, str]:
    """Return the factor and the name of the unit that suits times up to `last_s`."""
    return (1e3, "ms") if last_s < _IN_MS else (1.0, "s")


def _draw_fit(
    axes: Axes, result: AnalysisResult, row: int, time_s: NDArray[np.float64], exposure_s: float, factor: float
) -> None:
    """Draw the sum of the fitted responses of mean amplitude, as the camera would see it."""
    amplitude = known_mean(amplitude_grid(result, "amplitude")[row].T)
    delay_s = mean_delays(result.stimulus_s)
    for delay in delay_s[np.isfinite(amplitude) & np.isfinite(delay_s)]:
        axes.axvline(factor * delay, color=HAIRLINE, linewidth=0.8, zorder=0)
    fitted = fitted_response(time_s, amplitude=amplitude, delay_s=delay_s, shape=result.shape, exposure_s=exposure_s)
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
    """Cut the usable trials of a bouton out of its trace, from before pulse 1 until the response has decayed.

    Returns
    -------
    AlignedTrials or None
        None where no trial can be used.
    """
    interval, exposure = frame_interval_s(result), number(result, "recording.exposure_s")
    return cut_trials(
        result.dff[row],
        time_s=result.time_s,
        stimulus_s=result.stimulus_s,
        wanted=np.isfinite(amplitude_grid(result, "amplitude")[row]).any(axis=1),
        called=amplitude_grid(result, "called")[row, :, 0],
        shape=result.shape,
        frame_interval_s=interval,
        exposure_s=exposure if exposure > 0 else interval,
    )
