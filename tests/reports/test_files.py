"""Arrays, JSON and the data package: what other programs read."""

import json
import shutil
from datetime import UTC, datetime
from pathlib import Path

import frictionless
import numpy as np
import pytest
import tifffile

from napari_boutonrelease.errors import OutputError
from napari_boutonrelease.reports import write_result
from napari_boutonrelease.reports.strict_json import json_ready, write_json


def test_traces_open_without_pickle(written, small_result):
    with np.load(written / "traces.npz", allow_pickle=False) as traces:
        assert set(traces) == {"time_s", "bouton", "f", "f0", "dff", "null_amplitude"}
        np.testing.assert_array_equal(traces["bouton"], [1, 2])
        np.testing.assert_array_equal(traces["time_s"], small_result.time_s)
        for name in ("f", "f0", "dff", "null_amplitude"):
            np.testing.assert_allclose(traces[name], getattr(small_result, name), rtol=1e-6)


def test_the_mean_image_is_there_as_it_was(written, small_result):
    np.testing.assert_allclose(tifffile.imread(written / "mean_image.tif"), small_result.mean_image, rtol=1e-6)


def test_footprints_carry_ids_weights_and_pixel_size(written, small_result):
    with tifffile.TiffFile(written / "footprints.tif") as file:
        label = file.asarray()
        resolution = file.pages[0].tags["XResolution"].value
    assert label.dtype == np.uint16
    np.testing.assert_array_equal(label, small_result.footprints.label)
    assert resolution[0] / resolution[1] == pytest.approx(1e4 / 0.1)  # pixels a cm at 0.1 µm
    weights = tifffile.imread(written / "footprint_weights.tif")
    assert weights.shape == (2, *label.shape)
    assert weights.dtype == np.float32
    for page, patch, y, x in zip(
        weights,
        small_result.footprints.weights,
        small_result.footprints.y0,
        small_result.footprints.x0,
        strict=True,
    ):
        np.testing.assert_allclose(page[y : y + 13, x : x + 13], patch, rtol=1e-6)
        assert np.count_nonzero(page) <= patch.size


def test_weights_beyond_the_image_are_cut(make_result_with_edge_bouton, tmp_path):
    result = make_result_with_edge_bouton
    folder = write_result(result, tmp_path / "edge", overwrite=False, figures=False)
    page = tifffile.imread(folder / "footprint_weights.tif")
    page = page if page.ndim == 2 else page[0]
    patch = result.footprints.weights[0]
    np.testing.assert_allclose(page[:8, :7], patch[5:, 6:], rtol=1e-6)
    assert np.count_nonzero(page) == np.count_nonzero(patch[5:, 6:])


@pytest.fixture
def make_result_with_edge_bouton(small_result):
    from dataclasses import replace
    from types import SimpleNamespace

    footprints = SimpleNamespace(
        label=small_result.footprints.label,
        weights=small_result.footprints.weights[:1],
        y0=np.array([-5]),
        x0=np.array([-6]),
    )
    return replace(small_result, footprints=footprints)


def test_json_files_are_strict(written):
    def refuse(name):
        raise AssertionError(f"{name} is not JSON")

    for path in written.glob("*.json"):
        json.loads(path.read_text(encoding="utf-8"), parse_constant=refuse)
    assert json.loads((written / "analysis.json").read_text(encoding="utf-8"))["format"] == 1
    assert json.loads((written / "summary.json").read_text(encoding="utf-8"))["recording"]["trials"] == 8


def test_values_without_a_json_form_become_null_or_are_refused(tmp_path):
    given = {
        "nan": float("nan"),
        "inf": np.float32(np.inf),
        "int": np.int64(3),
        "bool": np.bool_(True),
        "path": Path("a/b"),
        "array": np.array([1.0, np.nan]),
        "set": {2, 1},
        "time": datetime(2026, 3, 2, tzinfo=UTC),
        5: (1, None),
    }
    assert json_ready(given) == {
        "nan": None,
        "inf": None,
        "int": 3,
        "bool": True,
        "path": str(Path("a/b")),
        "array": [1.0, None],
        "set": [1, 2],
        "time": "2026-03-02T00:00:00+00:00",
        "5": [1, None],
    }
    with pytest.raises(OutputError, match="type object cannot be written as JSON"):
        write_json({"x": object()}, tmp_path / "x.json")


def errors_of(folder):
    report = frictionless.Package(str(folder / "datapackage.json")).validate()
    return [] if report.valid else [(task.name, error.type) for task in report.tasks for error in task.errors]


def test_the_data_package_is_valid(written):
    assert errors_of(written) == []


def test_the_data_package_of_a_large_result_is_valid(result, tmp_path):
    assert errors_of(write_result(result, tmp_path / "large", overwrite=False, figures=False)) == []


def test_the_data_package_lists_every_file_and_explains_every_column(written):
    package = json.loads((written / "datapackage.json").read_text(encoding="utf-8"))
    assert package["$schema"] == "https://datapackage.org/profiles/2.0/datapackage.json"
    assert package["created"] == "2026-03-02T10:15:00Z"
    present = {path.relative_to(written).as_posix() for path in written.rglob("*") if path.is_file()}
    assert {resource["path"] for resource in package["resources"]} == present - {"datapackage.json"}
    names = [resource["name"] for resource in package["resources"]]
    assert len(set(names)) == len(names)
    for resource in package["resources"]:
        assert resource["description"], resource["path"]
        for field in resource.get("schema", {}).get("fields", []):
            assert field["type"]
            assert field["description"]
    boutons = package["resources"][0]
    assert boutons["name"] == "boutons"
    assert boutons["schema"]["missingValues"] == [""]
    assert {field["name"]: field.get("unit") for field in boutons["schema"]["fields"]}["q"] == "dF/F"


@pytest.mark.parametrize(
    ("table", "column", "value", "error"),
    [
        ("boutons", "p_release", "1.7", "constraint-error"),
        ("boutons", "found_by", "magic", "constraint-error"),
        ("boutons", "flags", "no_such_flag", "constraint-error"),
        ("boutons", "trials", "NaN", "type-error"),
        ("pulses", "bouton", "77", "foreign-key"),
        ("drift", "time_s", "", "constraint-error"),
    ],
)
def test_a_corrupted_value_is_caught(written, tmp_path, table, column, value, error):
    folder = shutil.copytree(written, tmp_path / "copy")
    path = folder / f"{table}.csv"
    lines = path.read_text(encoding="utf-8").splitlines()
    cells = lines[1].split(",")
    cells[lines[0].split(",").index(column)] = value
    path.write_text("\n".join([lines[0], ",".join(cells), *lines[2:], ""]), encoding="utf-8")
    found = errors_of(folder)
    assert (table, error) in found


def test_a_file_that_changed_is_caught(written, tmp_path):
    folder = shutil.copytree(written, tmp_path / "copy")
    with (folder / "traces.npz").open("r+b") as file:
        file.seek(200)
        file.write(b"\0\1\2\3")
    assert ("traces.npz", "hash-count") in errors_of(folder)
