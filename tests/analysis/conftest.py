"""Small recordings as files: a few clear boutons, and settings under which their analysis is quick."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pytest
import tifffile

from napari_boutonrelease.analysis.settings import Settings
from napari_boutonrelease.recording import write_protocol
from napari_boutonrelease.simulation import BoutonRecipe, Recipe, simulate_recording

BOUTONS = tuple(
    BoutonRecipe(y_px=y, x_px=x, n_sites=n, p_site=p, q_dff=0.5, f0_photons=40.0)
    for y, x, n, p in ((14.0, 12.0, 1, 0.3), (17.0, 32.0, 2, 0.4), (15.0, 51.0, 1, 0.8))
)


@dataclass(frozen=True)
class Files:
    """A movie and its protocol."""

    movie: Path
    protocol: Path


def _simulate(*, seed=1, **changes):
    small = {
        "boutons": BOUTONS,
        "height_px": 32,
        "width_px": 64,
        "trials": 24,
        "first_s": 0.4,
        "trial_interval_s": 0.6,
        "wander_um": 0.0,
        "drift_walk_px": 0.0,
        "drift_wave_px": 0.1,
    }
    return simulate_recording(Recipe(**small | changes), rng=np.random.default_rng(seed))


def _write(folder, frames, protocol, **options):
    files = Files(movie=folder / "axon.tif", protocol=folder / "axon.protocol.toml")
    tifffile.imwrite(files.movie, frames, **{"photometric": "minisblack", "metadata": {"axes": "TYX"}, **options})
    write_protocol(protocol, files.protocol)
    return files


@pytest.fixture(scope="session")
def simulate():
    """Simulate a small recording of 24 trials with changes to its recipe."""
    return _simulate


@pytest.fixture(scope="session")
def write_files():
    """Write frames and a protocol into a folder."""
    return _write


@pytest.fixture(scope="session")
def quick():
    """Settings that leave out what costs time only."""
    return Settings.model_validate({"quanta": {"n_max": 4, "bootstrap": 0}, "pairs": {"bootstrap": 100}})
