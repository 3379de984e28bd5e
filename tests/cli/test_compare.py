"""`compare` from two analysed movies to a folder, and what it refuses."""

import json
import shutil

import frictionless
import pandas as pd
import pytest
import tifffile

import napari_boutonrelease as br
from napari_boutonrelease.cli.compare import read_pairs
from napari_boutonrelease.cli.main import main
from napari_boutonrelease.errors import InputError

QUICK = ("--quanta-bootstrap", "0", "--pairs-bootstrap", "100", "--n-max", "4")


@pytest.fixture(scope="module")
def analysed(tmp_path_factory):
    """Folders of results of one axon before and after its release probability rose."""
    folder = tmp_path_factory.mktemp("compare")
    for name, seed in (("before", "1"), ("after", "2")):
        words = ["--trials", "25", "--set", "width_px=96", "--set", "specks_off_axon=0", "--set", "n_boutons=3"]
        assert main(["simulate", str(folder / f"{name}.tif"), "--seed", seed, *words]) == 0
        movie, protocol = folder / f"{name}.tif", folder / f"{name}.protocol.toml"
        assert main(["analyse", str(movie), "--protocol", str(protocol), *QUICK]) == 0
    return folder / "before.release", folder / "after.release"


@pytest.fixture(scope="module")
def compared(analysed):
    """The first compared with itself under another name: nothing may have changed."""
    before = analysed[0]
    out = before.with_name("same.comparison")
    words = ["--names", "one", "again", "--out", str(out), "--bootstrap", "200"]
    assert main(["compare", str(before), str(before / "analysis.json"), *words]) == 0
    return out


def test_it_writes_tables_that_the_data_package_describes(compared):
    package = frictionless.Package(str(compared / "datapackage.json"))
    report = package.validate()
    assert report.valid, [error.message for task in report.tasks for error in task.errors]
    assert {"joint", "conditions", "changes", "variance_mean", "unmatched"} <= set(package.resource_names)
    assert (compared / "report.pdf").stat().st_size > 10_000
    for stem in ("matches", "release", "changes", "sites", "inverse_cv2", "variance_mean"):
        assert (compared / "figures" / f"{stem}.svg").exists()


def test_the_same_recording_twice_shows_no_change(compared):
    changes = pd.read_csv(compared / "changes.csv")
    assert len(changes) > 0
    assert (changes["p_release_change"] == 0).all()
    assert (changes["p_changed_p"].dropna() > 0.9).all()
    summary = json.loads((compared / "comparison.json").read_text(encoding="utf-8"))["summary"]
    assert summary["boutons_in_all"] == summary["recordings"][0]["boutons"]
    assert summary["recordings"][1]["shift_y_px"] == 0


def test_another_axon_is_refused_with_a_way_out(analysed, tmp_path, capsys):
    out = tmp_path / "out"
    assert main(["compare", *map(str, analysed), "--out", str(out)]) == 2
    said = capsys.readouterr().err
    assert "mean images of before and after do not match" in said
    assert "give the pairs of boutons in a table" in said
    assert not out.exists()


def test_pairs_made_by_eye_stand_in_for_the_images(analysed, tmp_path, capsys):
    pairs = tmp_path / "pairs.csv"
    pairs.write_text("before,after\n1,2\n2,\n", encoding="utf-8")
    words = ["--pairs", str(pairs), "--out", str(tmp_path / "out"), "--bootstrap", "100"]
    assert main(["compare", *map(str, analysed), *words]) == 0
    assert "1 of" in capsys.readouterr().out
    conditions = pd.read_csv(tmp_path / "out" / "conditions.csv")
    matched = conditions[conditions["recording"] == "after"]
    assert matched[["bouton", "bouton_there"]].to_numpy().tolist() == [[1, 2]]


@pytest.mark.parametrize(
    ("content", "message"),
    [
        ("a,b\n1\n", r"row 2: 1 cells where 2 recordings are compared"),
        ("a,b\n1,x\n", r"row 2: 'x' is not the id of a bouton"),
        ("a,b\n", r"holds no pair of boutons below its header"),
    ],
)
def test_a_table_of_pairs_that_is_none_is_refused(tmp_path, content, message):
    path = tmp_path / "pairs.csv"
    path.write_text(content, encoding="utf-8")
    with pytest.raises(InputError, match=message):
        read_pairs(str(path), n_recordings=2)


@pytest.mark.parametrize(
    ("words", "message"),
    [
        ([], "two or more ANALYSIS folders (given 0)"),
        (["--names", "a", "b", "c"], "--names gives 3 names for 2 recordings"),
        (["--n-max", "0"], "--n-max must be greater than or equal to 1 (given 0)"),
    ],
)
def test_a_wrong_call_says_what_is_wrong(analysed, words, message, capsys):
    folders = map(str, analysed) if words else ()
    assert main(["compare", *folders, *words]) == 2
    assert message in capsys.readouterr().err


def test_the_function_gives_what_the_command_writes(compared, analysed, tmp_path):
    comparison = br.compare([analysed[0]] * 2, names=["one", "again"], settings=br.CompareSettings(bootstrap=200))
    comparison.write(tmp_path / "out")
    for name in ("joint", "conditions", "changes", "variance_mean", "unmatched"):
        one, other = ((folder / f"{name}.csv").read_bytes() for folder in (compared, tmp_path / "out"))
        assert one == other
    with pytest.raises(InputError, match=r"names has 1 names for 2 recordings"):
        br.compare(analysed, names=["one"])


def test_what_is_no_result_or_lacks_a_file_is_refused(analysed, tmp_path, capsys):
    assert main(["compare", str(analysed[0]), str(tmp_path)]) == 2
    assert "holds no results of an analysis" in capsys.readouterr().err
    for name, message in (
        ("mean_image.tif", "repeat the analysis with --from"),
        ("traces.npz", "repeat the analysis with --from"),
        ("summary.json", "analyse the movie again"),
        ("boutons.csv", "cannot be read as the table boutons"),
    ):
        broken = tmp_path / f"no_{name}.release"
        shutil.copytree(analysed[0], broken)
        (broken / name).unlink()
        assert main(["compare", str(analysed[0]), str(broken)]) == 2
        assert message in capsys.readouterr().err


def test_results_of_a_version_with_fewer_columns_can_be_compared(analysed, tmp_path):
    older = tmp_path / "older.release"
    shutil.copytree(analysed[0], older)
    table = pd.read_csv(older / "boutons.csv")
    table.drop(columns=["spontaneous_per_min"]).to_csv(older / "boutons.csv", index=False)
    words = ["--out", str(tmp_path / "out"), "--bootstrap", "100"]
    assert main(["compare", str(analysed[0]), str(older), *words]) == 0


def test_the_mean_image_has_the_movies_frame(analysed):
    image = tifffile.imread(analysed[0] / "mean_image.tif")
    assert image.shape == tifffile.imread(analysed[0] / "footprints.tif").shape


def test_a_comparison_is_not_replaced_unasked(compared, analysed, capsys):
    words = [str(analysed[0]), str(analysed[0]), "--names", "a", "b", "--out", str(compared)]
    assert main(["compare", *words]) == 2
    assert "already holds results" in capsys.readouterr().err
