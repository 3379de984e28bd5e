"""The NWB file is valid, reads back as what was written, and says what is not known."""

from __future__ import annotations

import json
import os
import sys
import warnings
from dataclasses import fields, replace
from datetime import UTC, datetime

import numpy as np
import pynwb
import pytest
from pynwb import NWBHDF5IO

from napari_boutonrelease.analysis.columns import TABLES
from napari_boutonrelease.cli.analyse import NWB_DETAILS
from napari_boutonrelease.cli.main import main
from napari_boutonrelease.errors import InputError, OutputError
from napari_boutonrelease.reports import NwbDetails, check_can_write_nwb, write_result
from napari_boutonrelease.reports.apart import write_result_apart
from napari_boutonrelease.reports.nwb import write_nwb

DETAILS = NwbDetails(
    session_start="2025-03-01T14:30+01:00",
    subject_id="rat 12",
    species="Rattus norvegicus",
    sex="F",
    age="P3W/P4W",
    reporter="a glutamate reporter",
    location="CA1",
    experimenter="Weber, Ida",
    institution="Institute of Physiology",
)


@pytest.fixture(scope="module")
def path(result, tmp_path_factory):
    """File of nine boutons, with everything given."""
    path = tmp_path_factory.mktemp("nwb") / "recording.nwb"
    write_nwb(result, path, details=DETAILS)
    return path


@pytest.fixture(scope="module")
def nwb(path):
    with NWBHDF5IO(path, "r") as io:
        yield io.read()


def inspected(path):
    """Messages of the inspector, as (importance, check)."""
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")  # its own
        import nwbinspector

        return {(found.importance.name, found.check_function_name) for found in nwbinspector.inspect_nwbfile(path)}


def read(result, path, **details):
    """Write, and read what stands at the top."""
    write_nwb(result, path, details=NwbDetails(**details))
    with NWBHDF5IO(path, "r") as io:
        file = io.read()
        return file.session_start_time, file.session_description, file.experiment_description, file.subject.fields


def test_a_file_with_every_detail_has_no_fault(path):
    assert pynwb.validate(path=path) == []
    assert inspected(path) == set()


def test_a_file_without_details_lacks_the_species_alone(result, tmp_path):
    _, _, experiment, subject = read(result, tmp_path / "recording.nwb")
    assert pynwb.validate(path=tmp_path / "recording.nwb") == []
    assert inspected(tmp_path / "recording.nwb") == {
        ("BEST_PRACTICE_VIOLATION", "check_subject_species_exists"),
        ("BEST_PRACTICE_SUGGESTION", "check_experimenter_exists"),
        ("BEST_PRACTICE_SUGGESTION", "check_institution"),
    }
    assert (subject["subject_id"], subject["sex"], subject["age"]) == ("unknown", "U", "P0D/")
    assert "subject_id 'unknown', sex 'U', age 'P0D/' stand for what was not given" in subject["description"]
    assert "Not given for this file: subject id, species, sex, age, reporter, location" in experiment


def test_details_are_where_the_standard_wants_them(nwb):
    plane = nwb.imaging_planes["ImagingPlane"]
    assert nwb.session_start_time == datetime(2025, 3, 1, 13, 30, tzinfo=UTC)
    assert (nwb.subject.subject_id, nwb.subject.species, nwb.subject.sex) == ("rat 12", "Rattus norvegicus", "F")
    assert nwb.subject.age == "P3W/P4W"
    assert (plane.indicator, plane.location) == ("a glutamate reporter", "CA1")
    assert plane.imaging_rate == pytest.approx(100.0)
    assert np.asarray(plane.grid_spacing) == pytest.approx([0.1, 0.1])
    assert (nwb.experimenter, nwb.institution) == (("Weber, Ida",), "Institute of Physiology")
    assert "Not given" not in nwb.experiment_description


def test_traces_read_back(nwb, result):
    module = nwb.processing["ophys"]
    for group, name in (("Fluorescence", "f"), ("Fluorescence", "f0"), ("DfOverF", "dff")):
        series = module[group][name]
        expected = getattr(result, name).T
        assert np.isnan(expected).any()
        np.testing.assert_array_equal(series.data[:], expected.astype(np.float32))
        np.testing.assert_allclose(series.starting_time + np.arange(len(expected)) / series.rate, result.time_s)
        rois = series.rois[:]
        assert list(rois.index) == list(result.boutons["bouton"])


def test_frames_at_odd_times_keep_their_times(small_result, tmp_path):
    odd = replace(small_result, time_s=small_result.time_s + np.where(small_result.time_s > 3, 0.5, 0.0))
    write_nwb(odd, tmp_path / "odd.nwb", details=DETAILS)
    with NWBHDF5IO(tmp_path / "odd.nwb", "r") as io:
        np.testing.assert_array_equal(io.read().processing["ophys"]["DfOverF"]["dff"].timestamps[:], odd.time_s)


def test_masks_read_back(nwb, result):
    segmentation = nwb.processing["ophys"]["ImageSegmentation"]
    prints = result.footprints
    assert list(segmentation["Footprints"].id[:]) == list(result.boutons["bouton"])
    for i, bouton in enumerate(result.boutons["bouton"]):
        mask = segmentation["Footprints"]["pixel_mask"][i]
        rows, columns = mask["y"].astype(int) - prints.y0[i], mask["x"].astype(int) - prints.x0[i]
        patch = np.zeros(prints.weights[i].shape)
        patch[rows, columns] = mask["weight"]
        np.testing.assert_allclose(patch, prints.weights[i], rtol=1e-6)
        core = segmentation["Cores"]["pixel_mask"][i]
        assert set(zip(core["y"], core["x"], strict=True)) == set(zip(*np.nonzero(prints.label == bouton), strict=True))
        assert (core["weight"] == 1).all()


@pytest.mark.parametrize("name", [name for name in TABLES if name != "trials"])
def test_tables_read_back_with_units_and_meanings(nwb, result, name):
    frame = getattr(result, name)
    module = nwb.processing["ophys"]
    if not len(frame):
        assert name not in module.data_interfaces
        return
    known = [
        column for column in TABLES[name].columns if (frame[column.name].notna() & (frame[column.name] != "")).any()
    ]
    table = module[name]
    assert table.colnames == tuple(column.name for column in known)
    for column in known:
        found, expected = table[column.name].data[:], frame[column.name]
        if column.type == "string":
            assert list(found) == expected.fillna("").tolist()
        else:
            np.testing.assert_array_equal(np.asarray(found, dtype=float), expected.to_numpy(float, na_value=np.nan))
        description = table[column.name].description
        assert description[1:].startswith(column.meaning[1:])
        assert not column.unit or description.endswith(f"({column.unit})")


def test_whole_numbers_and_yes_or_no_keep_their_type(nwb):
    module = nwb.processing["ophys"]
    assert module["responses"]["trial"].data.dtype.kind == "i"
    assert module["responses"]["used"].data.dtype == bool
    assert module["responses"]["called"].data.dtype.kind == "f"  # missing in some rows


def test_stimuli_and_trials_read_back(nwb, result):
    stimuli, trials = nwb.intervals["stimuli"], nwb.trials
    np.testing.assert_allclose(stimuli["start_time"][:], result.stimulus_s.ravel())
    np.testing.assert_array_equal(stimuli["pulse"][:], np.tile([1, 2], 60))
    np.testing.assert_array_equal(stimuli["used"][:], result.trials["used"] == 1)
    np.testing.assert_allclose(stimuli["released"][:], result.trials["released"])
    np.testing.assert_allclose(trials["start_time"][:], result.stimulus_s[:, 0])
    np.testing.assert_allclose(trials["stop_time"][:], [*result.stimulus_s[1:, 0], 60.0])
    left_out = np.arange(60) == 16
    np.testing.assert_array_equal(trials["used"][:], ~left_out)
    np.testing.assert_array_equal(trials["pulses"][:], 2)
    np.testing.assert_array_equal(trials["pulses_used"][:], np.where(left_out, 0, 2))
    assert list(trials["reason"][:]) == ["no bouton measured" if out else "" for out in left_out]


def test_trials_out_of_order_are_put_in_order(small_result, tmp_path):
    table = small_result.trials
    late = table.assign(stimulus_s=table["stimulus_s"].where(table["trial"] != 1, table["stimulus_s"] + 7.3))
    write_nwb(replace(small_result, trials=late), tmp_path / "late.nwb", details=DETAILS)
    with NWBHDF5IO(tmp_path / "late.nwb", "r") as io:
        file = io.read()
        assert list(file.trials["trial"][:]) == [2, 3, 4, 5, 6, 7, 8, 1]
        for intervals in (file.trials, file.intervals["stimuli"]):
            assert (np.diff(intervals["start_time"][:]) > 0).all()
            assert (intervals["stop_time"][:] > intervals["start_time"][:]).all()


def test_image_settings_and_cautions_read_back(nwb, result):
    image = nwb.processing["ophys"]["images"]["mean_image"]
    np.testing.assert_array_equal(image.data[:].T, result.mean_image.astype(np.float32))
    assert image.resolution == pytest.approx(1e5)  # pixels of 0.1 µm per cm
    notes = json.loads(nwb.notes)
    assert notes["analysis"] == result.provenance
    assert notes["summary"]["recording"]["trials"] == 60
    assert all(caution in nwb.experiment_description for caution in result.cautions)


def test_what_is_not_known_is_said_about_the_start(small_result, tmp_path):
    movie = tmp_path / "axon.tif"
    movie.write_bytes(b"any")
    os.utime(movie, (1.7e9, 1.7e9))
    of_file = replace(small_result, provenance={"movie": {"files": [str(movie)]}})
    start, words, *_ = read(of_file, tmp_path / "file.nwb")
    assert start.timestamp() == 1.7e9
    assert "when the movie's file was last changed, since it holds no date of the recording" in words
    start, words, *_ = read(small_result, tmp_path / "array.nwb")
    assert start == datetime(2026, 3, 2, 10, 15, tzinfo=UTC)
    assert "when the movie was analysed" in words
    start, words, *_ = read(of_file, tmp_path / "given.nwb", session_start="2024-05-06T07:08")
    assert start == datetime(2024, 5, 6, 7, 8).astimezone()
    assert "as given for this file" in words


@pytest.mark.parametrize("kind", ["empty_result", "blank_result", "train_result"])
def test_degenerate_results_and_trains_are_valid(kind, tmp_path, request):
    write_nwb(request.getfixturevalue(kind), tmp_path / "recording.nwb", details=DETAILS)
    assert pynwb.validate(path=tmp_path / "recording.nwb") == []
    assert not [name for name, _ in inspected(tmp_path / "recording.nwb") if name != "BEST_PRACTICE_SUGGESTION"]


def test_boutons_of_which_nothing_can_be_seen_have_empty_masks(small_result, tmp_path):
    unseen = small_result.footprints
    weights = tuple(np.full_like(patch, np.nan) for patch in unseen.weights)
    prints = type(unseen)(**{**vars(unseen), "weights": weights, "label": np.zeros_like(unseen.label)})
    write_nwb(replace(small_result, footprints=prints), tmp_path / "unseen.nwb", details=DETAILS)
    with NWBHDF5IO(tmp_path / "unseen.nwb", "r") as io:
        masks = io.read().processing["ophys"]["ImageSegmentation"]["Footprints"]["pixel_mask"]
        assert [len(masks[i]) for i in range(2)] == [0, 0]


def test_it_belongs_to_the_folder_also_from_another_process(small_result, tmp_path):
    here = write_result(small_result, tmp_path / "here", overwrite=False, figures=False, nwb=DETAILS)
    there = write_result_apart(small_result, tmp_path / "there", overwrite=False, figures=False, nwb=DETAILS)
    for folder in (here, there):
        listed = json.loads((folder / "datapackage.json").read_text(encoding="utf-8"))["resources"]
        assert "recording.nwb" in {resource["path"] for resource in listed}
        with NWBHDF5IO(folder / "recording.nwb", "r") as io:
            assert io.read().subject.subject_id == "rat 12"
    write_result(small_result, here, overwrite=True, figures=False)
    assert not (here / "recording.nwb").exists()


@pytest.mark.parametrize(
    ("detail", "value", "words"),
    [
        ("session_start", "yesterday", r"as in 2025-03-01T14:30 \(given 'yesterday'\)"),
        ("session_start", "2999-01-01", "must not lie in the future"),
        ("subject_id", "a/b", "without slashes"),
        ("species", "mouse", "the Latin name of two words"),
        ("sex", "female", "M, F, O"),
        ("age", "30 days", "P30D is 30 days"),
        ("age", "P", "P30D is 30 days"),
        ("experimenter", "Ida Weber", "Last name, First name"),
    ],
)
def test_details_of_a_wrong_form_are_refused(detail, value, words):
    with pytest.raises(InputError, match=words):
        NwbDetails(**{detail: value})


def test_the_command_line_offers_every_detail():
    assert list(NWB_DETAILS) == [field.name for field in fields(NwbDetails)]


def test_without_pynwb_nothing_is_begun(small_result, tmp_path, monkeypatch, capsys):
    monkeypatch.setitem(sys.modules, "pynwb", None)
    for words in (["--nwb"], ["--nwb-sex", "F"]):
        assert main(["analyse", "none.tif", "--protocol", "none.toml", *words]) == 2
        err = capsys.readouterr().err
        assert "needs the package pynwb, which is not installed" in err
        assert err.count("\n") == 1
    with pytest.raises(OutputError, match="napari-boutonrelease\\[nwb\\]"):
        check_can_write_nwb()
    with pytest.raises(OutputError, match="pynwb"):
        write_result(small_result, tmp_path / "out", overwrite=False, nwb=DETAILS)
    assert list(tmp_path.iterdir()) == []


def test_a_wrong_detail_is_refused_before_the_movie_is_read(capsys):
    assert main(["analyse", "none.tif", "--protocol", "none.toml", "--nwb-species", "rat"]) == 2
    assert "nwb species must be the Latin name" in capsys.readouterr().err
