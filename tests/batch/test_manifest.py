"""A manifest is understood, or refused in a sentence that names row and column; results go where it says."""

from __future__ import annotations

import pytest

from napari_boutonrelease import InputError, Settings
from napari_boutonrelease.batch import read_manifest
from napari_boutonrelease.batch.recordings import plan_recordings

HEADER = "movie,protocol"
ROW = "day1/axon1.tif,day1/axon1.protocol.toml"
OTHER = "day1/axon2.tif,day1/axon2.protocol.toml"


@pytest.fixture(scope="module")
def home(movies):
    """The folder of movies, in which manifests are written."""
    return movies


def plan(manifest, *, under=None):
    return plan_recordings(read_manifest(manifest), settings=Settings(), report=True, under=under)


def test_cells_become_files_and_further_columns_are_carried(home, tools):
    path = tools.write_manifest(
        home, f'"cell, 1",{ROW},drug', "", f"2,{OTHER},", header="animal,movie,protocol,condition"
    )
    manifest = read_manifest(path)
    first, second = manifest.rows
    assert manifest.further == ("animal",)
    assert (first.further, first.condition) == (("cell, 1",), "drug")
    assert first.movie.read_bytes() == (home / "day1" / "axon1.tif").read_bytes()
    assert (second.number, second.condition, second.boutons, second.out) == (4, "", None, None)


def test_a_table_from_a_spreadsheet_is_read(home):
    path = home / "spreadsheet.csv"
    path.write_bytes(b"\xef\xbb\xbf" + f"{HEADER}, condition \r\n{ROW}, low calcium \r\n,,\r\n".encode())
    assert [row.condition for row in read_manifest(path).rows] == ["low calcium"]


@pytest.mark.parametrize(
    ("header", "rows", "message"),
    [
        ("movie,condition", [ROW], "row 1: there is no column protocol .found movie, condition.; add it"),
        ("movie;protocol", [], "row 1: there is no column movie .found movie;protocol.; separate columns by commas"),
        ("", [], "there is no column movie"),
        (f"{HEADER},movie", [], "row 1: the column movie comes twice"),
        (f"{HEADER},", [], "row 1: column 3 has no name"),
        (f"{HEADER},bouton_file,Axon", [], "row 1: the column Axon is unknown, but close to axon"),
        (f"{HEADER},conditions", [], "the column conditions is unknown, but close to condition"),
        (f"{HEADER},p_release", [], "the column p_release has the name of a column of the results"),
        (HEADER, [], "lists no recording"),
        (HEADER, [" , "], "lists no recording"),
        (HEADER, [f"{ROW},drug"], "row 2: there are 3 cells for 2 columns"),
        (HEADER, [ROW, "day1/axon1.tif"], "row 3, column protocol: the cell is empty"),
        (HEADER, [ROW, ROW.replace("axon1.tif", "axon9.tif")], "row 3, column movie: day1/axon9.tif does not exist"),
        (HEADER, ["day1/axon1.tif,day1"], "row 2, column protocol: day1 does not exist"),
        (f"{HEADER},boutons", [f"{ROW},b.csv"], "row 2, column boutons: b.csv does not exist"),
        (f"{HEADER},axon", ["", f"{ROW},a.csv"], "row 3, column axon: a.csv does not exist"),
    ],
)
def test_what_is_wrong_is_said_with_row_and_column(home, tools, header, rows, message):
    path = tools.write_manifest(home, *rows, header=header)
    with pytest.raises(InputError, match=message) as caught:
        read_manifest(path)
    assert str(caught.value).startswith(str(path))
    assert "\n" not in str(caught.value)


def test_a_manifest_that_is_not_there_or_no_text_is_refused(tmp_path):
    with pytest.raises(InputError, match=r"none\.csv: the manifest cannot be read"):
        read_manifest(tmp_path / "none.csv")
    (tmp_path / "bytes.csv").write_bytes(b"movie,protocol\n\xff\xfe,\n")
    with pytest.raises(InputError, match="not a CSV file in UTF-8"):
        read_manifest(tmp_path / "bytes.csv")


def test_results_go_beside_the_movies_or_below_the_folder_of_the_study(home, tools, tmp_path):
    path = tools.write_manifest(
        home, ROW, OTHER.replace("axon2.tif", "../day2/axon1.tif") + ",", f"{OTHER},named", header=f"{HEADER},out"
    )
    beside, below = plan(path), plan(path, under=tmp_path / "study")
    assert [one.name for one in beside] == ["day1/axon1", "day2/axon1", "named"] == [one.name for one in below]
    assert beside[0].folder == home / "day1" / "axon1.release"
    assert below[1].folder == tmp_path / "study" / "day2" / "axon1.release"
    assert beside[2].folder == below[2].folder == home / "named"


def test_a_movie_from_elsewhere_goes_below_the_study_by_its_name(home, tools, tmp_path):
    path = tools.write_manifest(tmp_path, f"{home}/day1/axon1.tif,{home}/day1/axon1.protocol.toml", header=HEADER)
    (one,) = plan(path, under=tmp_path / "study")
    assert (one.name, one.folder) == ("axon1", tmp_path / "study" / "axon1.release")


@pytest.mark.parametrize(
    ("rows", "message"),
    [
        ([f"{ROW},", f"{ROW},"], "row 3, column movie: .* as those of row 2 do"),
        ([f"{ROW},same", f"{OTHER},./same"], "row 3, column out: .* as those of row 2 do"),
        ([f"{ROW},all/one", f"{OTHER},all"], "row 2, column out: .* within those of row 3"),
    ],
)
def test_two_recordings_do_not_share_a_folder(home, tools, rows, message):
    path = tools.write_manifest(home, *rows, header=f"{HEADER},out")
    with pytest.raises(InputError, match=message):
        plan(path)
