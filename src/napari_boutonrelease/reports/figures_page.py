"""Paper measured in millimetres: areas that hold axes, text and paragraphs, and know how wide a text is."""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache
from typing import Any

from matplotlib.axes import Axes
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.figure import Figure
from matplotlib.font_manager import FontProperties, findfont, get_font
from matplotlib.lines import Line2D
from matplotlib.patches import Rectangle

from .figures_style import BODY, HAIRLINE, INK

MM_PER_INCH = 25.4
MM_PER_POINT = MM_PER_INCH / 72.0
A4_MM = (210.0, 297.0)
MARGIN_MM = 16.0
LINE_FACTOR = 1.38
_MEASURED_POINTS = 200.0


def blank_figure(width_mm: float, height_mm: float) -> Figure:
    """Return an empty figure of that size, drawn by Agg and known to no window."""
    figure = Figure(figsize=(width_mm / MM_PER_INCH, height_mm / MM_PER_INCH))
    FigureCanvasAgg(figure)
    return figure


@dataclass(frozen=True, slots=True, kw_only=True)
class Area:
    """A rectangle on a figure; positions in it are mm from its upper left corner, y downwards.

    Attributes
    ----------
    figure : Figure
        The paper.
    left, top, width, height : float
        Place and size on the figure, mm.
    """

    figure: Figure
    left: float
    top: float
    width: float
    height: float

    @classmethod
    def of(cls, figure: Figure, *, margin: float = 0.0) -> Area:
        """Return the whole figure within a margin in mm."""
        width, height = (float(size) * MM_PER_INCH for size in figure.get_size_inches())
        return cls(figure=figure, left=margin, top=margin, width=width - 2 * margin, height=height - 2 * margin)

    def part(self, x: float, y: float, width: float, height: float) -> Area:
        """Return a rectangle within this one."""
        return Area(figure=self.figure, left=self.left + x, top=self.top + y, width=width, height=height)

    def axes(self, x: float, y: float, width: float, height: float, **options: Any) -> Axes:
        """Add axes whose frame has this place and size."""
        left, bottom = self._fraction(x, y + height)
        right, top = self._fraction(x + width, y)
        return self.figure.add_axes((left, bottom, right - left, top - bottom), **options)

    def text(self, x: float, y: float, text: str, *, size: float = BODY, color: str = INK, **options: Any) -> None:
        """Write one line; `y` is its upper edge unless `va` says otherwise."""
        options = {"ha": "left", "va": "top", **options}
        self.figure.text(*self._fraction(x, y), text, fontsize=size, color=color, **options)

    def paragraph(
        self,
        x: float,
        y: float,
        width: float,
        text: str,
        *,
        size: float = BODY,
        color: str = INK,
        weight: str = "normal",
    ) -> float:
        """Write a text wrapped to `width`; return the y below it."""
        for line in wrapped(text, width, size=size, weight=weight):
            self.text(x, y, line, size=size, color=color, weight=weight)
            y += line_mm(size)
        return y

    def rule(self, x: float, y: float, width: float, *, color: str = HAIRLINE, weight: float = 0.6) -> None:
        """Draw a horizontal line."""
        (x0, y0), (x1, _) = self._fraction(x, y), self._fraction(x + width, y)
        self.figure.add_artist(Line2D([x0, x1], [y0, y0], color=color, linewidth=weight))

    def box(self, x: float, y: float, width: float, height: float, *, color: str) -> None:
        """Fill a rectangle behind everything else."""
        (x0, y0), (x1, y1) = self._fraction(x, y + height), self._fraction(x + width, y)
        self.figure.add_artist(Rectangle((x0, y0), x1 - x0, y1 - y0, color=color, linewidth=0, zorder=-1))

    def _fraction(self, x: float, y: float) -> tuple[float, float]:
        width, height = (float(size) * MM_PER_INCH for size in self.figure.get_size_inches())
        return (self.left + x) / width, 1.0 - (self.top + y) / height


def line_mm(size: float) -> float:
    """Distance from line to line at a font size in points, mm."""
    return size * LINE_FACTOR * MM_PER_POINT


def text_width_mm(text: str, *, size: float = BODY, weight: str = "normal") -> float:
    """Width of one line of text, mm."""
    return sum(_advance_mm(letter, weight) for letter in text) * size


@lru_cache(maxsize=2048)
def _advance_mm(letter: str, weight: str) -> float:
    """How far a letter moves the pen at a font size of one point, mm."""
    font = get_font(findfont(FontProperties(family="DejaVu Sans", weight=weight)))
    font.set_size(_MEASURED_POINTS, 72)  # large, so that rounding to whole pixels does not matter
    return float(font.load_char(ord(letter)).linearHoriAdvance) / 65536.0 * MM_PER_POINT / _MEASURED_POINTS


def wrapped(text: str, width_mm: float, *, size: float = BODY, weight: str = "normal") -> list[str]:
    """Break a text into lines no wider than `width_mm`; a word too long for a line is broken, too.

    Only plain spaces part words: a non-breaking space keeps a value and its unit together.

    Examples
    --------
    >>> wrapped("one two three", 12.0, size=7.0)
    ['one two', 'three']
    """
    lines: list[str] = []
    line = ""
    for word in filter(None, text.replace("\n", " ").split(" ")):
        longer = f"{line} {word}" if line else word
        if text_width_mm(longer, size=size, weight=weight) <= width_mm:
            line = longer
            continue
        if line:
            lines.append(line)
        while text_width_mm(word, size=size, weight=weight) > width_mm and len(word) > 1:
            fits = max(
                n
                for n in range(1, len(word))
                if n == 1 or text_width_mm(word[:n], size=size, weight=weight) <= width_mm
            )
            lines.append(word[:fits])
            word = word[fits:]
        line = word
    return [*lines, line] if line else lines
