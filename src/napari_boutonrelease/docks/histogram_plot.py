"""Amplitudes with and without stimulus, and what the fitted model predicts, component by component."""

from __future__ import annotations

import numpy as np
from matplotlib.axes import Axes
from matplotlib.collections import LineCollection
from matplotlib.lines import Line2D
from matplotlib.patches import Patch, StepPatch

from ..reports.histogram import histogram_of
from .bouton_plot import BoutonPlot
from .panel import Panel
from .plots import Palette
from .shown_bouton import ShownBouton


class HistogramPlot(BoutonPlot):
    """Histogram of one bouton and pulse."""

    margins_px = (42.0, 34.0, 10.0, 34.0)

    def __init__(self, panel: Panel) -> None:
        super().__init__(panel)
        self.setToolTip(
            "Amplitudes of the trials; those without stimulus, scaled to the share of failures; "
            "and the fitted model: dashed for 0, 1, 2, ... vesicles, the line for their sum."
        )

    def same_data(self, before: ShownBouton, now: ShownBouton) -> bool:
        """Tell whether the fits are the same."""
        return (before.row, before.pulse) == (now.row, now.pulse) and before.measured.release is now.measured.release

    def make(self, axes: Axes, palette: Palette) -> None:
        """Make the artists."""
        self._evoked = StepPatch([0.0], [0.0, 1.0], fill=True, color=palette.evoked, alpha=0.4, linewidth=0)
        self._null = StepPatch([0.0], [0.0, 1.0], fill=False, edgecolor=palette.muted, linewidth=1.0)
        self._components = LineCollection([], colors=palette.fit, linewidths=0.8, linestyles=[(0, (3, 1.5))])
        for artist in (self._evoked, self._null):
            axes.add_patch(artist)
        axes.add_collection(self._components, autolim=False)
        (self._model,) = axes.plot([], [], color=palette.fit, linewidth=1.6)
        self._threshold = axes.axvline(0.0, color=palette.ink, linewidth=0.9, linestyle=":", animated=True)
        self.moving = [self._threshold]
        handles = [
            Patch(color=palette.evoked, alpha=0.4, linewidth=0, label="evoked"),
            Line2D([], [], color=palette.muted, linewidth=1.0, label="no stimulus"),
            Line2D([], [], color=palette.fit, linewidth=1.6, label="model"),
            Line2D([], [], color=palette.ink, linewidth=0.9, linestyle=":", label="threshold"),
        ]
        axes.legend(
            handles=handles, loc="lower right", bbox_to_anchor=(1.0, 1.0), ncols=2, frameon=False, fontsize=6.5,
            handlelength=1.2, columnspacing=0.8, handletextpad=0.3, borderaxespad=0.1, labelspacing=0.15,
            labelcolor=palette.ink,
        )  # fmt: skip
        axes.set_ylabel("trials")

    def fill(self, axes: Axes) -> None:
        """Count the amplitudes."""
        shown = self._shown
        found = None if shown is None else histogram_of(shown.measured, shown.row, pulse=shown.pulse)
        self.say("no bouton selected" if shown is None else "no amplitude" if found is None else "")
        if shown is None or found is None:
            return
        self._evoked.set_data(found.evoked, found.edges)
        self._null.set_visible(bool(found.null.size))
        if found.null.size:
            self._null.set_data(found.null, found.edges)
        self._components.set_segments([np.column_stack([found.fine, one]) for one in found.components])
        total = found.components.sum(axis=0) if len(found.components) else np.full(len(found.fine), np.nan)
        self._model.set_data(found.fine, total)
        heights = [found.evoked.max(), *found.null, *total[np.isfinite(total)]]
        axes.set_ylim(0.0, 1.08 * float(max(heights)))
        axes.set_xlim(float(found.edges[0]), float(found.edges[-1]))
        axes.locator_params(axis="y", nbins=4, integer=True)
        axes.set_xlabel(f"pulse {shown.pulse + 1} (dF/F)")

    def place(self) -> None:
        """Put the threshold in place."""
        if self._shown is not None:
            at = self._shown.threshold
            self._threshold.set_visible(bool(np.isfinite(at)))
            self._threshold.set_xdata([at, at])
