"""Pulse 2 against pulse 1, trial by trial."""

from __future__ import annotations

from typing import Any

import numpy as np
from matplotlib.axes import Axes

from ..reports.words import with_limits
from .bouton_plot import BoutonPlot
from .panel import Panel
from .plots import Palette
from .shown_bouton import ShownBouton


class PulsePairPlot(BoutonPlot):
    """Amplitudes of both pulses with their thresholds, which part the trials as the history table counts them."""

    margins_px = (54.0, 34.0, 10.0, 34.0)

    def __init__(self, panel: Panel) -> None:
        super().__init__(panel)
        self.setToolTip("A point a trial. The thresholds part releases from failures; the corners say how many trials.")

    def same_data(self, before: ShownBouton, now: ShownBouton) -> bool:
        """Tell whether the pulses are the same."""
        return before.row == now.row and before.measured.release is now.measured.release

    def make(self, axes: Axes, palette: Palette) -> None:
        """Make the artists."""
        dots: dict[str, Any] = {"linestyle": "none", "marker": "o", "markersize": 3.2, "alpha": 0.8}
        (self._equal,) = axes.plot([], [], color=palette.hairline, linewidth=0.8, zorder=0)
        (self._trials,) = axes.plot([], [], color=palette.evoked, **dots)
        (self._mean,) = axes.plot([], [], color=palette.fit, marker="P", markersize=8, linestyle="none")
        limit: dict[str, Any] = {"color": palette.ink, "linewidth": 0.9, "linestyle": ":", "animated": True}
        self._first, self._second = axes.axvline(0.0, **limit), axes.axhline(0.0, **limit)
        corner: dict[str, Any] = {"transform": axes.transAxes, "fontsize": 7.0, "color": palette.ink, "animated": True}
        corner["bbox"] = {"facecolor": palette.paper, "alpha": 0.7, "linewidth": 0, "pad": 1.0}
        self._corners = [
            axes.text(x, y, "", ha=side, va=edge, **corner)
            for x, y, side, edge in (
                (0.99, 0.98, "right", "top"),
                (0.99, 0.02, "right", "bottom"),
                (0.02, 0.98, "left", "top"),
                (0.02, 0.02, "left", "bottom"),
            )
        ]
        self.moving = [self._first, self._second, *self._corners]
        self._title = axes.set_title("", loc="right", fontsize=7.0, pad=3)
        axes.set_xlabel("pulse 1 (dF/F)")
        axes.set_ylabel("pulse 2 (dF/F)")

    def fill(self, axes: Axes) -> None:
        """Show the trials and the ratio."""
        shown = self._shown
        if shown is None:
            self.say("no bouton selected")
            return
        pair = shown.measured.release.pairs[shown.row]
        amplitude = shown.measured.amplitudes.amplitude[shown.row, :, :2]
        both = amplitude[np.isfinite(amplitude).all(axis=1)] if amplitude.shape[1] > 1 else np.empty((0, 2))
        self.say("" if len(both) and pair is not None else "no pair of pulses")
        if not len(both) or pair is None:
            return
        self._trials.set_data(both[:, 0], both[:, 1])
        self._mean.set_data([pair.first_mean], [pair.second_mean])
        low, high = min(0.0, float(both.min())), float(both.max())
        room = 0.08 * (high - low)
        axes.set_xlim(low - room, high + room)
        axes.set_ylim(low - 2 * room, high + 2 * room)
        self._equal.set_data([low - room, high + room], [low - room, high + room])
        verdict = shown.measured.release.verdicts[shown.row]
        if np.isfinite(pair.ppr.value):
            ratio = with_limits(pair.ppr.value, pair.ppr.lo, pair.ppr.hi)
            self._title.set_text(f"ratio {ratio}\n{verdict}")
        else:
            self._title.set_text("ratio undefined")

    def place(self) -> None:
        """Put the thresholds in place and count the corners."""
        shown = self._shown
        if shown is None:
            return
        at = shown.threshold
        for line in (self._first, self._second):
            line.set_visible(bool(np.isfinite(at)))
        self._first.set_xdata([at, at])
        self._second.set_ydata([at, at])
        history = shown.measured.counts.histories[shown.row]
        counts = (
            ("", "", "", "")
            if history is None
            else (
                f"both: {history.both}",
                f"1st only: {history.only_first}",
                f"2nd only: {history.only_second}",
                f"neither: {history.neither}",
            )
        )
        for text, words in zip(self._corners, counts, strict=True):
            text.set_text(words)
