"""How probable each number of release sites is, and which the data cannot exclude."""

from __future__ import annotations

import numpy as np
from matplotlib.axes import Axes
from matplotlib.container import BarContainer

from .live_plot import LivePlot
from .panel import Panel
from .plots import Palette
from .shown_bouton import ShownBouton


class SitesPlot(LivePlot):
    """Posterior of n_sites of one bouton."""

    margins_px = (42.0, 34.0, 8.0, 34.0)

    def __init__(self, panel: Panel) -> None:
        self._shown: ShownBouton | None = None
        self._colours = ("", "")
        super().__init__(panel)
        self.setMinimumWidth(120)
        self.setToolTip("Full bars: the smallest set of numbers of sites that holds 95 % of the probability")

    def show_bouton(self, shown: ShownBouton | None) -> None:
        """Show another bouton, or the same with other results."""
        before, self._shown = self._shown, shown
        if (
            before is None
            or shown is None
            or before.row != shown.row
            or before.measured.release is not shown.measured.release
        ):
            self.refill()

    def make(self, axes: Axes, palette: Palette) -> None:
        """Make what stays."""
        self._colours = (palette.evoked, palette.muted)
        self._bars: list[BarContainer] = []
        axes.set_ylim(0.0, 1.0)
        axes.set_yticks([0.0, 0.5, 1.0], ["0", "0.5", "1"])
        axes.set_xlabel("n_sites")
        axes.set_ylabel("probability")
        self._title = axes.set_title("", loc="right", fontsize=7.0, pad=3)

    def fill(self, axes: Axes) -> None:
        """Draw a bar for each number."""
        shown = self._shown
        if shown is None:
            self.say("no bouton selected")
            return
        axon = shown.measured.release.axon
        if not np.isfinite(axon.p_release[shown.row, 0]):
            self.say("not fitted")
            return
        if axon.silent_probability[shown.row] >= 0.5:
            self.say("no release:\nn_sites cannot\nbe known")
            return
        self.say("")
        for bar in self._bars:
            bar.remove()
        probability, members = axon.n_probability[shown.row], axon.n_set[shown.row]
        numbers = np.arange(1, len(probability) + 1)
        inside = np.isin(numbers, members)
        self._bars = [
            axes.bar(numbers[inside], probability[inside], width=0.8, color=self._colours[0]),
            axes.bar(numbers[~inside], probability[~inside], width=0.8, fill=False, edgecolor=self._colours[1]),
        ]
        axes.set_xlim(0.4, len(numbers) + 0.6)
        axes.set_xticks(numbers)
        self._title.set_text(f"95 %: {members[0]}" + (f" to {members[-1]}" if len(members) > 1 else ""))
