"""`simulate` writes what it says, the same from the same seed, and nothing where it must not."""

from __future__ import annotations

import pytest
import tifffile

from napari_boutonrelease import open_movie, read_protocol
from napari_boutonrelease.cli.main import main
from napari_boutonrelease.cli.simulate import PRESETS
from napari_boutonrelease.simulation import read_truth
from napari_boutonrelease.simulation.presets import PRESETS as RECIPES

SMALL = ("--trials", "2", "--n-boutons", "3", "--set", "width_px=96", "--set", "specks_off_axon=0")


def test_the_presets_offered_are_those_there_are():
    assert tuple(RECIPES) == PRESETS


def test_movie_protocol_and_truth_are_written_and_named(tmp_path, capsys):
    out = tmp_path / "axon.tif"
    assert main(["simulate", str(out), *SMALL, "--pulses", "1"]) == 0
    names = ["axon.tif", "axon.protocol.toml", "axon.truth.json"]
    assert capsys.readouterr().out.split() == [str(tmp_path / name) for name in names]
    assert sorted(path.name for path in tmp_path.iterdir()) == sorted(names)
    truth = read_truth(tmp_path / "axon.truth.json")
    assert len(truth.boutons) == 3
    assert truth.stimulus_s.shape == (2, 1)
    assert open_movie(out).shape == (truth.recipe.n_frames, truth.recipe.height_px, 96)
    assert read_protocol(tmp_path / "axon.protocol.toml").stimuli.trials == 2


def test_the_seed_decides_the_movie(tmp_path):
    for name, seed in (("a", "5"), ("b", "5"), ("c", "6")):
        assert main(["simulate", str(tmp_path / f"{name}.tif"), *SMALL, "--seed", seed]) == 0
    a, b, c = (tifffile.imread(tmp_path / f"{name}.tif") for name in "abc")
    assert (a == b).all()
    assert (a != c).any()


def test_a_file_a_trial_goes_into_a_folder(tmp_path):
    assert main(["simulate", str(tmp_path / "axon.tif"), *SMALL, "--file-per-trial"]) == 0
    assert sorted(path.name for path in (tmp_path / "axon").iterdir()) == ["trial_1.tif", "trial_2.tif"]
    assert len(open_movie(tmp_path / "axon").file_frames) == 2


@pytest.mark.parametrize(
    ("words", "message"),
    [
        (["--set", "nonsense=1"], "Unknown settings of a simulation: nonsense"),
        (["--set", "trials"], "--set trials: expected NAME=VALUE"),
        (["--set", "trials=many"], "A value of --set has the wrong kind"),
        (["--photons", "-3"], "photons must be greater than 0"),
    ],
)
def test_a_refused_setting_writes_nothing(tmp_path, capsys, words, message):
    assert main(["simulate", str(tmp_path / "axon.tif"), *words]) == 2
    assert message in capsys.readouterr().err
    assert not list(tmp_path.iterdir())


def test_existing_files_stay_unless_overwriting_is_asked_for(tmp_path, capsys):
    out = tmp_path / "axon.tif"
    out.write_bytes(b"mine")
    assert main(["simulate", str(out), *SMALL]) == 2
    assert "axon.tif exists already" in capsys.readouterr().err
    assert out.read_bytes() == b"mine"
    assert main(["simulate", str(out), *SMALL, "--overwrite"]) == 0
    assert open_movie(out).shape[0] > 2


def test_a_negative_seed_is_a_wrong_call(tmp_path, capsys):
    with pytest.raises(SystemExit, match="2"):
        main(["simulate", str(tmp_path / "axon.tif"), "--seed", "-1"])
    assert "argument --seed: must be a whole number of 0 or more (given -1)" in capsys.readouterr().err
