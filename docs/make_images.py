"""Makes the pictures and the terminal output that README.md and the tutorial show: `python docs/make_images.py`.

Everything comes from the demo recording (seed 1), so that it can be made anew whenever the analysis changes.
"""

from __future__ import annotations

import contextlib
import io
import os
import tempfile
from pathlib import Path

import numpy as np
from matplotlib.figure import Figure
from matplotlib.patches import Circle

import napari_boutonrelease as br
from napari_boutonrelease.cli.main import main as command_line
from napari_boutonrelease.reports import figures
from napari_boutonrelease.reports.facts import silent, values
from napari_boutonrelease.reports.figures_bouton import draw_bouton
from napari_boutonrelease.reports.figures_map import draw_evidence, draw_map
from napari_boutonrelease.reports.figures_page import Area, blank_figure
from napari_boutonrelease.reports.figures_style import FIT, SMALL, styled

IMAGES = Path(__file__).parent / "images"
DPI = 110
MOST_BYTES = 300_000


def main() -> None:
    """Run the demo and keep what the pages show of it."""
    IMAGES.mkdir(exist_ok=True)
    with tempfile.TemporaryDirectory() as folder, contextlib.chdir(folder):
        _save_output("demo.txt", "demo")
        movie, protocol = "boutonrelease-demo/demo.tif", "boutonrelease-demo/demo.protocol.toml"
        _save_output("inspect.txt", "inspect", movie, "--protocol", protocol)
        analysis = br.analyse(movie, protocol)
    clear, quiet = _clear_bouton(analysis), int(np.flatnonzero(silent(analysis))[0])
    pictures = {
        "result": annotated_result(analysis, clear),
        "map": figures.figure_map(analysis),
        "evidence": evidence(analysis),
        "release": figures.figure_release_along_axon(analysis),
        "calls": figures.figure_calls(analysis),
        "pulse_pairs": figures.figure_pulse_pairs(analysis),
        "bouton": figures.figure_bouton(analysis, clear),
        "silent_bouton": figures.figure_bouton(analysis, quiet),
        "quality": figures.figure_quality(analysis),
    }
    for name, figure in pictures.items():
        _save_picture(figure, IMAGES / f"{name}.png")


def _clear_bouton(analysis: br.Analysis) -> int:
    """Row of a bouton that shows everything: about as many failures as releases, and several sites."""
    p_release, n_sites = values(analysis.boutons, "p_release"), values(analysis.boutons, "n_sites")
    return int(np.nanargmin(np.abs(p_release - 0.7) + np.where(n_sites > 1, 0.0, 1.0)))


@styled
def evidence(analysis: br.Analysis) -> Figure:
    """Draw the evidence map by itself."""
    height, width = analysis.evidence.shape
    figure = blank_figure(180.0, 150.0 * height / width + 15.0)
    draw_evidence(Area.of(figure, margin=4.0), analysis)
    return figure


@styled
def annotated_result(analysis: br.Analysis, row: int) -> Figure:
    """Draw the map above one bouton's block, with the numbers that README.md explains."""
    figure = blank_figure(192.0, 190.0)
    area = Area.of(figure, margin=7.0)
    draw_map(area.part(0.0, 0.0, 178.0, 52.0), analysis)
    block = area.part(0.0, 51.0, 178.0, 126.0)
    draw_bouton(block, analysis, row)
    _mark(area, 152.5, 2.5, 1)  # the map
    places = (
        (-3.4, 11.5),  # p_release
        (25.6, 11.5),  # calls
        (31.0, 17.0),  # flags
        (163.5, 33.0),  # trace
        (8.5, 54.0),  # trials
        (64.5, 54.0),  # histogram
        (134.0, 54.0),  # methods
        (-3.4, 101.5),  # estimates
    )
    for number, (x, y) in enumerate(places, start=2):
        _mark(block, x, y, number)
    return figure


def _mark(area: Area, x: float, y: float, number: int) -> None:
    """Draw a number in a disc."""
    axes = area.axes(x - 2.2, y - 2.2, 4.4, 4.4)
    axes.set_axis_off()
    axes.set_xlim(-1, 1)
    axes.set_ylim(-1, 1)
    axes.add_patch(Circle((0, 0), 0.97, color=FIT, linewidth=0))
    axes.text(0, -0.05, f"{number}", color="white", ha="center", va="center", fontsize=SMALL + 0.8, fontweight="bold")


@styled
def _save_picture(figure: Figure, path: Path) -> None:
    figure.savefig(path, dpi=DPI, pil_kwargs={"optimize": True})
    size = path.stat().st_size
    print(f"{path.name}: {size / 1000:.0f} kB")
    if size > MOST_BYTES:
        raise SystemExit(f"{path} has {size} bytes; at most {MOST_BYTES} are wanted.")


def _save_output(name: str, *arguments: str) -> None:
    """Keep what a command prints."""
    os.environ["COLUMNS"] = "110"
    said = io.StringIO()
    with contextlib.redirect_stdout(said):
        status = command_line(list(arguments))
    if status:
        raise SystemExit(f"boutonrelease {' '.join(arguments)} failed with status {status}.")
    (IMAGES / name).write_text(said.getvalue(), encoding="utf-8")


if __name__ == "__main__":
    main()
