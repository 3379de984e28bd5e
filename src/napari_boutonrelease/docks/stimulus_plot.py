"""The stimuli on the time axis of the movie, and where the current frame lies among them."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np
from matplotlib.figure import Figure
from numpy.typing import NDArray

from ..recording import stimulus_frame
from .layers import show_frame
from .plots import Cursor, Palette, Plot, envelope, say

if TYPE_CHECKING:
    from ..recording import Timing
    from .panel import Panel

_FIRST, _LATER, _LIGHT, _TOP = 0.0, 0.25, 0.55, 1.05


class StimulusPlot(Plot):
    """Pulses as strokes, the light of every frame above them once it was measured, and the current frame."""

    def __init__(self, panel: Panel) -> None:
        super().__init__(panel, self._paint, height_px=96)
        self._viewer = panel.viewer
        self._timing: Timing | None = None
        self._light: NDArray[np.float64] | None = None
        self._left_out: NDArray[np.bool_] | None = None
        self._frame = 0
        self._line: Cursor | None = None
        self.setMaximumHeight(120)
        self.setToolTip("Strokes: pulses. Curve: light of each frame. Click to go to a frame.")
        self.mpl_connect("button_press_event", self._go)

    def show_recording(
        self,
        timing: Timing | None,
        light: NDArray[np.float64] | None = None,
        left_out: NDArray[np.bool_] | None = None,
    ) -> None:
        """Take stimuli and, where they are known, the mean of each frame and the frames left out."""
        self._timing, self._light, self._left_out = timing, light, left_out
        self.refresh()

    def show_frame(self, frame: int) -> None:
        """Move the line of the current frame."""
        self._frame = frame
        if self._line is not None and self._timing is not None:
            self._line.move(self._timing.frame_start_s[frame])

    def refresh(self, *event: object) -> None:
        """Draw anew."""
        self._line = None
        super().refresh(*event)

    def _paint(self, figure: Figure, palette: Palette) -> None:
        axes = figure.add_subplot()
        timing = self._timing
        if timing is None:
            say(axes, "The stimuli appear here once their times are known.", palette)
            return
        first, later = timing.stimulus_s[:, 0], timing.stimulus_s[:, 1:].ravel()
        axes.vlines(first, _FIRST, _LIGHT - 0.1, color=palette.evoked, lw=1.0)
        axes.vlines(later[np.isfinite(later)], _FIRST, _LATER, color=palette.pulse_2, lw=1.0)
        if self._light is not None:
            low, high = np.nanmin(self._light), np.nanmax(self._light)
            scaled = _LIGHT + (1.0 - _LIGHT) * (self._light - low) / ((high - low) or 1.0)
            axes.plot(*envelope(timing.frame_start_s, scaled), color=palette.muted, lw=0.8)
        if self._left_out is not None and self._left_out.any():
            at = timing.frame_start_s[self._left_out]
            axes.plot(at, np.full(len(at), _LIGHT - 0.03), "x", color=palette.fit, ms=3.5, ls="none")
        axes.set_ylim(-0.05, _TOP)
        axes.set_xlim(0.0, timing.frame_start_s[-1] + timing.frame_interval_s)
        axes.set_yticks([0.2] + ([0.78] if self._light is not None else []))
        axes.set_yticklabels(["pulses"] + (["light"] if self._light is not None else []))
        axes.tick_params(axis="y", length=0)
        axes.spines["left"].set_visible(False)
        axes.set_xlabel("time (s)")
        frame = min(self._frame, len(timing.frame_start_s) - 1)
        self._line = self.cursor(axes, at=timing.frame_start_s[frame], color=palette.fit)

    def _go(self, event: Any) -> None:
        if self._timing is not None and event.xdata is not None:
            frame = int(np.searchsorted(self._timing.frame_start_s, event.xdata, side="right")) - 1
            show_frame(self._viewer, frame)


def frame_in_words(timing: Timing, frame: int) -> str:
    """Say which trial and pulse a frame belongs to.

    A frame belongs to the last stimulus before its end, within its own file.
    """
    start_s = timing.frame_start_s[frame]
    words = f"frame {frame} · {start_s:.3f} s · "
    at = stimulus_frame(timing)
    mine = (at >= 0) & (at <= frame) & (timing.trial_segment == timing.segment[frame])[:, None]
    if not mine.any():
        ahead = (at > frame) & (timing.trial_segment == timing.segment[frame])[:, None]
        return words + (f"before trial {int(np.argmax(ahead.any(axis=1))) + 1}" if ahead.any() else "no trial")
    trial, pulse = np.unravel_index(np.argmax(np.where(mine, timing.stimulus_s, -np.inf)), at.shape)
    since_s = start_s - timing.stimulus_s[trial, pulse]
    when = "stimulus in this frame" if at[trial, pulse] == frame else f"{1e3 * since_s:.0f} ms after it"
    return words + f"trial {trial + 1}, pulse {pulse + 1} · {when}"
