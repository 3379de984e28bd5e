"""A small plot inside a dock: the reports' palette, in the colours of napari's theme."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import matplotlib as mpl
import numpy as np
from matplotlib.axes import Axes
from matplotlib.backends.backend_qtagg import FigureCanvasQTAgg
from matplotlib.figure import Figure
from napari.utils.theme import get_theme
from numpy.typing import NDArray
from qtpy.QtCore import Qt
from qtpy.QtGui import QPaintEvent, QResizeEvent, QShowEvent, QWheelEvent
from qtpy.QtWidgets import QSizePolicy

from ..reports import figures_style as style
from .panel import Panel
from .turns import TURNS

_SMALLEST_PX = 60
_BINS = 1000


@dataclass(frozen=True, slots=True, kw_only=True)
class Palette:
    """Colours that can be read on the theme's background.

    Attributes
    ----------
    paper, ink, muted, hairline : str
        Background, text, less important text, thin lines.
    evoked, pulse_2, fit, null : str
        Meanings, as in the report.
    dark : bool
        Whether the background is dark.
    """

    paper: str
    ink: str
    muted: str
    hairline: str
    evoked: str
    pulse_2: str
    fit: str
    null: str
    dark: bool

    def rc(self) -> dict[str, Any]:
        """Return the settings of matplotlib that these colours mean."""
        return {
            "text.color": self.ink,
            "axes.edgecolor": self.muted,
            "axes.labelcolor": self.ink,
            "xtick.color": self.muted,
            "ytick.color": self.muted,
            "xtick.labelcolor": self.ink,
            "ytick.labelcolor": self.ink,
            "legend.labelcolor": self.ink,
            "axes.facecolor": self.paper,
            "figure.facecolor": self.paper,
            "font.size": 8.0,
            "axes.labelsize": 8.0,
            "axes.titlesize": 8.0,
            "xtick.labelsize": 7.0,
            "ytick.labelsize": 7.0,
            "legend.fontsize": 7.0,
        }


def palette_of(theme: str) -> Palette:
    """Return the palette for a theme of napari."""
    colours = get_theme(theme)
    paper = colours.background.as_hex()
    red, green, blue = colours.background.as_rgb_tuple()[:3]
    dark = 0.299 * red + 0.587 * green + 0.114 * blue < 128
    return Palette(
        paper=paper,
        ink=colours.text.as_hex(),
        muted="#a9b3bc" if dark else style.MUTED,
        hairline="#4a525b" if dark else style.HAIRLINE,
        evoked="#6db3f2" if dark else style.EVOKED,
        pulse_2=style.PULSE_2 if dark else "#c47f12",
        fit="#ff8a5c" if dark else style.FIT,
        null="#8b959e" if dark else style.NULL,
        dark=dark,
    )


Draw = Callable[[Figure, Palette], None]


class Plot(FigureCanvasQTAgg):
    """A plot that is drawn anew from nothing by one function, whenever `refresh` is called or the theme changes.

    Parameters
    ----------
    panel : Panel
        The dock it belongs to.
    draw : callable
        Called with an empty figure and the palette. Not called while the plot is hidden.
    height_px : int
        Least height.
    """

    def __init__(self, panel: Panel, draw: Draw, *, height_px: int = 150) -> None:
        super().__init__(Figure(layout="constrained", dpi=100))
        self._panel_theme = lambda: panel.viewer.theme
        self._draw = draw
        self._outdated = True
        self._resized = False
        self._cursor: Cursor | None = None
        self.setMinimumSize(160, height_px)
        self.setSizePolicy(QSizePolicy.Policy.Expanding, QSizePolicy.Policy.Expanding)
        self.setFocusPolicy(Qt.FocusPolicy.ClickFocus)
        panel.link(panel.viewer.events.theme, self.refresh)

    def refresh(self, *_: object) -> None:
        """Draw anew, at once where the plot can be seen, else when it is shown."""
        self._outdated = True
        self._cursor = None
        if self.isVisible():
            self.update()

    def cursor(self, axes: Axes, *, at: float, **line: Any) -> Cursor:
        """Add a vertical line that moves without the rest being drawn anew; call it from the drawing function."""
        self._cursor = Cursor(self, axes, at=at, **line)
        return self._cursor

    def draw(self) -> None:
        """Render the figure; nothing is laid out in a plot too small for it."""
        if self.width() >= _SMALLEST_PX and self.height() >= _SMALLEST_PX:
            super().draw()
            if self._cursor is not None:
                self._cursor.keep_background()

    @property
    def waits(self) -> bool:
        """Whether what is painted is not what is to be shown."""
        return self._outdated or self._resized

    def catch_up(self) -> None:
        """Draw what is to be shown."""
        outdated, self._outdated, self._resized = self._outdated, False, False
        if outdated:
            self._make()
        else:
            self.draw()

    def draw_idle(self) -> None:
        """Draw the same figure at another size, before it is painted next."""
        self._resized = True
        self.update()

    def paintEvent(self, event: QPaintEvent) -> None:
        """Bring the figure up to date before it is shown, unless others are in the middle of it."""
        if self.waits and TURNS.may_draw(self):
            self.catch_up()
        super().paintEvent(event)

    def showEvent(self, event: QShowEvent) -> None:
        """Draw what has changed while the plot was hidden."""
        super().showEvent(event)
        self.update()

    def resizeEvent(self, event: QResizeEvent) -> None:
        """Follow the dock's size."""
        super().resizeEvent(event)
        self.draw_idle()

    def wheelEvent(self, event: QWheelEvent) -> None:
        """Let the wheel scroll the dock as well."""
        super().wheelEvent(event)
        event.ignore()

    def _make(self) -> None:
        palette = palette_of(self._panel_theme())
        self.figure.clear()
        self.figure.set_facecolor(palette.paper)

        @style.styled
        def make() -> None:
            with mpl.rc_context(palette.rc()):  # type: ignore[arg-type]
                self._draw(self.figure, palette)

        make()
        self.draw()


class Cursor:
    """A vertical line over a plot, moved by putting back the picture below it."""

    def __init__(self, plot: Plot, axes: Axes, *, at: float, **line: Any) -> None:
        self._plot = plot
        self._axes = axes
        self._background: Any = None
        self._line = axes.axvline(at, animated=True, **{"lw": 1.2, **line})

    def keep_background(self) -> None:
        """Keep the picture without the line, and draw the line."""
        self._background = self._plot.copy_from_bbox(self._axes.bbox.padded(2))
        self._axes.draw_artist(self._line)

    def move(self, at: float) -> None:
        """Put the line elsewhere."""
        self._line.set_xdata([at, at])
        if self._background is not None and self._line.figure is not None:
            self._plot.restore_region(self._background)
            self._axes.draw_artist(self._line)
            self._plot.blit(self._axes.bbox.padded(2))


def say(axes: Axes, sentence: str, palette: Palette) -> None:
    """Show a sentence where there is nothing to plot yet."""
    axes.set_axis_off()
    axes.text(0.5, 0.5, sentence, transform=axes.transAxes, ha="center", va="center", color=palette.muted, wrap=True)


def envelope(
    x: NDArray[np.float64], y: NDArray[np.float64], *, n_bins: int = _BINS
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Reduce a long trace to the smallest and largest value of each bin, which looks the same when drawn.

    Parameters
    ----------
    x, y : (n,) ndarray
        `y` may hold NaN; a bin without numbers stays a gap.
    n_bins : int
        At most twice as many points come back.

    Returns
    -------
    x, y : (k,) ndarray

    Examples
    --------
    >>> import numpy as np
    >>> x, y = envelope(np.arange(8.0), np.array([0.0, 5, 1, 2, -3, 2, 2, 2]), n_bins=2)
    >>> x.tolist(), y.tolist()
    ([0.0, 0.0, 4.0, 4.0], [0.0, 5.0, -3.0, 2.0])
    """
    if len(x) <= 2 * n_bins:
        return x, y
    begins = np.linspace(0, len(x), n_bins, endpoint=False).astype(np.intp)
    lowest = np.fmin.reduceat(y, begins)
    highest = np.fmax.reduceat(y, begins)
    return np.repeat(x[begins], 2), np.column_stack([lowest, highest]).ravel()
