"""Make the pictures of the napari docks, in both themes: `python docs/make_dock_pictures.py` (needs a display).

On a machine without one: `xvfb-run -s "-screen 0 1600x1000x24" python docs/make_dock_pictures.py`.
"""

from __future__ import annotations

import time
from pathlib import Path

import napari
from qtpy.QtWidgets import QApplication

from napari_boutonrelease.docks.arrange import open_all_docks
from napari_boutonrelease.docks.panel import model_of
from napari_boutonrelease.sample_data import fast_pair

FOLDER = Path(__file__).parent / "images" / "docks"
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


def picture(theme: str) -> None:
    """Analyse the sample recording and take each dock's picture in one theme."""
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
    viewer.close()
    wait(0.5)


if __name__ == "__main__":
    FOLDER.mkdir(parents=True, exist_ok=True)
    for chosen in ("dark", "light"):
        picture(chosen)
