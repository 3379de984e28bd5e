"""A plot whose parts are made once: new data only fill them; what follows the mouse is drawn over a kept picture."""

from __future__ import annotations

from typing import Any

from matplotlib.artist import Artist
from matplotlib.axes import Axes
from matplotlib.figure import Figure

from .panel import Panel
from .plots import Palette, Plot

_NOTHING, _MOVE, _FILL = 0, 1, 2
CLICK_PX = 4.0
"""The mouse may move this far between press and release of a click."""


class LivePlot(Plot):
    """Base of plots that answer at once.

    A subclass makes its artists in `make`, gives them data in `fill` and puts those listed in `moving` (made with
    ``animated=True``) in place in `place`. Several calls of `refill` and `move` before the next painting cost one.

    Attributes
    ----------
    axes : Axes or None
        None until the plot is first seen.
    moving : list of Artist
        Drawn last, over the picture of everything else.
    """

    margins_px: tuple[float, float, float, float] = (46.0, 8.0, 10.0, 34.0)
    """Room at the left, top, right and bottom of the axes."""

    def __init__(self, panel: Panel, *, height_px: int = 130) -> None:
        self.axes: Axes | None = None
        self.moving: list[Artist] = []
        self._need = _NOTHING
        self._picture: Any = None
        self._sentence: Any = None
        super().__init__(panel, self._build, height_px=height_px)

    # Not abstract by `abc`: its metaclass and that of PySide6's widgets do not go together.

    def make(self, axes: Axes, palette: Palette) -> None:
        """Make the artists; called anew when the theme changes. A subclass has to say how."""
        raise NotImplementedError

    def fill(self, axes: Axes) -> None:
        """Give the artists their data. A subclass has to say how."""
        raise NotImplementedError

    def place(self) -> None:
        """Put the moving artists in place, where there are any."""

    def fit(self, axes: Axes) -> None:
        """Suit what is written to the size of the axes; called before every rendering."""

    def refill(self, *_: object) -> None:
        """Show other data."""
        self._ask(_FILL)

    def move(self, *_: object) -> None:
        """Show the moving artists elsewhere."""
        self._ask(_MOVE)

    def say(self, sentence: str) -> None:
        """Show a sentence instead of the axes, or the axes again where it is empty; call it from `fill`."""
        if self.axes is not None:
            self.axes.set_visible(not sentence)
            self._sentence.set_text(sentence)

    def refresh(self, *_: object) -> None:
        """Make everything anew."""
        self.axes = None
        super().refresh()

    def draw(self) -> None:
        """Render the figure, keep its picture, and draw what moves over it."""
        self._picture = None
        if self.axes is not None:
            left, top, right, bottom = self.margins_px
            ratio = self.device_pixel_ratio
            width, height = self.figure.bbox.width / ratio, self.figure.bbox.height / ratio
            if width > left + right + 20 and height > top + bottom + 20:
                self.figure.subplots_adjust(
                    left=left / width, right=1 - right / width, bottom=bottom / height, top=1 - top / height
                )
                self.fit(self.axes)
        super().draw()
        if self.axes is not None:
            self._picture = self.copy_from_bbox(self.figure.bbox)
            self._draw_moving()

    @property
    def waits(self) -> bool:
        """Whether what is painted is not what is to be shown."""
        return super().waits or self._need != _NOTHING

    def catch_up(self) -> None:
        """Bring up to date what has changed, and no more."""
        need, self._need = self._need, _NOTHING
        if self.axes is None or self._outdated:
            super().catch_up()
            return
        if need == _FILL:
            self.fill(self.axes)
        if need:
            self.place()
        if need == _FILL or self._resized or self._picture is None:
            self._resized = False
            self.draw()
        else:
            self.restore_region(self._picture)
            self._draw_moving()

    def _ask(self, need: int) -> None:
        self._need = max(self._need, need)
        if self.isVisible():
            self.update()

    def _build(self, figure: Figure, palette: Palette) -> None:
        figure.set_layout_engine(None)
        self.axes = figure.add_subplot()
        # New ticks, which come with new data, take these colours instead of those in force by then.
        self.axes.tick_params(
            color=palette.muted, labelcolor=palette.ink, labelsize=7.0, length=2.4, width=0.6, pad=2.0
        )
        self._sentence = figure.text(
            0.5, 0.5, "", ha="center", va="center", color=palette.muted, fontsize=8.0, wrap=True
        )
        self.moving = []
        self.make(self.axes, palette)
        self.fill(self.axes)
        self.place()

    def _draw_moving(self) -> None:
        if self.axes is not None and self.axes.get_visible():
            for artist in self.moving:
                if artist.get_visible():
                    self.axes.draw_artist(artist)
