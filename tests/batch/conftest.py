"""Three small simulated recordings, and a study of them that is analysed once and copied by whoever changes it."""

from __future__ import annotations

import shutil
from pathlib import Path
from types import SimpleNamespace

import numpy as np
import pytest

from napari_boutonrelease import Settings
from napari_boutonrelease.batch import run_batch
from napari_boutonrelease.simulation import BoutonRecipe, preset_recipe, write_simulation

QUICK = {
    "--planted": 0,
    "--n-max": 3,
    "--quanta-bootstrap": 0,
    "--pairs-bootstrap": 100,
    "--permutations": 99,
}
"""Options that leave out what takes long and does not matter here."""

WORDS = ["--no-report", *(str(word) for pair in QUICK.items() for word in pair)]


def quick_settings(**calls: float) -> Settings:
    """Return the settings of `QUICK`, and those of the calls that are given."""
    return Settings(
        selection={"planted": 0},
        quanta={"n_max": 3, "bootstrap": 0},
        pairs={"bootstrap": 100},
        axon={"permutations": 99},
        calls=calls,
    )


def write_manifest(folder: Path, *rows: str, header: str = "movie,protocol,condition,animal") -> Path:
    path = folder / "study.csv"
    path.write_text("\n".join([header, *rows]) + "\n", encoding="utf-8")
    return path


def row(name: str, condition: str = "control", animal: str = "07") -> str:
    return f"{name}.tif,{name}.protocol.toml,{condition},{animal}"


def snapshot(folder: Path) -> dict[str, tuple[bytes, int]]:
    """Content and time of change of every file."""
    return {
        path.relative_to(folder).as_posix(): (path.read_bytes(), path.stat().st_mtime_ns)
        for path in sorted(folder.rglob("*"))
        if path.is_file()
    }


@pytest.fixture(scope="session")
def tools():
    """What tests of this room write and look at files with."""
    return SimpleNamespace(
        write_manifest=write_manifest, row=row, snapshot=snapshot, settings=quick_settings, words=WORDS
    )


@pytest.fixture(scope="session")
def movies(tmp_path_factory):
    """Folder with day1/axon1, day1/axon2 and day2/axon1, each a movie of two boutons with its protocol."""
    folder = tmp_path_factory.mktemp("movies")
    boutons = tuple(
        BoutonRecipe(y_px=14.0, x_px=x, n_sites=2, p_site=p, q_dff=0.6, f0_photons=9.0)
        for x, p in ((14.0, 0.4), (36.0, 0.6))
    )
    recipe = preset_recipe("fast-pair", height_px=28, width_px=50, trials=10, boutons=boutons, specks_off_axon=0)
    for seed, name in enumerate(("day1/axon1", "day1/axon2", "day2/axon1"), start=1):
        (folder / name).parent.mkdir(exist_ok=True)
        write_simulation(folder / f"{name}.tif", recipe, rng=np.random.default_rng(seed), overwrite=False)
    return folder


@pytest.fixture
def own_movies(movies, tmp_path):
    """The same in a folder of the test's own, with their times of change."""
    return shutil.copytree(movies, tmp_path / "movies")


@pytest.fixture(scope="session")
def finished(movies, tmp_path_factory):
    """A folder with the movies and a study of them in which one row cannot be analysed; and its outcome."""
    home = shutil.copytree(movies, tmp_path_factory.mktemp("finished") / "home")
    (home / "broken.tif").write_bytes(b"no movie")
    shutil.copy(home / "day1" / "axon1.protocol.toml", home / "broken.protocol.toml")
    manifest = write_manifest(home, row("day1/axon1"), row("broken", "drug"), row("day2/axon1", "drug", '"b, 2"'))
    steps: list[tuple[int, int]] = []
    outcome = run_batch(
        manifest,
        out=home / "out",
        settings=quick_settings(),
        workers=2,
        report=False,
        progress=lambda *step: steps.append(step),
    )
    return home, outcome, steps


@pytest.fixture
def own_study(finished, tmp_path):
    """Copy of the finished study: folder of movies, manifest and `out`."""
    return shutil.copytree(finished[0], tmp_path / "home")
