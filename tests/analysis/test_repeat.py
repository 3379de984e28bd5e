"""The same inputs give the same tables, from the command line and from Python, today and from a saved analysis."""

from __future__ import annotations

import json
import shutil

import frictionless
import numpy as np
import pandas as pd
import pytest

import napari_boutonrelease as br
from napari_boutonrelease.analysis.columns import TABLES
from napari_boutonrelease.analysis.settings import Settings
from napari_boutonrelease.cli.main import main
from napari_boutonrelease.reports import write_result

QUICK = ("--quanta-bootstrap", "20", "--pairs-bootstrap", "200", "--n-max", "3")


def tables(folder):
    """Bytes of every table."""
    found = {path.name: path.read_bytes() for path in folder.glob("*.csv")}
    assert found.keys() == {f"{name}.csv" for name in TABLES}
    return found


def run(*words):
    return main([str(word) for word in words])


@pytest.fixture(scope="module")
def recording(tmp_path_factory, simulate, write_files):
    """Two boutons under pulse pairs, with their positions in a file beside the movie."""
    simulation = simulate(
        boutons=simulate(trials=1).truth.recipe.boutons[1:], pulses=2, trials=16, trial_interval_s=0.7
    )
    folder = tmp_path_factory.mktemp("recording")
    files = write_files(folder, simulation.frames, simulation.protocol)
    (folder / "places.csv").write_text("y_px,x_px\n17,32\n15,51\n", encoding="utf-8")
    return files


@pytest.fixture(scope="module")
def results(recording):
    """Results of the recording, with given boutons, by the command line: beside the movie."""
    places = recording.movie.with_name("places.csv")
    assert run("analyse", recording.movie, "--protocol", recording.protocol, "--boutons", places, *QUICK) == 0
    return recording.movie.with_name("axon.release")


@pytest.fixture
def copied(results, tmp_path):
    """The recording and its results as if they had been made in another folder: movie and saved analysis."""
    folder = tmp_path / "axon"
    shutil.copytree(results.parent, folder)
    saved = folder / "axon.release" / "analysis.json"
    text = saved.read_text(encoding="utf-8")
    assert str(results.parent) in text
    saved.write_text(text.replace(str(results.parent), str(folder)), encoding="utf-8")
    return folder / "axon.tif", saved


def settings_of(folder):
    return json.loads((folder / "analysis.json").read_text(encoding="utf-8"))["settings"]


def test_a_saved_analysis_gives_the_same_tables_byte_by_byte(results, tmp_path):
    assert run("analyse", "--from", results / "analysis.json", "--out", tmp_path / "again") == 0
    assert tables(tmp_path / "again") == tables(results)
    assert settings_of(tmp_path / "again") == settings_of(results)


def test_python_gives_the_same_tables_as_the_command_line(recording, results, tmp_path):
    analysis = br.analyse(
        recording.movie,
        recording.protocol,
        settings=Settings.model_validate(settings_of(results)),
        boutons=recording.movie.with_name("places.csv"),
    )
    again = write_result(analysis, tmp_path / "again", overwrite=False, figures=False)
    assert tables(again) == tables(results)


def test_another_seed_changes_what_resampling_gives_alone(recording, results, tmp_path):
    settings = Settings.model_validate(settings_of(results))
    analysis = br.analyse(
        recording.movie,
        recording.protocol,
        settings=settings.model_copy(update={"seed": settings.seed + 1}),
        boutons=recording.movie.with_name("places.csv"),
    )
    again = write_result(analysis, tmp_path / "again", overwrite=False, figures=False)
    resampled = ("boutons.csv", "co_release.csv")
    assert {name: text for name, text in tables(again).items() if name not in resampled} == {
        name: text for name, text in tables(results).items() if name not in resampled
    }
    one, other = (pd.read_csv(folder / "boutons.csv") for folder in (results, again))
    differ = {column for column in one if not one[column].equals(other[column])}
    assert {"ppr_lo", "ppr_hi"} <= differ <= {"ppr_lo", "ppr_hi", "fit_p", "flags"}
    np.testing.assert_allclose(one.ppr_lo, other.ppr_lo, rtol=0.3)


def test_real_boutons_are_found_alike_whatever_the_seed(recording, quick):
    # The seed draws the noise that sets the cut: what lies near the cut may come and go, real boutons may not.
    places = pd.read_csv(recording.movie.with_name("places.csv"))
    found = []
    for seed in (1, 2):
        settings = quick.model_copy(update={"seed": seed})
        boutons = br.analyse(recording.movie, recording.protocol, settings=settings).boutons
        away = np.hypot(*(boutons[axis].to_numpy()[:, None] - places[axis].to_numpy() for axis in ("y_px", "x_px")))
        assert (away.min(axis=0) < 1.0).all()
        found.append(boutons.iloc[away.argmin(axis=0)][["y_px", "x_px", "p_release"]].to_numpy())
    assert np.allclose(found[0], found[1], atol=0.05)


def test_the_data_package_of_a_real_analysis_is_valid(results):
    report = frictionless.Package(str(results / "datapackage.json")).validate()
    assert report.valid, report.flatten(["type", "note"])
    listed = {resource["path"] for resource in json.loads((results / "datapackage.json").read_text())["resources"]}
    present = {path.relative_to(results).as_posix() for path in results.rglob("*") if path.is_file()}
    assert listed == present - {"datapackage.json"}


def test_a_movie_that_moved_with_its_results_is_found(copied, results, tmp_path):
    movie, _ = copied
    elsewhere = movie.parent.rename(tmp_path / "elsewhere")
    words = ["--from", elsewhere / "axon.release" / "analysis.json", "--boutons", elsewhere / "places.csv"]
    assert run("analyse", *words, "--out", elsewhere / "again") == 0
    assert tables(elsewhere / "again") == tables(results)


def test_a_movie_that_is_gone_is_asked_for_and_taken(copied, results, tmp_path, capsys):
    movie, saved = copied
    renamed = movie.rename(tmp_path / "renamed.tif")
    assert run("analyse", "--from", saved, "--out", tmp_path / "again") == 2
    out, err = capsys.readouterr()
    assert (out, err.count("\n")) == ("", 1)
    assert str(movie) in err
    assert "give the MOVIE's new path" in err
    assert not (tmp_path / "again").exists()
    assert run("analyse", renamed, "--from", saved, "--out", tmp_path / "again") == 0
    assert tables(tmp_path / "again") == tables(results)


@pytest.mark.parametrize(("change", "words"), [("edited", "has changed since"), ("removed", "is no longer there")])
def test_boutons_that_are_no_longer_the_same_are_not_repeated_silently(copied, tmp_path, capsys, change, words):
    movie, saved = copied
    places = movie.with_name("places.csv")
    places.write_text("y_px,x_px\n17,33\n", encoding="utf-8") if change == "edited" else places.unlink()
    assert run("analyse", "--from", saved, "--out", tmp_path / "again") == 2
    err = capsys.readouterr().err
    assert "places.csv" in err
    assert words in err
    assert "--boutons" in err
    assert not (tmp_path / "again").exists()
