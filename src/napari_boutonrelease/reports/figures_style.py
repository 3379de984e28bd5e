"""The look of every figure: one palette that holds under colour-vision deficiency, one set of line weights.

Meaning never rests on colour alone: categories also differ by marker or by fill.
"""

from __future__ import annotations

from collections.abc import Callable
from functools import lru_cache, wraps
from typing import Any, ParamSpec, TypeVar

import matplotlib as mpl
from matplotlib.axes import Axes
from matplotlib.colors import LinearSegmentedColormap

INK = "#22303c"
MUTED = "#5f6d79"
NULL = "#94a0ab"
HAIRLINE = "#d5dbe0"
SHADE = "#f3f5f6"
EVOKED = "#1b64a8"
PULSE_2 = "#e8a33d"
FIT = "#cf4f1b"

FOUND_BY: dict[str, tuple[str, str, bool, str]] = {
    "responses": ("#1b64a8", "o", True, "responses"),
    "both": ("#63b8a8", "D", True, "responses and shape"),
    "shape": ("#e8a33d", "s", False, "shape alone"),
    "hand": ("#9c3a76", "^", True, "hand"),
    "file": ("#1d2833", "P", True, "file"),
}
"""Colour, marker, whether it is filled, and words, for each way a bouton is found."""

VERDICTS: dict[str, tuple[str, str]] = {
    "facilitation": (FIT, "^"),
    "depression": (EVOKED, "v"),
    "unresolved": (MUTED, "o"),
}
"""Colour and marker of each pulse-pair verdict."""

SEQUENTIAL_COLOURS = ("#f3e6b3", "#b7d3a2", "#67b3a3", "#2f86a0", "#235a8f", "#2a2f6b")
"""From low to high; lightness falls all the way."""

SMALL, BODY, HEAD, TITLE = 6.2, 7.2, 9.0, 17.0

_RC: dict[str, Any] = {
    "font.family": ["DejaVu Sans"],
    "font.size": BODY,
    "text.color": INK,
    "axes.edgecolor": MUTED,
    "axes.labelcolor": INK,
    "axes.labelsize": BODY,
    "axes.labelpad": 2.5,
    "axes.titlesize": BODY,
    "axes.linewidth": 0.6,
    "axes.spines.top": False,
    "axes.spines.right": False,
    "axes.facecolor": "none",
    "axes.unicode_minus": True,
    "axes.axisbelow": True,
    "xtick.color": MUTED,
    "ytick.color": MUTED,
    "xtick.labelcolor": INK,
    "ytick.labelcolor": INK,
    "xtick.labelsize": SMALL,
    "ytick.labelsize": SMALL,
    "xtick.major.size": 2.4,
    "ytick.major.size": 2.4,
    "xtick.major.width": 0.6,
    "ytick.major.width": 0.6,
    "xtick.major.pad": 2.0,
    "ytick.major.pad": 2.0,
    "lines.linewidth": 1.0,
    "lines.markersize": 4.0,
    "legend.frameon": False,
    "legend.fontsize": SMALL,
    "legend.handlelength": 1.4,
    "legend.borderaxespad": 0.0,
    "figure.facecolor": "white",
    "savefig.facecolor": "white",
    "text.hinting": "none",
    "pdf.fonttype": 42,
    "svg.fonttype": "none",
    "svg.hashsalt": "boutonrelease",
}

P = ParamSpec("P")
R = TypeVar("R")


def styled(function: Callable[P, R]) -> Callable[P, R]:
    """Run a function with the look of the reports, and leave the user's own settings as they were."""

    @wraps(function)
    def inner(*args: P.args, **kwargs: P.kwargs) -> R:
        with mpl.rc_context(_look()):
            return function(*args, **kwargs)

    return inner


@lru_cache(maxsize=1)
def _look() -> Any:
    """All settings of looks: a user's own style must not reach into the report."""
    groups = {key.split(".")[0] for key in _RC} | {
        "errorbar",
        "grid",
        "hist",
        "image",
        "markers",
        "patch",
        "path",
        "scatter",
    }
    kept_as_is = {"savefig.directory", "figure.max_open_warning"}
    defaults = {key: value for key, value in mpl.rcParamsDefault.items() if key.split(".")[0] in groups}
    return {key: value for key, value in defaults.items() if key not in kept_as_is} | _RC


@lru_cache(maxsize=1)
def sequential() -> LinearSegmentedColormap:
    """Colour map for a quantity that starts at zero."""
    return LinearSegmentedColormap.from_list("boutonrelease", list(SEQUENTIAL_COLOURS))


def say_nothing_to_show(axes: Axes, sentence: str) -> None:
    """Replace an empty plot by a sentence."""
    axes.set_axis_off()
    axes.text(0.5, 0.5, sentence, transform=axes.transAxes, ha="center", va="center", color=MUTED, wrap=True)
