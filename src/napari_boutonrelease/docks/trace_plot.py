"""The selected bouton's whole trace with stimuli and calls; the wheel zooms, dragging pans, a click goes there."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np
from matplotlib.axes import Axes
from numpy.typing import NDArray
from qtpy.QtGui import QWheelEvent

from .bouton_plot import BoutonPlot
from .live_plot import CLICK_PX
from .panel import Panel
from .plots import Palette, envelope
from .shown_bouton import ShownBouton

_ZOOM = 1.3
_CALLS, _SPONTANEOUS, _STIMULI = 0.96, 0.85, 0.03
"""Heights of the marks, in parts of the axes."""


class TracePlot(BoutonPlot):
    """Trace of one bouton over the recording.

    Parameters
    ----------
    panel : Panel
        The dock.
    on_click : callable
        Called with the time (s) at which the trace was clicked.
    """

    margins_px = (54.0, 8.0, 70.0, 34.0)

    def __init__(self, panel: Panel, *, on_click: Callable[[float], None]) -> None:
        self._on_click = on_click
        self._frame: int | None = None
        self._view_s: tuple[float, float] | None = None  # None: all of it
        self._pressed: tuple[float, tuple[float, float]] | None = None
        self._marks: dict[str, tuple[float, Any]] = {}
        super().__init__(panel)
        self.setToolTip("Wheel: zoom. Drag: move along. Double-click: all of it. Click: go to that frame.")
        self.mpl_connect("scroll_event", self._scroll)
        self.mpl_connect("button_press_event", self._press)
        self.mpl_connect("motion_notify_event", self._drag)
        self.mpl_connect("button_release_event", self._release)

    def same_data(self, before: ShownBouton, now: ShownBouton) -> bool:
        """Tell whether the traces are the same."""
        return np.array_equal(before.trace, now.trace, equal_nan=True)

    def show_bouton(self, shown: ShownBouton | None) -> None:
        """Show another bouton, or the same with other results; another recording is shown whole."""
        before = self._shown
        if before is None or shown is None or before.measured.recording is not shown.measured.recording:
            self._view_s = None
        super().show_bouton(shown)

    def show_frame(self, frame: int | None) -> None:
        """Mark the frame that the viewer shows."""
        if frame != self._frame:
            self._frame = frame
            self.move()

    @property
    def view_s(self) -> tuple[float, float]:
        """Times between which the trace is shown."""
        return self._view_s or self._all_s()

    def zoom_to(self, start_s: float, stop_s: float) -> None:
        """Show the trace between two times; all of it where they span it."""
        first, last = self._all_s()
        least = 10.0 * (last - first) / max(len(self._time_s()), 10)
        length = min(max(stop_s - start_s, least), last - first)
        start = min(max(start_s, first), last - length)
        self._view_s = None if length >= last - first else (start, start + length)
        self.refill()

    def make(self, axes: Axes, palette: Palette) -> None:
        """Make the artists."""
        (self._line,) = axes.plot([], [], color=palette.ink, linewidth=0.6)
        upright: dict[str, Any] = {"transform": axes.get_xaxis_transform(), "linewidth": 0.9, "solid_capstyle": "butt"}
        label: dict[str, Any] = {"transform": axes.transAxes, "va": "center", "fontsize": 6.5, "color": palette.muted}
        self._span = axes.axvspan(0, 1, color=palette.evoked, alpha=0.3, linewidth=0, animated=True)
        self._cursor_line = axes.axvline(0, color=palette.fit, linewidth=1.0, animated=True)
        self._marks = {}
        for name, height, colour, moves in (
            ("stimuli", _STIMULI, palette.null, False),
            ("calls", _CALLS, palette.evoked, True),
            ("spontaneous", _SPONTANEOUS, palette.pulse_2, False),
        ):
            (line,) = axes.plot([], [], color=colour, animated=moves, **upright)
            axes.text(1.01, height, name, **label)
            self._marks[name] = (height, line)
        self._calls = self._marks["calls"][1]
        self.moving = [self._span, self._calls, self._cursor_line]
        axes.set_xlabel("time (s)")

    def fill(self, axes: Axes) -> None:
        """Give the trace and the marks their data."""
        shown = self._shown
        if shown is None:
            self.say("no bouton selected")
            return
        known = shown.trace[np.isfinite(shown.trace)]
        self.say("" if known.size else "There is no trace of this bouton.")
        if not known.size:
            return
        start, stop = self.view_s
        time_s = self._time_s()
        first, last = np.searchsorted(time_s, (start, stop))
        seen = slice(max(int(first) - 1, 0), int(last) + 1)
        self._line.set_data(*envelope(time_s[seen], shown.trace[seen]))
        low, high = float(known.min()), float(known.max())
        room = (high - low) or 1.0
        axes.set_ylim(low - 0.1 * room, high + 0.25 * room)
        axes.set_xlim(start, stop)
        axes.set_ylabel(shown.unit)
        stimuli = shown.stimulus_s
        spontaneous = shown.measured.spontaneous
        self._set_marks("stimuli", stimuli[np.isfinite(stimuli)])
        self._set_marks("spontaneous", spontaneous.time_s[spontaneous.bouton == shown.row])

    def place(self) -> None:
        """Put the calls, the selected trial and the viewer's frame in place."""
        shown = self._shown
        if shown is None:
            return
        calls = shown.measured.counts.calls.called[shown.row] == 1
        calls[list(shown.excluded)] = False
        self._set_marks("calls", shown.stimulus_s[calls])
        interval = shown.measured.timing.frame_interval_s
        self._span.set_visible(shown.trial is not None)
        if shown.trial is not None:
            stimuli = shown.stimulus_s[shown.trial]
            stimuli = stimuli[np.isfinite(stimuli)]
            if stimuli.size:
                begin = float(stimuli[0]) - interval
                end = float(stimuli[-1]) + shown.measured.responses.shape.end_s(remaining=0.05)
                self._span.set_bounds(begin, 0.0, end - begin, 1.0)
        there = self._frame is not None and self._frame < len(self._time_s())
        self._cursor_line.set_visible(there)
        if self._frame is not None and there:
            at = float(self._time_s()[self._frame]) + 0.5 * interval
            self._cursor_line.set_xdata([at, at])

    def wheelEvent(self, event: QWheelEvent) -> None:
        """Zoom, and do not scroll the dock at the same time."""
        super().wheelEvent(event)
        event.accept()

    def _set_marks(self, name: str, times: NDArray[np.float64]) -> None:
        """Draw short upright marks, all in one path so that thousands stay light."""
        height, line = self._marks[name]
        line.set_data(np.repeat(times, 3), np.tile([height - 0.03, height + 0.03, np.nan], len(times)))

    def _time_s(self) -> NDArray[np.float64]:
        return np.zeros(0) if self._shown is None else self._shown.measured.timing.frame_start_s

    def _all_s(self) -> tuple[float, float]:
        if self._shown is None or not len(self._time_s()):
            return 0.0, 1.0
        time_s = self._time_s()
        return float(time_s[0]), float(time_s[-1]) + self._shown.measured.timing.frame_interval_s

    def _scroll(self, event: Any) -> None:
        if event.inaxes is self.axes and self._shown is not None:
            start, stop = self.view_s
            factor = _ZOOM**-event.step
            left = event.xdata - (event.xdata - start) * factor
            self.zoom_to(left, left + (stop - start) * factor)

    def _press(self, event: Any) -> None:
        if event.button != 1 or event.inaxes is not self.axes:
            return
        if event.dblclick:
            self.zoom_to(*self._all_s())
            self._pressed = None
        else:
            self._pressed = (event.x, self.view_s)

    def _drag(self, event: Any) -> None:
        if self._pressed is None or self.axes is None or self._view_s is None:
            return
        x, (start, stop) = self._pressed
        shift = (x - event.x) / self.axes.bbox.width * (stop - start)
        self.zoom_to(start + shift, stop + shift)

    def _release(self, event: Any) -> None:
        pressed, self._pressed = self._pressed, None
        if pressed is not None and abs(event.x - pressed[0]) <= CLICK_PX and event.inaxes is self.axes:
            self._on_click(float(event.xdata))
