"""The selected bouton's trials laid over one another, with their mean, the fitted response and the selected trial."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np
from matplotlib.axes import Axes
from matplotlib.collections import LineCollection
from matplotlib.lines import Line2D

from ..reports.aligned_trials import (
    AlignedTrials,
    cut_trials,
    fitted_response,
    known_mean,
    mean_delays,
    mean_of_trials,
)
from ..reports.figures_trials import time_unit
from .bouton_plot import BoutonPlot
from .live_plot import CLICK_PX
from .panel import Panel
from .plots import Palette
from .shown_bouton import ShownBouton

_MOST_LINES = 200
_REACH_PX = 14.0


class TrialPlot(BoutonPlot):
    """Trials of one bouton, aligned on pulse 1.

    Parameters
    ----------
    panel : Panel
        The dock.
    on_click : callable
        Called with the index of the trial whose line was clicked.
    """

    margins_px = (54.0, 22.0, 10.0, 34.0)

    def __init__(self, panel: Panel, *, on_click: Callable[[int], None]) -> None:
        self._on_click = on_click
        self._pressed: tuple[float, float] | None = None
        self._trials: AlignedTrials | None = None
        self._colours = ("", "")
        super().__init__(panel)
        self.setToolTip("Trials aligned on their first stimulus; releases are coloured. Click one to select it.")
        self.mpl_connect("button_press_event", self._press)
        self.mpl_connect("button_release_event", self._release)

    def same_data(self, before: ShownBouton, now: ShownBouton) -> bool:
        """Tell whether the trials are the same."""
        return (
            before.row == now.row
            and before.measured.amplitudes is now.measured.amplitudes
            and before.excluded == now.excluded
        )

    def make(self, axes: Axes, palette: Palette) -> None:
        """Make the artists."""
        self._colours = (palette.null, palette.evoked)
        self._stimuli = LineCollection(
            [], colors=palette.hairline, linewidths=0.9, transform=axes.get_xaxis_transform(), zorder=0
        )
        self._lines = LineCollection([], linewidths=0.45, alpha=0.55, animated=True)
        axes.add_collection(self._stimuli, autolim=False)
        axes.add_collection(self._lines, autolim=False)
        (self._mean,) = axes.plot([], [], color=palette.ink, linewidth=1.5, animated=True)
        (self._fit,) = axes.plot([], [], color=palette.fit, linewidth=1.5, animated=True)
        (self._selected,) = axes.plot(
            [], [], color=palette.pulse_2, linewidth=1.6, marker="o", markersize=2.5, animated=True
        )
        self.moving = [self._lines, self._mean, self._fit, self._selected]
        handles = [
            Line2D([], [], color=colour, linewidth=1.5, label=label)
            for label, colour in (
                ("called", palette.evoked),
                ("not", palette.null),
                ("mean", palette.ink),
                ("fit", palette.fit),
                ("selected", palette.pulse_2),
            )
        ]
        axes.legend(
            handles=handles, loc="lower right", bbox_to_anchor=(1.0, 1.0), ncols=5, frameon=False, fontsize=6.5,
            handlelength=0.9, columnspacing=0.7, handletextpad=0.3, borderaxespad=0.1, labelcolor=palette.ink,
        )  # fmt: skip

    def fill(self, axes: Axes) -> None:
        """Cut the trials out of the trace."""
        shown = self._shown
        self._trials = None if shown is None else _cut(shown)
        self.say("" if self._trials is not None else "no usable trial" if shown else "no bouton selected")
        if shown is None or self._trials is None:
            return
        trials = self._trials
        kept = shown.kept[trials.trial]
        counted = _rows(trials, kept if kept.any() else np.ones(len(kept), dtype=bool))
        factor, unit = time_unit(float(np.nanmax(trials.since_s)))
        time_s, mean = mean_of_trials(counted)
        self._mean.set_data(factor * time_s, mean)
        fine = np.linspace(time_s[0], time_s[-1], 300)
        delay_s = mean_delays(shown.stimulus_s)
        fitted = fitted_response(
            fine,
            amplitude=known_mean(shown.measured.amplitudes.amplitude[shown.row].T),
            delay_s=delay_s,
            shape=shown.measured.responses.shape,
            exposure_s=trials.exposure_s,
        )
        self._fit.set_data(factor * fine, fitted)
        self._stimuli.set_segments([[(factor * at, 0.0), (factor * at, 1.0)] for at in delay_s[np.isfinite(delay_s)]])
        low, high = np.nanpercentile(counted.level, [0.5, 99.8])
        axes.set_ylim(low - 0.1 * (high - low), high + 0.12 * (high - low))
        axes.set_xlim(factor * time_s[0], factor * time_s[-1])
        axes.set_xlabel(f"time from pulse 1 ({unit})")
        axes.set_ylabel("dF/F" if trials.frames_a_bin == 1 else f"dF/F, means of {trials.frames_a_bin} frames")
        shown_rows = np.flatnonzero(kept)[:: -(-int(kept.sum()) // _MOST_LINES) or 1]
        self._drawn = trials.trial[shown_rows]
        self._lines.set_segments(
            [np.column_stack([factor * trials.since_s[row], trials.level[row]]) for row in shown_rows]
        )
        self._factor = factor

    def place(self) -> None:
        """Colour the trials by their calls and lift the selected one out."""
        shown, trials = self._shown, self._trials
        if shown is None or trials is None:
            return
        called = shown.measured.counts.calls.called[shown.row, self._drawn, 0] == 1
        self._lines.set_color([self._colours[int(one)] for one in called])
        row = np.flatnonzero(trials.trial == shown.trial) if shown.trial is not None else np.empty(0, dtype=np.intp)
        self._selected.set_visible(bool(row.size))
        if row.size and shown.trial is not None:
            self._selected.set_data(self._factor * trials.since_s[row[0]], trials.level[row[0]])
            hollow = shown.trial in shown.excluded or not shown.kept[shown.trial]
            self._selected.set_linestyle("--" if hollow else "-")
            self._selected.set_fillstyle("none" if hollow else "full")

    def _press(self, event: Any) -> None:
        if event.button == 1 and event.inaxes is self.axes:
            self._pressed = (event.x, event.y)

    def _release(self, event: Any) -> None:
        pressed, self._pressed = self._pressed, None
        trials, axes = self._trials, self.axes
        if pressed is None or trials is None or axes is None:
            return
        if np.hypot(event.x - pressed[0], event.y - pressed[1]) > CLICK_PX:
            return
        points = np.column_stack([self._factor * trials.since_s.ravel(), trials.level.ravel()])
        known = np.isfinite(points).all(axis=1)
        distance = np.full(len(points), np.inf)
        distance[known] = np.hypot(*(axes.transData.transform(points[known]) - (event.x, event.y)).T)
        if distance.min() <= _REACH_PX * self.device_pixel_ratio:
            self._on_click(int(trials.trial[np.argmin(distance) // trials.level.shape[1]]))


def _cut(shown: ShownBouton) -> AlignedTrials | None:
    timing = shown.measured.timing
    if shown.unit != "dF/F":
        return None
    return cut_trials(
        shown.trace,
        time_s=timing.frame_start_s,
        stimulus_s=timing.stimulus_s,
        wanted=np.ones(shown.n_trials, dtype=bool),
        called=shown.measured.counts.calls.called[shown.row, :, 0],
        shape=shown.measured.responses.shape,
        frame_interval_s=timing.frame_interval_s,
        exposure_s=timing.exposure_s,
    )


def _rows(trials: AlignedTrials, kept: np.ndarray) -> AlignedTrials:
    return AlignedTrials(
        trial=trials.trial[kept],
        since_s=trials.since_s[kept],
        level=trials.level[kept],
        called=trials.called[kept],
        frames_a_bin=trials.frames_a_bin,
        exposure_s=trials.exposure_s,
    )
