"""The raster of calls, boutons down and trials across; a click selects bouton and trial."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np
from matplotlib.axes import Axes
from matplotlib.colors import ListedColormap
from matplotlib.patches import Rectangle
from qtpy.QtCore import QEvent
from qtpy.QtGui import QHelpEvent
from qtpy.QtWidgets import QToolTip

from ..reports.words import fixed
from .bouton_plot import BoutonPlot
from .live_plot import CLICK_PX
from .panel import Panel
from .plots import Palette
from .shown_bouton import ShownBouton

_LEFT_OUT, _FAILED, _RELEASED = 0, 1, 2
_NAME_PX = 11
_ABOVE = 1.03  # of the axes' height


def failure_words(shown: ShownBouton, trial: int) -> str:
    """Say how probable it is that a stimulus reached no bouton."""
    return f"reached no bouton with a probability of {fixed(shown.failure_p[trial])}"


class RasterPlot(BoutonPlot):
    """Calls of all boutons in all trials, one pulse.

    Parameters
    ----------
    panel : Panel
        The dock.
    on_click : callable
        Called with the row of the bouton and the index of the trial that were clicked.
    """

    margins_px = (46.0, 22.0, 10.0, 34.0)

    def __init__(self, panel: Panel, *, on_click: Callable[[int, int], None]) -> None:
        self._on_click = on_click
        self._pressed: tuple[float, float] | None = None
        super().__init__(panel)
        self.setToolTip("Calls of all boutons. Click one to select its bouton and trial.")
        self.mpl_connect("button_press_event", self._press)
        self.mpl_connect("button_release_event", self._release)

    def same_data(self, before: ShownBouton, now: ShownBouton) -> bool:
        """Tell whether the boutons, trials and pulse are the same."""
        return (
            before.measured.places is now.measured.places
            and before.measured.failed is now.measured.failed
            and before.n_trials == now.n_trials
            and before.pulse == now.pulse
        )

    def make(self, axes: Axes, palette: Palette) -> None:
        """Make the artists."""
        colours = ListedColormap([palette.paper, palette.hairline, palette.evoked])
        self._image = axes.imshow(
            np.zeros((1, 1)), cmap=colours, vmin=0, vmax=2, aspect="auto", interpolation="nearest", animated=True
        )
        (self._crosses,) = axes.plot(
            [], [], linestyle="none", marker="x", color=palette.muted, markersize=2.6, markeredgewidth=0.6,
            animated=True,
        )  # fmt: skip
        (self._suspected,) = axes.plot(
            [], [], linestyle="none", marker="v", color=palette.fit, markersize=4.5, clip_on=False, animated=True,
            transform=axes.get_xaxis_transform(),
        )  # fmt: skip
        self._row = Rectangle((0, 0), 1, 1, fill=False, edgecolor=palette.ink, linewidth=0.8, animated=True)
        self._cell = Rectangle((0, 0), 1, 1, fill=False, edgecolor=palette.pulse_2, linewidth=1.8, animated=True)
        axes.add_patch(self._row)
        axes.add_patch(self._cell)
        self.moving = [self._image, self._crosses, self._suspected, self._row, self._cell]
        for spine in axes.spines.values():
            spine.set_visible(False)
        axes.tick_params(length=0)
        axes.set_xlabel("trial")
        axes.set_ylabel("bouton")

    def fill(self, axes: Axes) -> None:
        """Set the size and name the boutons."""
        shown = self._shown
        self.say("" if shown is not None else "no bouton selected")
        if shown is None:
            return
        n = len(shown.measured.places.bouton)
        self._image.set_extent((0.5, shown.n_trials + 0.5, n - 0.5, -0.5))
        axes.set_xlim(0.5, shown.n_trials + 0.5)
        axes.set_ylim(n - 0.5, -0.5)
        failed = "; ▼ no stimulus?" if shown.measured.failed.suspected.any() else ""
        axes.set_title(
            f"calls at pulse {shown.pulse + 1}; × left out{failed}", loc="right", fontsize=6.5, pad=6 if failed else 3,
            color=axes.xaxis.label.get_color(),
        )  # fmt: skip

    def fit(self, axes: Axes) -> None:
        """Name as many boutons as there is room for."""
        if self._shown is not None:
            ids = self._shown.measured.places.bouton
            room = max(int(axes.bbox.height / self.device_pixel_ratio / _NAME_PX), 1)
            step = -(-len(ids) // room)
            axes.set_yticks(range(0, len(ids), step), [f"{bouton}" for bouton in ids[::step]])

    def place(self) -> None:
        """Colour the cells by their calls and frame the selected one."""
        shown = self._shown
        if shown is None:
            return
        called = shown.measured.counts.calls.called[:, :, shown.pulse]
        states = np.where(np.isnan(called), _LEFT_OUT, np.where(called == 1, _RELEASED, _FAILED))
        states[:, list(shown.excluded)] = _LEFT_OUT
        self._image.set_data(states)
        row, trial = np.nonzero(states == _LEFT_OUT)
        self._crosses.set_data(trial + 1, row)
        suspected = np.flatnonzero(shown.suspected)
        self._suspected.set_data(suspected + 1, np.full(suspected.size, _ABOVE))
        self._row.set_bounds(0.5, shown.row - 0.5, shown.n_trials, 1.0)
        self._cell.set_visible(shown.trial is not None)
        if shown.trial is not None:
            self._cell.set_bounds(shown.trial + 0.5, shown.row - 0.5, 1.0, 1.0)

    def cell_px(self, row: int, trial: int) -> tuple[float, float]:
        """Where the middle of a cell lies on the canvas, x and y from the lower left, px."""
        if self.axes is None:
            return np.nan, np.nan
        x, y = self.axes.transData.transform((trial + 1.0, float(row)))
        return float(x), float(y)

    def event(self, event: QEvent) -> bool:
        """Name the cell under the mouse, and say why it was left out."""
        if event.type() == QEvent.Type.ToolTip and isinstance(event, QHelpEvent):
            words = self._words_at(event.pos().x(), event.pos().y())
            if words:
                QToolTip.showText(event.globalPos(), words, self)
                return True
        return bool(super().event(event))

    def _words_at(self, x: float, y: float) -> str:
        if self.axes is None or self._shown is None:
            return ""
        ratio = self.device_pixel_ratio
        cell = self._cell_at(x * ratio, self.figure.bbox.height - y * ratio)
        if cell is None:
            return ""
        row, trial = cell
        shown = self._shown
        amplitude = shown.measured.responses.amplitudes.amplitude[row, trial, shown.pulse]
        words = f"Bouton {shown.measured.places.bouton[row]}, trial {trial + 1}: {amplitude:.3f} dF/F"
        reason = shown.excluded.get(trial)
        if reason is not None:
            return f"{words}; left out: {reason}"
        return f"{words}; {failure_words(shown, trial)}" if shown.suspected[trial] else words

    def _cell_at(self, x_px: float, y_px: float) -> tuple[int, int] | None:
        if self.axes is None or self._shown is None:
            return None
        x, y = self.axes.transData.inverted().transform((x_px, y_px))
        row, trial = round(y), round(x) - 1
        inside = 0 <= row < len(self._shown.measured.places.bouton) and 0 <= trial < self._shown.n_trials
        return (row, trial) if inside else None

    def _press(self, event: Any) -> None:
        if event.button == 1 and event.inaxes is self.axes:
            self._pressed = (event.x, event.y)

    def _release(self, event: Any) -> None:
        pressed, self._pressed = self._pressed, None
        if pressed is not None and np.hypot(event.x - pressed[0], event.y - pressed[1]) <= CLICK_PX:
            cell = self._cell_at(event.x, event.y)
            if cell is not None:
                self._on_click(*cell)
