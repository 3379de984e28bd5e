"""Plots of the reports, made for white paper, in colours that can be read on the window's theme."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

from matplotlib.colors import to_hex
from matplotlib.lines import Line2D
from matplotlib.text import Text

from ..reports import figures_style as style

if TYPE_CHECKING:
    from matplotlib.axes import Axes

    from .plots import Palette

_FOURTH, _SIXTH = "#9c3a76", "#1d2833"  # of the series of recordings


def adopt_palette(axes: Axes, palette: Palette) -> None:
    """Replace the colours of the reports in everything drawn so far."""
    others = {
        style.EVOKED: palette.evoked,
        style.PULSE_2: palette.pulse_2,
        style.FIT: palette.fit,
        style.NULL: palette.null,
        style.MUTED: palette.muted,
        style.HAIRLINE: palette.hairline,
        style.INK: palette.ink,
        _FOURTH: "#d77fb4" if palette.dark else _FOURTH,
        _SIXTH: palette.ink,
        "#ffffff": palette.paper,
    }

    def other(colour: Any) -> Any:
        return colour if isinstance(colour, str) and colour == "none" else others.get(to_hex(colour), colour)

    for artist in axes.findobj(lambda one: isinstance(one, Line2D | Text)):
        if isinstance(artist, Text):
            artist.set_color(other(artist.get_color()))
        elif isinstance(artist, Line2D):
            line, face, edge = artist.get_color(), artist.get_markerfacecolor(), artist.get_markeredgecolor()
            artist.set_color(other(line))
            artist.set_markerfacecolor(other(face))
            artist.set_markeredgecolor(other(edge))
