"""A small recording on disk, and what the tests of the docks do again and again."""

from __future__ import annotations

import copy
import gc
from dataclasses import dataclass
from pathlib import Path
from weakref import ref

import numpy as np
import pytest
import tifffile
from qtpy.QtCore import QEvent
from qtpy.QtWidgets import QApplication

from napari_boutonrelease.analysis.pipeline import Pipeline
from napari_boutonrelease.analysis.settings import Settings
from napari_boutonrelease.docks.panel import model_of
from napari_boutonrelease.recording import Protocol, movie_from_array, write_protocol
from napari_boutonrelease.simulation import BoutonRecipe, preset_recipe, simulate_recording


@dataclass(frozen=True)
class Files:
    """A movie whose file states frame interval and pixel size, and a protocol that states the rest."""

    movie: Path
    protocol_file: Path
    protocol: Protocol
    frames: np.ndarray


@pytest.fixture(scope="session")
def files(tmp_path_factory):
    boutons = tuple(
        BoutonRecipe(y_px=16.0, x_px=x, n_sites=n, p_site=p, q_dff=0.6, f0_photons=30.0)
        for x, n, p in ((12.0, 1, 0.4), (32.0, 2, 0.5), (52.0, 1, 0.8))
    )
    recipe = preset_recipe(
        "fast-pair", height_px=32, width_px=64, trials=24, trial_interval_s=0.6, boutons=boutons,
        specks_on_axon=0, specks_off_axon=0, wander_um=0.0, drift_walk_px=0.0,
    )  # fmt: skip
    simulation = simulate_recording(recipe, rng=np.random.default_rng(2))
    folder = tmp_path_factory.mktemp("recording")
    protocol = Protocol(camera_offset=simulation.protocol.camera_offset, stimuli=simulation.protocol.stimuli)
    files = Files(
        movie=folder / "axon.tif",
        protocol_file=folder / "stimulation.toml",  # not the name that is found by itself
        protocol=protocol,
        frames=simulation.frames,
    )
    per_um = 1.0 / recipe.pixel_size_um
    tifffile.imwrite(
        files.movie,
        simulation.frames,
        imagej=True,
        resolution=(per_um, per_um),
        metadata={"axes": "TYX", "finterval": recipe.frame_interval_s, "unit": "um"},
    )
    write_protocol(protocol, files.protocol_file)
    return files


@pytest.fixture(scope="session")
def quick():
    """Settings that leave out what costs time only."""
    return Settings.model_validate({"quanta": {"n_max": 3, "bootstrap": 0}, "pairs": {"bootstrap": 100}})


@pytest.fixture(scope="session")
def simulate():
    """Simulate a still axon with boutons at given places: its movie in memory, and its protocol."""

    def record(*boutons, seed, **recipe):
        chosen = preset_recipe(
            "fast-pair", boutons=tuple(BoutonRecipe(**one) for one in boutons), specks_on_axon=0, specks_off_axon=0,
            wander_um=0.0, drift_walk_px=0.0, spontaneous_per_s=0.0, **recipe,
        )  # fmt: skip
        simulation = simulate_recording(chosen, rng=np.random.default_rng(seed))
        movie = movie_from_array(
            simulation.frames, frame_interval_s=chosen.frame_interval_s, pixel_size_um=chosen.pixel_size_um
        )
        return movie, simulation.protocol

    return record


@pytest.fixture(scope="module")
def recall(recording, quick):
    """Let a dock's analysis know what was measured of the module's recording: each test need not wait for it."""
    measured = Pipeline(*recording)
    measured.measure(quick)

    def tell(dock):
        vars(dock.model.pipeline).update({name: copy.copy(value) for name, value in vars(measured).items()})

    return tell


@pytest.fixture
def closed_for_good(make_napari_viewer):
    """Open a kind of dock in a window, fill its model, close it: nothing may listen any more. Gives the viewer."""

    def open_and_close(dock_class, fill):
        viewer = make_napari_viewer()
        dock = dock_class(viewer)
        docked = viewer.window.add_dock_widget(dock, area="bottom")
        model = model_of(viewer)
        fill(model)
        assert len(model.measured_changed) == 1
        viewer.window.remove_dock_widget(docked)
        signals = (model.measured_changed, model.selection_changed, model.edits_changed, model.settings_changed)
        assert [len(signal) for signal in signals] == [0, 0, 0, 0]
        there = ref(dock)
        del dock, docked
        QApplication.sendPostedEvents(None, QEvent.Type.DeferredDelete)
        gc.collect()
        assert there() is None
        return viewer

    return open_and_close


@pytest.fixture
def when_idle(qtbot):
    """Wait until a dock's work is done."""

    def wait(dock, timeout_ms=60_000):
        qtbot.waitUntil(lambda: not dock.runner.busy, timeout=timeout_ms)

    return wait
