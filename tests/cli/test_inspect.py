"""`inspect` tells what a recording holds and whether it can be analysed; it refuses only what cannot be read."""

from __future__ import annotations

import numpy as np
import pytest
import tifffile

from napari_boutonrelease.cli.main import main


@pytest.fixture(scope="module")
def recording(tmp_path_factory):
    """Folder of a small simulated recording, axon.tif and its protocol, with two dark frames."""
    folder = tmp_path_factory.mktemp("inspect")
    words = ["--trials", "6", "--seed", "3", "--set", "dark_frames=[7,8]", "--set", "drift_wave_px=1"]
    assert main(["simulate", str(folder / "axon.tif"), *words]) == 0
    return folder


def report(capsys, *words) -> dict[str, str]:
    """Return the report's lines by what they are about; the verdict, and all text."""
    capsys.readouterr()
    assert main(["inspect", *map(str, words)]) == 0
    text = capsys.readouterr().out
    said = {"all": text, "verdict": text.partition("verdict: ")[2]}
    for line in text.splitlines():
        words, _, rest = line.strip().partition("  ")
        if rest:
            said[words] = rest.strip()
    return said


def test_a_complete_recording_can_be_analysed(recording, capsys):
    said = report(capsys, recording / "axon.tif", "--protocol", recording / "axon.protocol.toml")
    assert said["axes"] == "TYX in the file: 530 frames of 56 × 184 pixels (y × x)"
    assert said["type"] == "uint16, at most 65535"
    assert said["frame interval"] == "0.01 s (protocol)"
    assert said["pixel size"] == "0.18 µm (protocol)"
    assert said["trials"] == "6, with 2 pulses each"
    assert said["between pulses"] == "0.05 s"
    assert said["times"] == "first at 0.5 s, last at 4.55 s"
    assert 1.7 < float(said["gain"].split()[0]) < 2.3
    assert said["bad frames"] == "2 left out (light off: 7-8; counted from 0)"
    assert said["saturated"] == "none"
    assert said["verdict"].startswith("can be analysed\n")
    assert "Fewer than 20 trials" in said["verdict"]


def test_without_protocol_the_file_speaks_and_the_report_says_what_is_missing(recording, capsys):
    said = report(capsys, recording / "axon.tif")
    assert said["frame interval"] == "0.01 s (ImageJ finterval)"
    assert said["verdict"].startswith("cannot be analysed yet\n")
    assert "Give --protocol FILE.toml" in said["verdict"]
    assert "frame_interval_s" not in said["verdict"]
    assert "stimuli" not in said["all"].splitlines()


def test_a_file_without_calibration_is_no_error(tmp_path, capsys):
    rng = np.random.default_rng(1)
    tifffile.imwrite(tmp_path / "plain.tif", rng.poisson(50, (40, 24, 24)).astype("uint16"))
    said = report(capsys, tmp_path / "plain.tif")
    assert said["frame interval"] == "unknown"
    assert said["pixel size"] == "unknown"
    assert {"frame_interval_s", "pixel_size_um"} <= set(said["verdict"].replace(".", " ").split())


def test_an_unknown_pixel_size_is_a_doubt_only(tmp_path, capsys):
    rng = np.random.default_rng(1)
    tifffile.imwrite(tmp_path / "plain.tif", rng.poisson(50, (40, 24, 24)).astype("uint16"))
    text = "[recording]\nframe_interval_s = 0.01\n[stimuli]\nfirst_s = 0.1\ntrials = 1\n"
    (tmp_path / "plain.toml").write_text(text, encoding="utf-8")
    said = report(capsys, tmp_path / "plain.tif", "--protocol", tmp_path / "plain.toml")
    assert said["trials"] == "1, with 1 pulse each"
    assert said["drift"].startswith("cannot be followed")
    assert said["verdict"].startswith("can be analysed\n")
    assert {"pixel_size_um", "camera_offset"} <= set(said["verdict"].replace(",", " ").split())


def test_a_protocol_that_does_not_fit_is_a_verdict(recording, tmp_path, capsys):
    text = (recording / "axon.protocol.toml").read_text(encoding="utf-8").replace("trials = 6", "trials = 60")
    (tmp_path / "long.toml").write_text(text, encoding="utf-8")
    said = report(capsys, recording / "axon.tif", "--protocol", tmp_path / "long.toml")
    assert said["verdict"].startswith("cannot be analysed yet\n")
    assert "trial" in said["verdict"]


@pytest.mark.parametrize("value", [120.0, np.nan])
def test_a_movie_of_nothing_is_said_to_be_one(tmp_path, capsys, value):
    tifffile.imwrite(tmp_path / "nothing.tif", np.full((40, 24, 24), value, dtype=np.float32))
    text = "[recording]\nframe_interval_s = 0.01\ncamera_offset = 100\n[stimuli]\nfirst_s = 0.1\ntrials = 1\n"
    (tmp_path / "nothing.toml").write_text(text, encoding="utf-8")
    said = report(capsys, tmp_path / "nothing.tif", "--protocol", tmp_path / "nothing.toml")
    assert said["verdict"].startswith("cannot be analysed yet\n")
    assert "No frame can be used" in said["verdict"]
    assert said["read noise"] == said["bleaching"] == "cannot be measured"
    assert "nan" not in said["all"]


@pytest.mark.parametrize("name", ["none.tif", "text.tif"])
def test_what_is_no_movie_is_refused(tmp_path, capsys, name):
    (tmp_path / "text.tif").write_text("not a movie", encoding="utf-8")
    assert main(["inspect", str(tmp_path / name)]) == 2
    out, err = capsys.readouterr()
    assert out == ""
    assert err.startswith("boutonrelease: error: ")
    assert name in err


def test_a_protocol_that_cannot_be_read_is_refused(recording, tmp_path, capsys):
    (tmp_path / "wrong.toml").write_text("[recording]\nframe_intervall_s = 1\n", encoding="utf-8")
    assert main(["inspect", str(recording / "axon.tif"), "--protocol", str(tmp_path / "wrong.toml")]) == 2
    assert "frame_intervall_s" in capsys.readouterr().err
