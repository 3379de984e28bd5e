"""Protocols are read, refused with the key or row that is wrong, and written so that they read back the same."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

from napari_boutonrelease.errors import OutputError, ProtocolError
from napari_boutonrelease.recording import (
    Protocol,
    RegularStimuli,
    StimulusTable,
    read_protocol,
    read_stimulus_table,
    write_protocol,
)
from napari_boutonrelease.response_shape import ResponseShape

WHOLE = """
[recording]
frame_interval_s = 0.010
exposure_s = 0.008
row_time_s = 0
pixel_size_um = 0.10
camera_offset = 100

[stimuli]
first_s = 0.5
trials = 60
trial_interval_s = 1
pulses = 2
pulse_interval_s = 0.050

[reporter]
rise_s = 0.002
decay_s = 0.060
latency_s = 0.001
"""
LEAST = "[stimuli]\nfirst_s = 0.5\ntrials = 1\n"
TABLE = "time_s, pulse, trial\n0.5,1,1\n0.55,2,1\n\n1.7,1,2\n"


def read(folder: Path, text: str, *, table: str | bytes | None = None) -> Protocol:
    (folder / "p.toml").write_text(text, encoding="utf-8")
    if table is not None:
        (folder / "pulses.csv").write_bytes(table if isinstance(table, bytes) else table.encode())
    return read_protocol(folder / "p.toml")


def read_table(folder: Path, table: str | bytes) -> StimulusTable:
    stimuli = read(folder, '[stimuli]\ntimes = "pulses.csv"\n', table=table).stimuli
    assert isinstance(stimuli, StimulusTable)
    return stimuli


def test_reads_all_keys(tmp_path: Path) -> None:
    protocol = read(tmp_path, WHOLE)
    stimuli = RegularStimuli(first_s=0.5, trials=60, trial_interval_s=1.0, pulses=2, pulse_interval_s=0.05)
    reporter = ResponseShape(latency_s=0.001, rise_s=0.002, decay_s=0.06)
    assert protocol == Protocol(
        frame_interval_s=0.01,
        exposure_s=0.008,
        row_time_s=0.0,
        pixel_size_um=0.1,
        camera_offset=100.0,
        stimuli=stimuli,
        reporter=reporter,
    )
    assert protocol.path == tmp_path / "p.toml"
    assert isinstance(protocol.camera_offset, float)


def test_reads_the_least_protocol(tmp_path: Path) -> None:
    protocol = read(tmp_path, LEAST)
    stimuli = RegularStimuli(first_s=0.5, trials=1, trial_interval_s=None, pulses=1, pulse_interval_s=None)
    assert protocol == Protocol(stimuli=stimuli)


def test_reads_a_table_in_any_column_order_and_with_a_byte_order_mark(tmp_path: Path) -> None:
    for table in (TABLE.encode(), b"\xef\xbb\xbf" + TABLE.replace("\n", "\r\n").encode()):
        stimuli = read_table(tmp_path, table)
        assert (stimuli.trial.tolist(), stimuli.pulse.tolist()) == ([1, 1, 2], [1, 2, 1])
        assert stimuli.time_s.tolist() == [0.5, 0.55, 1.7]
        assert (stimuli.trials, stimuli.pulses) == (2, 2)


def test_a_table_is_sorted_by_trial_and_pulse(tmp_path: Path) -> None:
    stimuli = read_table(tmp_path, "trial,pulse,time_s,note\n2,1,3.5,b\n1,2,1.5,a\n1,1,1.25,a\n")
    assert stimuli.time_s.tolist() == [1.25, 1.5, 3.5]


@pytest.mark.parametrize(
    ("old", "new", "message"),
    [
        ("exposure_s", "exposure_ms", r"unknown key in \[recording\]: exposure_ms; did you mean exposure_s\?"),
        ("trials =", "trails =", r"unknown key in \[stimuli\]: trails; did you mean trials\?"),
        ("[reporter]", "[reportr]", r"unknown section: reportr; did you mean reporter\?"),
        ("[recording]", "zzz = 1\n[recording]", "unknown section: zzz; known are recording, stimuli, reporter"),
        ("0.010", '"10 ms"', r"\[recording\] frame_interval_s must be a number.*given \"10 ms\""),
        ("0.010", "true", r"\[recording\] frame_interval_s must be a number.*given true"),
        ("0.010", "-0.01", r"\[recording\] frame_interval_s must be greater than 0 \(given -0.01\)"),
        ("0.010", "nan", r"\[recording\] frame_interval_s must be greater than 0 \(given nan\)"),
        ("0.008", "0.02", r"\[recording\] exposure_s = 0.02 is longer than the frame interval of 0.01 s"),
        ("row_time_s = 0", "row_time_s = -1", r"\[recording\] row_time_s must be 0 or more \(given -1\)"),
        ("pixel_size_um = 0.10", "pixel_size_um = 0", r"\[recording\] pixel_size_um must be greater than 0"),
        ("camera_offset = 100", "camera_offset = inf", r"\[recording\] camera_offset must be a finite number"),
        ("first_s = 0.5", "first_s = -0.5", r"\[stimuli\] first_s must be 0 or more"),
        ("first_s = 0.5", "", r"\[stimuli\] first_s is missing"),
        ("trials = 60", "", r"\[stimuli\] trials is missing"),
        ("trials = 60", "trials = 60.0", r"\[stimuli\] trials must be a whole number \(given 60.0\)"),
        ("trials = 60", "trials = 0", r"\[stimuli\] trials must be 1 or more \(given 0\)"),
        ("trial_interval_s = 1", "trial_interval_s = 0", r"\[stimuli\] trial_interval_s must be greater than 0"),
        ("trial_interval_s = 1", "trial_interval_s = 0.05", r"\[stimuli\] the 2 pulses of a trial last 0.05 s, but"),
        ("pulse_interval_s = 0.050", "pulse_interval_s = -0.05", r"\[stimuli\] pulse_interval_s must be greater"),
        ("pulse_interval_s = 0.050", "", r"\[stimuli\] pulse_interval_s is missing: with pulses = 2"),
        ("pulses = 2", "", r"\[stimuli\] pulses is missing"),
        ("pulses = 2", 'pulses = 2\ntimes = "pulses.csv"', r"\[stimuli\] has both times and first_s, pulse_interval_s"),
        ("rise_s = 0.002", "", r"\[reporter\] rise_s is missing"),
        ("rise_s = 0.002", "rise_s = 0", r"\[reporter\] rise_s must be greater than 0 s"),
        ("rise_s = 0.002", "rise_s = 0.002\nslow_fraction = 0.2", r"\[reporter\] slow_decay_s is missing"),
        ("trials = 60", "trials 60", r"not valid TOML: .*line 11, column 8"),
    ],
)
def test_a_wrong_protocol_names_file_and_key(tmp_path: Path, old: str, new: str, message: str) -> None:
    assert WHOLE.count(old) == 1 or old == "0.010" or old == "pulses = 2"
    with pytest.raises(ProtocolError, match=r"^p\.toml.*" + message):
        read(tmp_path, WHOLE.replace(old, new, 1))


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("", r"section \[stimuli\] is missing or empty"),
        ("stimuli = 3", r"stimuli must be a section: write \[stimuli\]"),
        ("[stimuli]\ntimes = 3", "times must be the name of a CSV file, in quotes"),
        ('[stimuli]\ntimes = "nowhere.csv"', r"times: .*nowhere\.csv cannot be opened"),
    ],
)
def test_stimuli_must_be_given(tmp_path: Path, text: str, message: str) -> None:
    with pytest.raises(ProtocolError, match=message):
        read(tmp_path, text)


def test_a_missing_file_is_named(tmp_path: Path) -> None:
    with pytest.raises(ProtocolError, match=r"none\.toml cannot be opened"):
        read_protocol(tmp_path / "none.toml")


@pytest.mark.parametrize(
    ("table", "message"),
    [
        ("trial,time_s\n1,0.5\n", r"pulses\.csv has no column pulse"),
        ("trial;pulse;time_s\n1;1;0.5\n", r"has no column trial, pulse, time_s: .* with commas between"),
        ("", r"has no column trial, pulse, time_s"),
        ("trial,pulse,time_s,trial\n1,1,0.5,1\n", "two columns trial"),
        ("trial,pulse,time_s\n", "holds no pulse"),
        ("trial,pulse,time_s\n1,1,0.5\n\n1,2,soon\n", r"line 4, column time_s: 'soon' is not a number"),
        ("trial,pulse,time_s\n1,1,nan\n", r"line 2, column time_s: 'nan' is not a finite number"),
        ("trial,pulse,time_s\n1,1\n", r"line 2, column time_s is empty"),
        ("trial,pulse,time_s\n1,1,-0.5\n", r"line 2, column time_s: must be 0 or more \(given -0.5\)"),
        ("trial,pulse,time_s\n1,0,0.5\n", r"line 2, column pulse: '0' must be a whole number, counted from 1"),
        ("trial,pulse,time_s\n1.5,1,0.5\n", r"line 2, column trial: '1.5' must be a whole number"),
        ("trial,pulse,time_s\n1,1,0.5\n3,1,0.5\n", r"no pulse of trial 2: number the trials"),
        ("trial,pulse,time_s\n1,1,0.5\n2,1,1\n1,1,2\n", r"line 4: trial 1, pulse 1 is already on line 2"),
        ("trial,pulse,time_s\n1,1,0.5\n1,2,0.4\n", r"line 3, column time_s: pulse 2 of trial 1 is at 0.4 s, not after"),
        (b"trial,pulse,time_s\n1,1,\xff\xfe\n", "is not a CSV text file"),
    ],
)
def test_a_wrong_table_names_line_and_column(tmp_path: Path, table: str | bytes, message: str) -> None:
    with pytest.raises(ProtocolError, match=message):
        read_table(tmp_path, table)


@pytest.mark.parametrize("text", [WHOLE, LEAST], ids=["whole", "least"])
def test_a_written_protocol_reads_back_the_same(tmp_path: Path, text: str) -> None:
    protocol = read(tmp_path, text)
    write_protocol(protocol, tmp_path / "copy.toml")
    assert read_protocol(tmp_path / "copy.toml") == protocol
    assert {path.name for path in tmp_path.iterdir()} == {"p.toml", "copy.toml"}


def test_a_written_protocol_keeps_every_digit(tmp_path: Path) -> None:
    stimuli = RegularStimuli(first_s=1 / 3, trials=7, trial_interval_s=1e-5 / 3, pulses=1, pulse_interval_s=None)
    reporter = ResponseShape(latency_s=0.0, rise_s=1e-7, decay_s=0.1 + 0.2, slow_fraction=1 / 7, slow_decay_s=2 / 3)
    protocol = Protocol(frame_interval_s=2**-40, stimuli=stimuli, reporter=reporter)
    write_protocol(protocol, tmp_path / "p.toml")
    assert read_protocol(tmp_path / "p.toml") == protocol


def test_a_written_table_reads_back_the_same(tmp_path: Path) -> None:
    protocol = Protocol(stimuli=StimulusTable(trial=[1, 1, 2], pulse=[1, 3, 1], time_s=[0.1, 1 / 3, 2.0]))
    write_protocol(protocol, tmp_path / "axon 1.protocol.toml")
    copy = read_protocol(tmp_path / "axon 1.protocol.toml")
    assert copy == protocol
    assert copy != Protocol(stimuli=StimulusTable(trial=[1, 1, 2], pulse=[1, 3, 1], time_s=[0.1, 0.3, 2.0]))
    assert {path.name for path in tmp_path.iterdir()} == {"axon 1.protocol.toml", "axon 1.pulses.csv"}
    np.testing.assert_array_equal(read_stimulus_table(tmp_path / "axon 1.pulses.csv").time_s, [0.1, 1 / 3, 2.0])


def test_a_failed_write_leaves_the_old_file_and_nothing_else(tmp_path: Path) -> None:
    with pytest.raises(OutputError, match=r"gone/p\.toml cannot be written"):
        write_protocol(read(tmp_path, LEAST), tmp_path / "gone" / "p.toml")
    (tmp_path / "taken.toml").mkdir()
    with pytest.raises(OutputError, match=r"taken\.toml cannot be written"):
        write_protocol(read(tmp_path, LEAST), tmp_path / "taken.toml")
    assert {path.name for path in tmp_path.iterdir()} == {"p.toml", "taken.toml"}


def test_a_protocol_built_by_hand_is_checked_too() -> None:
    with pytest.raises(ProtocolError, match=r"\[stimuli\] pulse_interval_s is missing"):
        RegularStimuli(first_s=0.0, trials=1, trial_interval_s=None, pulses=2, pulse_interval_s=None)
    with pytest.raises(ProtocolError, match="must be columns of one length"):
        StimulusTable(trial=[1, 2], pulse=[1], time_s=[0.5, 1.0])
