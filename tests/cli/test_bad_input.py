"""What cannot be analysed is refused in one sentence with exit code 2, and leaves the disk as it was."""

from __future__ import annotations

import json
import os
from pathlib import Path

import numpy as np
import pytest
import tifffile

from napari_boutonrelease.cli.main import main

FRAMES = np.random.default_rng(1).poisson(50, (60, 24, 40)).astype(np.uint16)
PROTOCOL = """\
[recording]
frame_interval_s = 0.01
pixel_size_um = 0.2

[stimuli]
first_s = 0.1
trials = 2
trial_interval_s = 0.2
"""
OF_TABLE = "[recording]\nframe_interval_s = 0.01\n\n[stimuli]\ntimes = 'pulses.csv'\n"
PNG = b"\x89PNG\r\n\x1a\n" + bytes(200)


def save_tiff(path, frames=FRAMES, **options):
    tifffile.imwrite(path, frames, **{"photometric": "minisblack", "metadata": {"axes": "TYX"}, **options})


def contents(folder):
    """Everything in a folder, by path."""
    return {path: path.read_bytes() if path.is_file() else None for path in folder.rglob("*")}


@pytest.fixture
def recording(tmp_path):
    """Folder of a recording that could be analysed: axon.tif and axon.toml."""
    save_tiff(tmp_path / "axon.tif")
    (tmp_path / "axon.toml").write_text(PROTOCOL, encoding="utf-8")
    return tmp_path


@pytest.fixture
def refused(recording, capsys):
    """Analyse the recording, and expect one sentence that holds the words, exit code 2 and an untouched folder."""

    def check(words, *options, movie="axon.tif"):
        before = contents(recording)
        call = ["analyse", recording / movie, "--protocol", recording / "axon.toml", *options]
        assert main([str(word) for word in call]) == 2
        out, err = capsys.readouterr()
        assert out == ""
        assert err.startswith("boutonrelease: error: ")
        assert err.count("\n") == 1
        missing = [word for word in words if word not in err]
        assert not missing, err
        assert contents(recording) == before

    return check


def test_the_same_recording_without_a_fault_is_analysed(recording, capsys):
    call = ["analyse", recording / "axon.tif", "--protocol", recording / "axon.toml"]
    assert main([str(word) for word in call]) == 0
    assert (recording / "axon.release" / "analysis.json").exists()
    assert "results:" in capsys.readouterr().out


# --- the movie


def stack(axes, **options):
    planes = FRAMES.reshape(20, 3, 24, 40)
    return lambda path: save_tiff(path, planes, **{"metadata": {"axes": axes}, **options})


def cut_short(path):
    whole = path.read_bytes()
    path.write_bytes(whole[: len(whole) // 2])


def with_damaged_frame(path):
    """Overwrite the packed pixels of one frame in the middle."""
    save_tiff(path, compression="deflate")
    with tifffile.TiffFile(path) as tiff:
        offset, count = tiff.pages[30].dataoffsets[0], tiff.pages[30].databytecounts[0]
    whole = bytearray(path.read_bytes())
    whole[offset + 2 : offset + count] = bytes(count - 2)
    path.write_bytes(whole)


MOVIES = {
    "text": (lambda path: path.write_text("no movie", encoding="utf-8"), ["axon.tif is not a TIFF", "export"]),
    "a PNG": (lambda path: path.write_bytes(PNG), ["axon.tif is not a TIFF", "export"]),
    "an empty file": (lambda path: path.write_bytes(b""), ["axon.tif is empty", "again"]),
    "a colour movie": (
        lambda path: tifffile.imwrite(path, np.zeros((9, 24, 40, 3), np.uint8), photometric="rgb"),
        ["axon.tif has 3 samples per pixel", "one channel"],
    ),
    "a truncated file": (cut_short, ["axon.tif is cut short", "again"]),
    "a damaged frame": (with_damaged_frame, ["axon.tif", "again"]),
    "depth": (stack("TZYX", imagej=True), ["axon.tif has the axes TZYX", "Save one depth"]),
    "unknown axes": (stack("QRYX"), ["axon.tif has the axes QRYX", "time"]),
    "channels to choose from": (stack("TCYX", imagej=True), ["axon.tif holds 3 channels", "--channel 0 or 1 or 2"]),
    "a single image": (lambda path: save_tiff(path, FRAMES[:1]), ["axon holds a single image", "2 frames"]),
    "complex numbers": (lambda path: save_tiff(path, FRAMES.astype(np.complex64)), ["complex64", "e.g. uint16"]),
    "nothing": (Path.unlink, ["axon.tif does not exist", "path"]),
}


@pytest.mark.parametrize("name", MOVIES)
def test_a_file_that_is_no_movie_is_refused(recording, refused, name):
    spoil, words = MOVIES[name]
    spoil(recording / "axon.tif")
    refused(words)


@pytest.mark.parametrize(("channel", "held"), [("3", "0, 1, 2"), ("7", "0, 1, 2")])
def test_a_channel_that_is_not_there_is_refused(recording, refused, channel, held):
    stack("TCYX", imagej=True)(recording / "axon.tif")
    refused([f"axon.tif has no channel {channel}", f"holds {held}"], "--channel", channel)


FOLDERS = {
    "no TIFF": ({"notes.txt": None}, ["trials holds no TIFF file", "one file a trial"]),
    "trials of different size": (
        {"trial_1.tif": FRAMES[:30], "trial_2.tif": np.zeros((30, 24, 41), np.uint16)},
        ["trial_2.tif differs from trial_1.tif", "24 x 41 pixels instead of 24 x 40", "leave it out"],
    ),
    "trials of different type": (
        {"trial_1.tif": FRAMES[:30], "trial_2.tif": np.zeros((30, 24, 40), np.uint8)},
        ["trial_2.tif differs from trial_1.tif", "uint8 pixels instead of uint16"],
    ),
    "more files than trials": (
        {f"trial_{k}.tif": FRAMES[:30] for k in (1, 2, 3)},
        ["trials is 3 files", "the protocol has 2 trials", "set trials to 3"],
    ),
    "a trial that ends before its stimulus": (
        {"trial_1.tif": FRAMES[:30], "trial_2.tif": FRAMES[:5]},
        ["Trial 2 has a stimulus at 0.1 s but its file trial_2.tif ends at 0.05 s", "check"],
    ),
}


@pytest.mark.parametrize("name", FOLDERS)
def test_a_folder_that_holds_no_trials_is_refused(recording, refused, name):
    files, words = FOLDERS[name]
    (recording / "trials").mkdir()
    for file, frames in files.items():
        path = recording / "trials" / file
        path.write_text("notes", encoding="utf-8") if frames is None else save_tiff(path, frames)
    refused(words, movie="trials")


# --- the protocol


def changed(old, new):
    assert old in PROTOCOL
    return PROTOCOL.replace(old, new)


PROTOCOLS = {
    "frame interval nowhere": (
        changed("frame_interval_s = 0.01\n", ""),
        ["frame interval of axon is stated neither", "add frame_interval_s"],
    ),
    "stimuli after the end": (
        changed("trials = 2", "trials = 9"),
        ["9 stimuli but the movie ends after 3", "check frame_interval_s or trials"],
    ),
    "first stimulus after the end": (changed("first_s = 0.1", "first_s = 100"), ["ends after 0", "check"]),
    "negative frame interval": (
        changed("frame_interval_s = 0.01", "frame_interval_s = -0.01"),
        ["axon.toml: [recording] frame_interval_s must be greater than 0 (given -0.01)"],
    ),
    "frame interval of zero": (
        changed("frame_interval_s = 0.01", "frame_interval_s = 0"),
        ["axon.toml: [recording] frame_interval_s must be greater than 0 (given 0)"],
    ),
    "negative trial interval": (
        changed("trial_interval_s = 0.2", "trial_interval_s = -0.2"),
        ["axon.toml: [stimuli] trial_interval_s must be greater than 0 (given -0.2)"],
    ),
    "negative first stimulus": (
        changed("first_s = 0.1", "first_s = -0.1"),
        ["axon.toml: [stimuli] first_s must be 0 or more (given -0.1)"],
    ),
    "no trials": (changed("trials = 2", "trials = 0"), ["axon.toml: [stimuli] trials must be 1 or more (given 0)"]),
    "misspelt key": (changed("first_s", "frist_s"), ["axon.toml: unknown key in [stimuli]: frist_s", "first_s?"]),
    "other unit": (changed("pixel_size_um", "pixel_size_nm"), ["[recording]: pixel_size_nm", "pixel_size_um?"]),
    "unknown section": (changed("[stimuli]", "[stimulus]"), ["unknown section: stimulus", "stimuli?"]),
    "a word for a number": (
        changed("first_s = 0.1", 'first_s = "early"'),
        ["axon.toml: [stimuli] first_s must be a number", 'given "early"'],
    ),
    "pulses without interval": (
        changed("trials = 2", "trials = 2\npulses = 2"),
        ["axon.toml: [stimuli] pulse_interval_s is missing"],
    ),
    "pulses that reach into the next trial": (
        changed("trials = 2", "trials = 2\npulses = 5\npulse_interval_s = 0.1"),
        ["axon.toml: [stimuli] the 5 pulses of a trial last 0.4 s", "check"],
    ),
    "exposure longer than a frame": (
        changed("pixel_size_um", "exposure_s = 0.02\npixel_size_um"),
        ["[recording] exposure_s = 0.02 is longer than the frame interval", "check"],
    ),
    "rows slower than frames": (
        changed("pixel_size_um", "row_time_s = 0.02\npixel_size_um"),
        ["[recording] row_time_s = 0.02", "longer than a frame", "check"],
    ),
    "no TOML": ("interval: 10 ms\n", ["axon.toml is not valid TOML", "line 1"]),
    "nothing": ("", ["axon.toml: the section [stimuli] is missing or empty", "give first_s"]),
}


@pytest.mark.parametrize("name", PROTOCOLS)
def test_a_protocol_that_does_not_fit_is_refused(recording, refused, name):
    text, words = PROTOCOLS[name]
    (recording / "axon.toml").write_text(text, encoding="utf-8")
    refused(words)


def test_a_protocol_that_is_not_there_is_refused(recording, refused):
    (recording / "axon.toml").unlink()
    refused(["axon.toml cannot be opened", "check the protocol's path"])


TABLES = {
    "missing file": (None, ["axon.toml: [stimuli] times", "pulses.csv cannot be opened", "give its path"]),
    "missing column": ("trial,time_s\n1,0.1\n", ["pulses.csv has no column pulse", "trial,pulse,time_s"]),
    "other separators": ("trial;pulse;time_s\n1;1;0,1\n", ["pulses.csv has no column trial", "commas"]),
    "word for a number": (
        "trial,pulse,time_s\n1,1,0.1\n2,1,soon\n",
        ["pulses.csv, line 3, column time_s: 'soon' is not a number"],
    ),
    "empty cell": ("trial,pulse,time_s\n1,1,0.1\n2,1,\n", ["pulses.csv, line 3, column time_s is empty"]),
    "negative time": ("trial,pulse,time_s\n1,1,-0.1\n", ["pulses.csv, line 2, column time_s: must be 0 or more"]),
    "pulse twice": ("trial,pulse,time_s\n1,1,0.1\n1,1,0.2\n", ["pulses.csv, line 3", "already on line 2", "keep one"]),
    "trial left out": ("trial,pulse,time_s\n1,1,0.1\n3,1,0.2\n", ["pulses.csv has no pulse of trial 2", "number"]),
    "after the end": ("trial,pulse,time_s\n1,1,0.1\n2,1,9\n", ["2 stimuli but the movie ends after 1", "times"]),
    "no row": ("trial,pulse,time_s\n", ["pulses.csv holds no pulse", "give a row"]),
}


@pytest.mark.parametrize("name", TABLES)
def test_a_table_of_pulses_that_is_wrong_is_refused_by_its_row(recording, refused, name):
    text, words = TABLES[name]
    (recording / "axon.toml").write_text(OF_TABLE, encoding="utf-8")
    if text is not None:
        (recording / "pulses.csv").write_text(text, encoding="utf-8")
    refused(words)


# --- places


PLACES = {
    "outside the image": ("y_px,x_px\n5,5\n30,5\n", ["places.csv, row 3", "y = 30, x = 5 px", "24 x 40", "Check"]),
    "a word for a number": ("y_px,x_px\n5,5\nfive,5\n", ["places.csv, row 3, column y_px", "given 'five'"]),
    "other columns": ("y,x\n5,5\n", ["places.csv: columns y_px and x_px", "the header has y, x"]),
    "no row": ("y_px,x_px\n", ["places.csv: the table holds no bouton", "one row a bouton"]),
    "an id twice": ("bouton,y_px,x_px\n1,5,5\n1,9,9\n", ["places.csv, row 3, column bouton", "row 2"]),
    "a place twice": ("y_px,x_px\n5,5\n9,9\n5.1,5\n", ["places.csv, row 4", "0.1 px from that of row 2", "leave"]),
}


@pytest.mark.parametrize("name", PLACES)
def test_positions_that_are_wrong_are_refused_by_their_row(recording, refused, name):
    text, words = PLACES[name]
    (recording / "places.csv").write_text(text, encoding="utf-8")
    refused(words, "--boutons", recording / "places.csv")


def test_positions_in_um_need_a_pixel_size(recording, refused):
    (recording / "axon.toml").write_text(changed("pixel_size_um = 0.2\n", ""), encoding="utf-8")
    (recording / "places.csv").write_text("y_um,x_um\n1,1\n", encoding="utf-8")
    refused(["places.csv", "pixel size is not known", "Add pixel_size_um"], "--boutons", recording / "places.csv")


LABELS = {
    "another size": (np.ones((24, 41), np.uint8), ["label.tif", "24 x 41", "the movie is 24 x 40", "draw"]),
    "several images": (np.ones((2, 24, 40), np.uint8), ["label.tif", "2 x 24 x 40", "draw"]),
    "no label": (np.zeros((24, 40), np.uint8), ["label.tif", "holds no bouton"]),
    "fractions": (np.full((24, 40), 0.5, np.float32), ["label.tif", "whole numbers"]),
    "no numbers": (np.full((24, 40), np.nan, np.float32), ["label.tif", "whole numbers"]),
}


@pytest.mark.parametrize("name", LABELS)
def test_a_label_image_that_does_not_fit_is_refused(recording, refused, name):
    label, words = LABELS[name]
    tifffile.imwrite(recording / "label.tif", label, photometric="minisblack")
    refused(words, "--boutons", recording / "label.tif")


@pytest.mark.parametrize(
    ("option", "file", "text", "words"),
    [
        ("--boutons", "places.xlsx", "zip", ["places.xlsx", "ends in .csv", ".tif"]),
        ("--boutons", "label.tif", "text", ["label.tif is not a TIFF image", "save the labels as TIFF"]),
        ("--boutons", "none.csv", None, ["none.csv: there is no such file", "give a CSV"]),
        ("--axon", "none.csv", None, ["none.csv: there is no such file", "give a CSV"]),
        ("--axon", "path.csv", "y_px,x_px\n5,5\n", ["path.csv", "two different vertices"]),
        ("--axon", "path.csv", "y_px,x_px\n5,5\nhere,9\n", ["path.csv, row 3, column y_px", "given 'here'"]),
        ("--settings", "none.toml", None, ["none.toml: the settings cannot be read", "check the path"]),
        (
            "--settings",
            "own.toml",
            "[detection]\nbouton_mm = 1\n",
            ["own.toml: there is no setting detection.bouton_mm"],
        ),
        ("--settings", "own.toml", "[detection]\nbouton_um = -1\n", ["own.toml: detection.bouton_um must be greater"]),
    ],
)
def test_another_file_that_is_wrong_is_refused(recording, refused, option, file, text, words):
    if text is not None:
        (recording / file).write_text(text, encoding="utf-8")
    refused(words, option, recording / file)


def test_a_wrong_place_is_refused_before_the_long_work(recording, refused, monkeypatch):
    def work(*args, **kwargs):
        raise AssertionError("the movie is being read")

    monkeypatch.setattr("napari_boutonrelease.recording.movie.Movie.read", work)
    (recording / "places.csv").write_text(PLACES["outside the image"][0], encoding="utf-8")
    refused(["places.csv, row 3"], "--boutons", recording / "places.csv")
    (recording / "path.csv").write_text("y_px,x_px\n5,5\n", encoding="utf-8")
    refused(["path.csv"], "--axon", recording / "path.csv")


# --- the place of the results


def test_results_are_not_written_where_a_file_is(recording, refused):
    refused(["axon.toml is a file", "give a folder"], "--out", recording / "axon.toml")
    refused(["axon.toml is a file", "choose another folder"], "--out", recording / "axon.toml" / "results")


@pytest.mark.parametrize("options", [[], ["--overwrite"]])
def test_a_folder_of_something_else_is_never_replaced(recording, refused, options):
    (recording / "thesis").mkdir()
    (recording / "thesis" / "chapter.docx").write_text("a year's work", encoding="utf-8")
    words = ["thesis holds files but no results", "choose another folder"]
    refused(words, "--out", recording / "thesis", *options)


def test_results_that_are_there_are_not_replaced_unasked(recording, refused):
    (recording / "axon.release").mkdir()
    (recording / "axon.release" / "analysis.json").write_text("{}", encoding="utf-8")
    refused(["axon.release already holds results", "--overwrite"])


def test_a_folder_without_leave_to_write_is_refused_before_the_long_work(recording, refused, monkeypatch):
    may = os.access
    monkeypatch.setattr(os, "access", lambda path, mode: not mode & os.W_OK and may(path, mode))
    refused(["is not allowed", "choose another folder"])


@pytest.mark.parametrize("call", ["mkdir", "rename"])
def test_a_disk_that_refuses_while_writing_leaves_nothing(recording, refused, monkeypatch, call):
    def refuse(self, *args, **kwargs):
        if ".writing-" in self.name:
            raise OSError(28, "No space left on device")
        return original(self, *args, **kwargs)

    original = getattr(Path, call)
    monkeypatch.setattr(Path, call, refuse)
    refused(["could not be written to", "axon.release", "No space left on device"])


# --- the saved analysis


@pytest.mark.parametrize(
    ("text", "words"),
    [
        (None, ["analysis.json cannot be read", "give the analysis.json"]),
        ("results", ["analysis.json is not a saved analysis", "give the analysis.json"]),
        ("{}", ["analysis.json is not a saved analysis", "give the analysis.json"]),
        ('{"format": "boutonrelease analysis", "format_version": 99}', ["format version 99", "newest version"]),
        ('{"format": "boutonrelease analysis", "format_version": 1}', ["analysis.json is damaged", "settings"]),
    ],
)
def test_a_file_that_is_no_saved_analysis_is_refused(tmp_path, capsys, text, words):
    saved = tmp_path / "analysis.json"
    if text is not None:
        saved.write_text(text, encoding="utf-8")
        assert text == "results" or json.loads(text) is not None
    before = contents(tmp_path)
    assert main(["analyse", "--from", str(saved), "--out", str(tmp_path / "again")]) == 2
    out, err = capsys.readouterr()
    assert out == ""
    assert err.count("\n") == 1
    assert all(word in err for word in words), err
    assert contents(tmp_path) == before
