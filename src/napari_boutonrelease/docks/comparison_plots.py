"""Plots of a comparison: boutons of the first recording side by side; a click selects one."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np
from matplotlib.axes import Axes
from matplotlib.lines import Line2D
from matplotlib.patches import Rectangle

from ..comparison import Comparison
from ..reports.facts import values
from ..reports.figures_comparison import plot_release, plot_sites, recording_handles, sites_handles
from .live_plot import CLICK_PX, LivePlot
from .panel import Panel
from .plots import Palette
from .report_colours import adopt_palette

_NOTHING = "Nothing compared yet."
_LETTER_PX, _MARK_PX, _FEWEST_LETTERS = 5.6, 24.0, 4
_NAME_PX = 15.0


class ComparisonPlot(LivePlot):
    """Base of plots with a column a bouton.

    Parameters
    ----------
    panel : Panel
        The dock.
    on_click : callable
        Called with the id, in the first recording, of the bouton that was clicked.
    """

    margins_px = (46.0, 22.0, 10.0, 34.0)

    def __init__(self, panel: Panel, *, on_click: Callable[[int], None]) -> None:
        self._on_click = on_click
        self._pressed: tuple[float, float] | None = None
        self._comparison: Comparison | None = None
        self._selected: int | None = None
        self._palette: Palette | None = None
        super().__init__(panel, height_px=130)
        self.mpl_connect("button_press_event", self._press)
        self.mpl_connect("button_release_event", self._release)

    def show_comparison(self, comparison: Comparison | None, selected: int | None) -> None:
        """Show a comparison, one of its boutons framed."""
        before, self._comparison, self._selected = self._comparison, comparison, selected
        if before is comparison:
            self.move()
        else:
            self.refresh()

    def plot(self, axes: Axes, comparison: Comparison) -> None:
        """Plot the comparison in the colours of the reports. A subclass has to say how."""
        raise NotImplementedError

    def handles(self, comparison: Comparison, *, most_letters: int) -> list[Line2D]:
        """Return the marks of the legend; names end after so many letters. A subclass has to say how."""
        raise NotImplementedError

    def make(self, axes: Axes, palette: Palette) -> None:
        """Make the frame of the selected bouton."""
        self._palette = palette
        self._frame = Rectangle((-0.5, 0.0), 1.0, 1.0, fill=False, linewidth=1.4, edgecolor=palette.fit, animated=True)
        self._frame.set_transform(axes.get_xaxis_transform())
        axes.add_patch(self._frame)
        self.moving = [self._frame]

    def fill(self, axes: Axes) -> None:
        """Plot the comparison, for which the axes are new; or say that there is none."""
        self.say(_NOTHING if self._comparison is None else "")
        if self._comparison is not None and self._palette is not None:
            self.plot(axes, self._comparison)
            adopt_palette(axes, self._palette)

    def place(self) -> None:
        """Frame the selected bouton."""
        at = np.flatnonzero(self._ids() == self._selected)
        self._frame.set_visible(bool(at.size))
        if at.size:
            self._frame.set_x(float(at[0]) - 0.5)

    def fit(self, axes: Axes) -> None:
        """Shorten the names of the legend to the room there is, and name as many boutons."""
        if self._comparison is None or self._palette is None or not axes.axison:
            return
        width = axes.bbox.width / self.device_pixel_ratio
        each = width / max(len(self.handles(self._comparison, most_letters=1)), 1)
        letters = max(int((each - _MARK_PX) / _LETTER_PX), _FEWEST_LETTERS)
        handles = self.handles(self._comparison, most_letters=letters)
        axes.legend(
            handles=handles, loc="lower left", bbox_to_anchor=(0.0, 1.0), ncols=len(handles), frameon=False,
            fontsize=6.5, handlelength=1.5, columnspacing=0.9, handletextpad=0.3, borderaxespad=0.1,
            labelcolor=self._palette.ink,
        )  # fmt: skip
        adopt_palette(axes, self._palette)
        ids = self._ids()
        step = max(1, int(np.ceil(len(ids) * _NAME_PX / max(width, 1.0))))
        axes.set_xticks(range(0, len(ids), step), [f"{bouton:g}" for bouton in ids[::step]])

    def column_px(self, bouton: int) -> tuple[float, float]:
        """Where the middle of a bouton's column lies on the canvas, x and y from the lower left, px."""
        if self.axes is None:
            return np.nan, np.nan
        at = float(np.flatnonzero(self._ids() == bouton)[0])
        x, y = self.axes.get_xaxis_transform().transform((at, 0.5))
        return float(x), float(y)

    def _ids(self) -> Any:
        return np.empty(0) if self._comparison is None else values(self._comparison.joint, "bouton")

    def _press(self, event: Any) -> None:
        if event.button == 1 and event.inaxes is self.axes:
            self._pressed = (event.x, event.y)

    def _release(self, event: Any) -> None:
        pressed, self._pressed = self._pressed, None
        if pressed is None or self.axes is None or np.hypot(event.x - pressed[0], event.y - pressed[1]) > CLICK_PX:
            return
        column, ids = round(self.axes.transData.inverted().transform((event.x, event.y))[0]), self._ids()
        if 0 <= column < len(ids):
            self._on_click(int(ids[column]))


class ReleasePlot(ComparisonPlot):
    """p_release of each bouton over the recordings."""

    def __init__(self, panel: Panel, *, on_click: Callable[[int], None]) -> None:
        super().__init__(panel, on_click=on_click)
        self.setToolTip("p_release at pulse 1 in each recording, with 95 % intervals. Click a bouton to select it.")

    def plot(self, axes: Axes, comparison: Comparison) -> None:
        """Plot a mark a bouton and recording."""
        plot_release(axes, comparison)

    def handles(self, comparison: Comparison, *, most_letters: int) -> list[Line2D]:
        """Name the recordings."""
        return recording_handles(comparison, most_letters=most_letters)


class SitesComparedPlot(ComparisonPlot):
    """n_sites of each bouton from all recordings together beside that from the first alone."""

    def __init__(self, panel: Panel, *, on_click: Callable[[int], None]) -> None:
        super().__init__(panel, on_click=on_click)
        self.setToolTip(
            "Points: most likely number of sites; bars: numbers that the data cannot exclude. "
            "Click a bouton to select it."
        )

    def plot(self, axes: Axes, comparison: Comparison) -> None:
        """Plot two marks a bouton."""
        plot_sites(axes, comparison)

    def handles(self, comparison: Comparison, *, most_letters: int) -> list[Line2D]:  # noqa: ARG002
        """Name the two."""
        return sites_handles(most_letters=most_letters)
