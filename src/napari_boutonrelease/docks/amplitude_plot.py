"""Amplitude against trial, where rundown shows; the threshold is a line that can be dragged."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np
from matplotlib.axes import Axes
from matplotlib.lines import Line2D
from qtpy.QtCore import Qt

from .bouton_plot import BoutonPlot
from .live_plot import CLICK_PX
from .panel import Panel
from .plots import Palette
from .shown_bouton import ShownBouton

_GRIP_PX = 6.0
_REACH_PX = 14.0
_ABOVE = 0.98  # of the axes' height


class AmplitudePlot(BoutonPlot):
    """Amplitudes of one bouton with the call threshold.

    Parameters
    ----------
    panel : Panel
        The dock.
    on_click : callable
        Called with the index of the trial that was clicked.
    on_drag : callable
        Called with the amplitude (dF/F) to which the threshold is dragged.
    """

    margins_px = (54.0, 22.0, 10.0, 34.0)

    def __init__(self, panel: Panel, *, on_click: Callable[[int], None], on_drag: Callable[[float], None]) -> None:
        self._on_click = on_click
        self._on_drag = on_drag
        self._pressed: tuple[float, float] | None = None
        self._dragging = False
        super().__init__(panel)
        self.setToolTip(
            "Drag the dashed line to move the threshold of all boutons. Click a point to select its trial. "
            "▼: this stimulus seems to have reached no bouton."
        )
        self.mpl_connect("button_press_event", self._press)
        self.mpl_connect("motion_notify_event", self._motion)
        self.mpl_connect("button_release_event", self._release)

    def same_data(self, before: ShownBouton, now: ShownBouton) -> bool:
        """Tell whether the amplitudes are the same."""
        same_pulse = (before.row, before.pulse) == (now.row, now.pulse)
        return same_pulse and before.measured.responses is now.measured.responses

    def make(self, axes: Axes, palette: Palette) -> None:
        """Make the artists."""
        dots: dict[str, Any] = {"linestyle": "none", "marker": "o", "markersize": 3.6, "animated": True}
        axes.axhline(0.0, color=palette.hairline, linewidth=0.8, zorder=0)
        (self._failed,) = axes.plot([], [], color=palette.null, **dots)
        (self._called,) = axes.plot([], [], color=palette.evoked, **dots)
        (self._left_out,) = axes.plot([], [], color=palette.muted, fillstyle="none", **dots)
        (self._suspected,) = axes.plot(
            [], [], color=palette.fit, linestyle="none", marker="v", markersize=4.5, clip_on=False, animated=True,
            transform=axes.get_xaxis_transform(),
        )  # fmt: skip
        (self._selected,) = axes.plot(
            [], [], color=palette.pulse_2, linestyle="none", marker="o", markersize=8.5, markeredgewidth=1.6,
            fillstyle="none", animated=True,
        )  # fmt: skip
        self._threshold = axes.axhline(0.0, color=palette.fit, linewidth=1.3, linestyle="--", animated=True)
        self.moving = [self._failed, self._called, self._left_out, self._threshold, self._suspected, self._selected]
        handles = [
            Line2D([], [], linestyle="none", marker="o", markersize=3.6, color=palette.evoked, label="called"),
            Line2D([], [], linestyle="none", marker="o", markersize=3.6, color=palette.null, label="not"),
            Line2D([], [], linestyle="none", marker="o", markersize=3.6, color=palette.muted, fillstyle="none",
                   label="left out"),
            Line2D([], [], color=palette.fit, linestyle="--", linewidth=1.3, label="threshold"),
        ]  # fmt: skip
        axes.legend(
            handles=handles, loc="lower right", bbox_to_anchor=(1.0, 1.0), ncols=4, frameon=False, fontsize=6.5,
            handlelength=1.3, columnspacing=0.7, handletextpad=0.3, borderaxespad=0.1, labelcolor=palette.ink,
        )  # fmt: skip
        axes.set_xlabel("trial")

    def fill(self, axes: Axes) -> None:
        """Set the limits."""
        shown = self._shown
        known = np.empty(0) if shown is None else shown.amplitude[np.isfinite(shown.amplitude)]
        self.say("no bouton selected" if shown is None else "" if known.size else "no amplitude")
        if shown is None or not known.size:
            return
        reach = [0.0, *known, *(one for one in (shown.threshold,) if np.isfinite(one))]
        room = (max(reach) - min(reach)) or 1.0
        axes.set_ylim(min(reach) - 0.06 * room, max(reach) + 0.08 * room)
        axes.set_xlim(0.0, shown.n_trials + 1.0)
        axes.set_ylabel(f"pulse {shown.pulse + 1} (dF/F)")

    def place(self) -> None:
        """Sort the points by their calls, and put the threshold and the selection in place."""
        shown = self._shown
        if shown is None:
            return
        trial = np.arange(1, shown.n_trials + 1)
        amplitude, kept, called = shown.amplitude, shown.kept, shown.called == 1
        for line, mine in ((self._failed, kept & ~called), (self._called, kept & called), (self._left_out, ~kept)):
            line.set_data(trial[mine], amplitude[mine])
        suspected = trial[shown.suspected]
        self._suspected.set_data(suspected, np.full(suspected.size, _ABOVE))
        self._threshold.set_visible(bool(np.isfinite(shown.threshold)))
        self._threshold.set_ydata([shown.threshold, shown.threshold])
        self._selected.set_visible(shown.trial is not None)
        if shown.trial is not None:
            self._selected.set_data([trial[shown.trial]], [amplitude[shown.trial]])

    def point_px(self, trial: int) -> tuple[float, float]:
        """Where the point of a trial (index) lies on the canvas, x and y from the lower left, px."""
        if self._shown is None or self.axes is None:
            return np.nan, np.nan
        x, y = self.axes.transData.transform((trial + 1.0, self._shown.amplitude[trial]))
        return float(x), float(y)

    def threshold_px(self) -> float:
        """Height of the threshold on the canvas, from its lower edge, px."""
        if self._shown is None or self.axes is None or not np.isfinite(self._shown.threshold):
            return np.nan
        return float(self.axes.transData.transform((0.0, self._shown.threshold))[1])

    def _press(self, event: Any) -> None:
        if event.button == 1 and event.inaxes is self.axes:
            self._pressed = (event.x, event.y)
            self._dragging = abs(event.y - self.threshold_px()) <= _GRIP_PX * self.device_pixel_ratio

    def _motion(self, event: Any) -> None:
        if self.axes is None:
            return
        if self._dragging and self._pressed is not None:
            if abs(event.y - self._pressed[1]) > 0:
                self._on_drag(float(self.axes.transData.inverted().transform((event.x, event.y))[1]))
            return
        near = event.inaxes is self.axes and abs(event.y - self.threshold_px()) <= _GRIP_PX * self.device_pixel_ratio
        self.setCursor(Qt.CursorShape.SizeVerCursor if near else Qt.CursorShape.ArrowCursor)

    def _release(self, event: Any) -> None:
        pressed, self._pressed = self._pressed, None
        dragged, self._dragging = self._dragging, False
        if pressed is None or self._shown is None or self.axes is None:
            return
        if dragged:
            self.refill()  # the axes may need to reach further by now
        elif np.hypot(event.x - pressed[0], event.y - pressed[1]) <= CLICK_PX:
            at = self.axes.transData.transform(
                np.column_stack([np.arange(1.0, self._shown.n_trials + 1), np.nan_to_num(self._shown.amplitude)])
            )
            distance = np.hypot(*(at - (event.x, event.y)).T)
            if distance.min() <= _REACH_PX * self.device_pixel_ratio:
                self._on_click(int(np.argmin(distance)))
