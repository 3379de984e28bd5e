"""Make the pictures of the napari docks, in both themes: `python docs/make_dock_pictures.py` (needs a display).

On a machine without one: `xvfb-run -s "-screen 0 1600x1000x24" python docs/make_dock_pictures.py`.
"""

from __future__ import annotations

import tempfile
import time
from dataclasses import replace
from pathlib import Path

import napari
import numpy as np
from qtpy.QtWidgets import QApplication

import napari_boutonrelease as br
from napari_boutonrelease.docks.arrange import open_all_docks
from napari_boutonrelease.docks.panel import model_of
from napari_boutonrelease.sample_data import fast_pair
from napari_boutonrelease.simulation import BoutonRecipe, Truth, write_simulation

FOLDER = Path(__file__).resolve().parent / "images" / "docks"
SIZES = {
    "Recording": (430, 700),
    "Boutons": (430, 700),
    "Axon": (430, 620),
    "Results": (560, 420),
    "Responses": (960, 460),
    "Quantal": (960, 460),
}


def wait(seconds: float) -> None:
    """Let the window work."""
    end = time.monotonic() + seconds
    while time.monotonic() < end:
        QApplication.processEvents()
        time.sleep(0.01)


def more_calcium(truth: Truth, folder: Path) -> Path:
    """Record the same boutons at a higher release probability, and analyse that; returns the folder of results."""
    spots = [spot for spot, kind in enumerate(truth.kind) if kind == "releasing"]
    boutons = tuple(
        BoutonRecipe(
            y_px=float(truth.y_px[spot]),
            x_px=float(truth.x_px[spot]),
            n_sites=int(truth.n_sites[spot]),
            p_site=float(1.0 - (1.0 - truth.p_site[spot]) ** 2),
            q_dff=float(truth.q_dff[spot]),
            f0_photons=float(truth.f0_photons[spot]),
        )
        for spot in spots
    )
    recipe = replace(truth.recipe, boutons=boutons, n_boutons=len(boutons), silent_boutons=0, dim_boutons=0)
    movie = folder / "high calcium.tif"
    write_simulation(movie, recipe, rng=np.random.default_rng(8), overwrite=True)
    analysis = br.analyse(movie, movie.with_suffix(".protocol.toml"))
    return analysis.write(folder / "high calcium.release")


def picture(theme: str, results: Path) -> None:
    """Analyse the sample recording, take each dock's picture in one theme, and compare with other results."""
    viewer = napari.Viewer(show=True)
    viewer.theme = theme
    for data, options, _ in fast_pair():
        viewer.add_image(data, **options)
    open_all_docks(viewer)
    wait(2)
    model = model_of(viewer)
    panels = {name.split()[0]: getattr(dock, "native", dock) for name, dock in viewer.window.dock_widgets.items()}
    panels["Recording"].runner.analyse(model.request())
    while model.measured is None:
        wait(0.2)
    model.select(bouton=5, trial=3)
    wait(2)
    viewer.window._qt_window.resize(1366, 768)
    wait(1)
    viewer.window.screenshot(FOLDER / f"window-{theme}.png", canvas_only=False, flash=False)
    for name, (width, height) in SIZES.items():
        dock = panels[name].parent()
        dock.setFloating(True)
        dock.resize(width, height)
        dock.raise_()
        wait(1.5)
        panels[name].grab().save(str(FOLDER / f"{name.lower()}-{theme}.png"))
    axon = panels["Axon"]
    axon.tabs.setCurrentIndex(1)
    axon.comparison.compared.add_folder(results)
    axon.comparison.compare()
    while axon.comparison.compared.comparison is None:
        wait(0.2)
    axon.parent().resize(430, 700)
    wait(2)
    axon.grab().save(str(FOLDER / f"comparison-{theme}.png"))
    viewer.close()
    wait(0.5)


if __name__ == "__main__":
    FOLDER.mkdir(parents=True, exist_ok=True)
    with tempfile.TemporaryDirectory() as scratch:
        ((_, options, _),) = fast_pair()
        recordings = Path(scratch) / "recordings"  # shown in the picture
        recordings.mkdir()
        again = more_calcium(options["metadata"]["truth"], recordings)
        for chosen in ("dark", "light"):
            picture(chosen, again)
