"""The report of a recording that was really analysed: every key is described, every page can be drawn."""

import json

import numpy as np
import pytest

from napari_boutonrelease.analysis.columns import SUMMARY
from napari_boutonrelease.analysis.run import run_analysis
from napari_boutonrelease.analysis.settings import Settings
from napari_boutonrelease.recording import movie_from_array
from napari_boutonrelease.reports import write_result
from napari_boutonrelease.simulation import BoutonRecipe, preset_recipe, simulate_recording


@pytest.fixture(scope="module")
def analysed():
    boutons = tuple(
        BoutonRecipe(y_px=20.0, x_px=x, n_sites=n, p_site=p, q_dff=0.5, f0_photons=9.0)
        for x, n, p in ((16.0, 2, 0.4), (40.0, 1, 0.7), (64.0, 1, 0.0))
    )
    recipe = preset_recipe("fast-pair", height_px=40, width_px=80, trials=20, boutons=boutons)
    simulation = simulate_recording(recipe, rng=np.random.default_rng(6))
    movie = movie_from_array(
        simulation.frames, frame_interval_s=recipe.frame_interval_s, pixel_size_um=recipe.pixel_size_um
    )
    settings = Settings(quanta={"bootstrap": 0}, pairs={"bootstrap": 200})
    return run_analysis(movie, simulation.protocol, settings=settings)


@pytest.fixture(scope="module")
def folder(analysed, tmp_path_factory):
    return write_result(analysed, tmp_path_factory.mktemp("real") / "axon.release", overwrite=False)


def test_every_key_of_the_summary_is_described(analysed):
    for group, entries in analysed.summary.items():
        for key in entries:
            assert f"{group}.{key}" in SUMMARY


def test_the_folder_holds_a_figure_of_every_bouton_and_the_report(analysed, folder):
    drawn = {path.stem for path in (folder / "figures").glob("bouton_*.svg")}
    assert len(drawn) == len(analysed.boutons) >= 2
    assert (folder / "report.pdf").stat().st_size > 20_000
    described = {resource["path"] for resource in json.loads((folder / "datapackage.json").read_text())["resources"]}
    on_disk = {path.relative_to(folder).as_posix() for path in folder.rglob("*") if path.is_file()}
    assert described == on_disk - {"datapackage.json"}


def test_the_same_result_gives_the_same_files(analysed, folder, tmp_path):
    again = write_result(analysed, tmp_path / "again", overwrite=False)
    for name in ("boutons.csv", "report.pdf", "figures/map.svg", "figures/bouton_01.png"):
        assert (again / name).read_bytes() == (folder / name).read_bytes(), name
