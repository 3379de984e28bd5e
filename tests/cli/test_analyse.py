"""`analyse` from files to a folder, what it says, and that it refuses before it works."""

from __future__ import annotations

import json
import subprocess
import sys

import pandas as pd
import pytest
from pynwb import NWBHDF5IO

from napari_boutonrelease.cli.analyse import out_folder
from napari_boutonrelease.cli.main import main

GUI = {"napari", "magicgui", "qtpy", "PyQt6", "PySide6", "superqt"}
QUICK = ("--quanta-bootstrap", "0", "--pairs-bootstrap", "100", "--n-max", "4")


@pytest.fixture(scope="module")
def recording(tmp_path_factory):
    """Folder of a small simulated recording: axon.tif and its protocol."""
    folder = tmp_path_factory.mktemp("analyse")
    words = ["--trials", "25", "--n-boutons", "3", "--set", "width_px=96", "--set", "specks_off_axon=0"]
    assert main(["simulate", str(folder / "axon.tif"), *words]) == 0
    return folder


@pytest.fixture(scope="module")
def analysed(recording):
    """The same folder, analysed in a process of its own, and what that said."""
    code = (
        "import sys\nfrom napari_boutonrelease.cli.main import main\ncode = main(sys.argv[1:])\n"
        "print('MODULES', *{name.partition('.')[0] for name in sys.modules})\nsys.exit(code)"
    )
    words = ["analyse", recording / "axon.tif", "--protocol", recording / "axon.protocol.toml", *QUICK]
    done = subprocess.run([sys.executable, "-c", code, *map(str, words)], capture_output=True, text=True, check=False)
    return recording / "axon.release", done


@pytest.fixture(scope="module")
def again(analysed, tmp_path_factory):
    """The same analysis repeated from what it saved, now with a file of the open standard."""
    out = tmp_path_factory.mktemp("again") / "again.release"
    words = ["--from", str(analysed[0] / "analysis.json"), "--out", str(out), "--nwb-subject-id", "rat 12"]
    assert main(["analyse", *words]) == 0
    return out


def tables(folder):
    return {path.name: path.read_text(encoding="utf-8") for path in sorted(folder.glob("*.csv"))}


def test_it_writes_a_folder_beside_the_movie_and_says_so(analysed):
    folder, done = analysed
    assert done.returncode == 0, done.stderr
    assert done.stderr == ""  # no progress where there is no terminal
    boutons = pd.read_csv(folder / "boutons.csv")
    assert f"axon: {len(boutons)} bouton" in done.stdout
    assert f"results: {folder}" in done.stdout
    assert (folder / "analysis.json").exists()


def test_it_loads_neither_napari_nor_qt(analysed):
    loaded = set(analysed[1].stdout.rpartition("MODULES")[2].split())
    assert "numpy" in loaded
    assert not loaded & GUI


def test_existing_results_are_refused_before_any_work(analysed, capsys):
    folder = analysed[0]
    before = tables(folder)
    movie, protocol = folder.with_name("axon.tif"), folder.with_name("axon.protocol.toml")
    assert main(["analyse", str(movie), "--protocol", str(protocol)]) == 2
    assert "--overwrite" in capsys.readouterr().err
    assert tables(folder) == before


def test_a_saved_analysis_repeats_to_the_same_tables(analysed, again):
    folder = analysed[0]
    assert tables(again) == tables(folder)
    settings = [json.loads((place / "analysis.json").read_text())["settings"] for place in (folder, again)]
    assert settings[0] == settings[1]


def test_the_nwb_file_is_written_where_it_is_asked_for(analysed, again):
    assert not (analysed[0] / "recording.nwb").exists()
    with NWBHDF5IO(again / "recording.nwb", "r") as io:
        file = io.read()
        assert file.subject.subject_id == "rat 12"
        assert list(file.processing["ophys"]["boutons"]["bouton"]) == list(pd.read_csv(again / "boutons.csv")["bouton"])


def test_a_saved_analysis_refuses_another_movie(analysed, tmp_path, capsys):
    folder = analysed[0]
    words = ["--trials", "25", "--n-boutons", "3", "--set", "width_px=96", "--set", "specks_off_axon=0", "--seed", "2"]
    assert main(["simulate", str(tmp_path / "other.tif"), *words]) == 0
    saved = str(folder / "analysis.json")
    capsys.readouterr()
    assert main(["analyse", str(tmp_path / "other.tif"), "--from", saved, "--out", str(tmp_path / "out")]) == 2
    assert "other.tif" in capsys.readouterr().err
    assert not (tmp_path / "out").exists()


@pytest.mark.parametrize(
    ("words", "message"),
    [
        ([], "Give the MOVIE to analyse, or --from a saved analysis."),
        (["axon.tif"], "Give --protocol FILE.toml"),
        (["none.tif", "--protocol", "axon.protocol.toml"], "none.tif does not exist"),
        (["axon.tif", "--protocol", "none.toml"], "none.toml"),
        (["axon.tif", "--protocol", "axon.protocol.toml", "--n-max", "0"], "--n-max must be"),
    ],
)
def test_wrong_inputs_are_one_sentence_and_write_nothing(recording, monkeypatch, tmp_path, capsys, words, message):
    monkeypatch.chdir(recording)
    before = set(recording.iterdir())
    assert main(["analyse", *words, *(["--out", str(tmp_path / "out")] if words else [])]) == 2
    out, err = capsys.readouterr()
    assert out == ""
    assert err.count("\n") == 1
    assert message in err
    assert not (tmp_path / "out").exists()
    assert set(recording.iterdir()) == before


@pytest.mark.parametrize(
    ("movie", "folder"),
    [("a/axon.tif", "a/axon.release"), ("axon.ome.tiff", "axon.release"), ("a/trials", "a/trials.release")],
)
def test_results_go_beside_the_movie(movie, folder):
    assert out_folder(None, movie=movie).as_posix() == folder
    assert out_folder("x/y", movie=movie).as_posix() == "x/y"
