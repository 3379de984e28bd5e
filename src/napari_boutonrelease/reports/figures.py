"""Every figure that leaves beside the report, by file name.

Each `figure_...` function takes a result and returns a matplotlib `Figure` that no window knows.
"""

from __future__ import annotations

from collections.abc import Callable
from functools import partial
from pathlib import Path

from matplotlib.figure import Figure

from ..analysis.results import AnalysisResult
from .figures_axon import figure_release_along_axon
from .figures_bouton import figure_bouton
from .figures_calls import figure_calls
from .figures_map import figure_map
from .figures_pairs import figure_pulse_pairs, figure_train
from .figures_quality import figure_quality
from .figures_selection import figure_detection, shows_detection
from .figures_style import styled
from .figures_together import figure_together, shows_together
from .figures_trains import figure_pulse_intervals, figure_trains

__all__ = [
    "figure_bouton",
    "figure_calls",
    "figure_detection",
    "figure_map",
    "figure_pulse_intervals",
    "figure_pulse_pairs",
    "figure_quality",
    "figure_release_along_axon",
    "figure_together",
    "figure_train",
    "figure_trains",
    "figures_of",
    "write_figure",
]

_PNG_DPI = 150


def figures_of(result: AnalysisResult) -> dict[str, Callable[[], Figure]]:
    """List the figures of a result by file stem; each is drawn when it is called."""
    listing: dict[str, Callable[[], Figure]] = {
        "map": partial(figure_map, result),
        "release_along_axon": partial(figure_release_along_axon, result),
        "calls": partial(figure_calls, result),
        "quality": partial(figure_quality, result),
    }
    if shows_detection(result):
        listing["detection"] = partial(figure_detection, result)
    if shows_together(result):
        listing["boutons_together"] = partial(figure_together, result)
    if result.stimulus_s.shape[1] > 1:
        listing["pulse_pairs"] = partial(figure_pulse_pairs, result)
    if result.stimulus_s.shape[1] > 2:
        listing["train"] = partial(figure_train, result)
    if len(result.trains):
        listing["trains"] = partial(figure_trains, result)
    if len(result.intervals):
        listing["pulse_intervals"] = partial(figure_pulse_intervals, result)
    ids = [int(bouton) for bouton in result.boutons["bouton"]]
    digits = max(len(str(max(ids, default=0))), 2)
    for row, bouton in enumerate(ids):
        listing[f"bouton_{bouton:0{digits}d}"] = partial(figure_bouton, result, row)
    return listing


@styled
def write_figure(figure: Figure, path: Path) -> None:
    """Write a figure as SVG (text stays text) and as PNG beside it; `path` ends in `.svg`."""
    figure.savefig(path, metadata={"Date": None})
    figure.savefig(path.with_suffix(".png"), dpi=_PNG_DPI, pil_kwargs={"compress_level": 4})
