"""A study: one folder a recording, the tables of all, what failed; and that what is done stays done."""

from __future__ import annotations

import json
import os
import shutil

import frictionless
import pandas as pd
import pytest

import napari_boutonrelease as br
from napari_boutonrelease.batch.journal import opened_journal
from napari_boutonrelease.cli.main import main


def batch(home, tools, *words):
    return main(["batch", str(home / "study.csv"), "--out", str(home / "out"), *tools.words, *words])


def tables(folder):
    return {path.name: path.read_text(encoding="utf-8") for path in sorted(folder.glob("*.csv"))}


def test_one_row_that_fails_stops_no_other(finished):
    _, outcome, _ = finished
    assert outcome.names("done") == ("day1/axon1", "day2/axon1") == outcome.analysed
    assert list(outcome.failures) == ["broken"]
    assert outcome.failures["broken"].startswith("broken.tif is not a TIFF file")


def test_progress_counts_recordings(finished):
    assert finished[2] == [(0, 3), (1, 3), (2, 3), (3, 3)]


def test_a_folder_is_the_same_as_analyse_writes(finished, tools, tmp_path):
    home, _, _ = finished
    analysis = br.analyse(home / "day1/axon1.tif", home / "day1/axon1.protocol.toml", settings=tools.settings())
    br.reports.write_result(analysis, tmp_path / "alone", overwrite=False, figures=False)
    assert tables(home / "out" / "day1" / "axon1.release") == tables(tmp_path / "alone")


def test_the_study_has_every_bouton_behind_its_recording(finished):
    home, outcome, _ = finished
    study = pd.read_csv(home / "out" / "study.csv", dtype={"animal": str})
    assert list(study.columns[:4]) == ["recording", "condition", "animal", "bouton"]
    for name, condition, animal in (("day1/axon1", "control", "07"), ("day2/axon1", "drug", "b, 2")):
        of_one = study[study["recording"] == name].reset_index(drop=True)
        assert set(of_one["condition"]) == {condition}
        assert set(of_one["animal"]) == {animal}
        alone = pd.read_csv(home / "out" / f"{name}.release" / "boutons.csv")
        pd.testing.assert_frame_equal(of_one[alone.columns], alone, check_dtype=False)
    assert len(study) == len(outcome.study) > 2


def test_the_recordings_say_how_they_stand_and_what_they_took(finished):
    home, _, _ = finished
    table = pd.read_csv(home / "out" / "recordings.csv").set_index("recording")
    assert list(table["status"]) == ["done", "failed", "done"]
    assert table.loc["broken", "failure"].startswith("broken.tif is not a TIFF file")
    summary = json.loads((home / "out" / "day1" / "axon1.release" / "summary.json").read_text())
    one = table.loc["day1/axon1"]
    assert one["n_boutons"] == summary["counts"]["boutons"]
    assert one["p_release"] == pytest.approx(summary["population"]["p_release"], rel=1e-5)
    assert one["p_release_lo"] <= one["p_release"] <= one["p_release_hi"]
    assert 0 < one["cpu_s"] < 600
    assert 50 < one["peak_memory_mb"] < 1000
    assert one["folder"] == "day1/axon1.release"
    assert table.loc[["broken"], "n_boutons":"q_hi"].isna().all(axis=None)


def test_the_tables_are_as_their_description_says(finished):
    home, _, _ = finished
    package = frictionless.Package(str(home / "out" / "datapackage.json"))
    report = package.validate()
    assert report.valid, report.flatten(["title", "message"])
    assert [resource.name for resource in package.resources] == ["study", "recordings", "batch.json"]
    content = json.loads((home / "out" / "batch.json").read_text())
    assert content["counts"] == {"done": 2, "failed": 1, "skipped": 0}
    assert content["settings"]["quanta"]["n_max"] == 3


def test_a_second_run_tries_again_what_failed_and_nothing_else(own_study, tools, capsys):
    before = tools.snapshot(own_study / "out" / "day1"), tables(own_study / "out")["study.csv"]
    assert batch(own_study, tools) == 1
    assert (tools.snapshot(own_study / "out" / "day1"), tables(own_study / "out")["study.csv"]) == before
    out = capsys.readouterr().out
    assert "2 of 3 recordings done, 2 of them before" in out
    assert "failed: broken: broken.tif is not a TIFF file" in out


def test_what_is_missing_is_made_and_costs_of_the_rest_are_kept(own_study, tools):
    tools.write_manifest(own_study, tools.row("day1/axon1"), tools.row("day2/axon1"))
    shutil.rmtree(own_study / "out" / "day2")
    with (own_study / "out" / "journal.jsonl").open("a") as journal:
        journal.write('{"recording": "day1/ax')  # as a crash would leave it
    before = pd.read_csv(own_study / "out" / "recordings.csv").set_index("recording")
    assert batch(own_study, tools, "--workers", "1") == 0
    after = pd.read_csv(own_study / "out" / "recordings.csv").set_index("recording")
    assert list(after["status"]) == ["done", "done"]
    assert after.loc["day1/axon1", "seconds"] == before.loc["day1/axon1", "seconds"]
    assert after.loc["day2/axon1", "seconds"] > 0
    assert after.loc["day2/axon1", "analysed"] >= before.loc["day2/axon1", "analysed"]


def test_a_movie_that_was_only_copied_is_still_done(own_study, tools):
    tools.write_manifest(own_study, tools.row("day1/axon1"), tools.row("day2/axon1"))
    os.utime(own_study / "day1" / "axon1.tif", (1, 1))
    before = tools.snapshot(own_study / "out" / "day1")
    assert batch(own_study, tools) == 0
    assert tools.snapshot(own_study / "out" / "day1") == before


def change_setting(home):
    return ["--threshold-sd", "3"], "was analysed with other settings (calls.threshold_sd 2.5, now 3.0)"


def change_movie(home):
    movie = home / "day1" / "axon1.tif"
    movie.write_bytes((home / "day1" / "axon2.tif").read_bytes())
    return [], f"was made from another movie than {movie} is now"


def change_protocol(home):
    protocol = home / "day1" / "axon1.protocol.toml"
    protocol.write_text(protocol.read_text().replace("trials = 10", "trials = 9"))
    return [], "was analysed with another protocol"


def add_boutons(home):
    (home / "b.csv").write_text("y_px,x_px\n14,14\n")
    manifest = home / "study.csv"
    header, first, *rest = manifest.read_text().splitlines()
    manifest.write_text("\n".join([f"{header},boutons", f"{first},b.csv", *rest]) + "\n")
    return [], "was analysed with other boutons"


def lose_a_table(home):
    (home / "out" / "day1" / "axon1.release" / "boutons.csv").unlink()
    return [], "holds results without boutons.csv"


@pytest.mark.parametrize("change", [change_setting, change_movie, change_protocol, add_boutons, lose_a_table])
def test_results_of_other_inputs_are_neither_taken_nor_replaced_unasked(own_study, tools, capsys, change):
    words, message = change(own_study)
    before = tools.snapshot(own_study)
    assert batch(own_study, tools, *words) == 2
    err = capsys.readouterr().err
    assert f"study.csv, row 2, column movie: {own_study / 'out' / 'day1' / 'axon1.release'} {message}" in err
    assert "--overwrite" in err
    assert err.count("\n") == 1
    assert tools.snapshot(own_study) == before


def test_overwrite_replaces_what_differs_and_only_that(own_study, tools):
    tools.write_manifest(own_study, tools.row("day1/axon1"), tools.row("day2/axon1"))
    change_protocol(own_study)
    others = tools.snapshot(own_study / "out" / "day2")
    assert batch(own_study, tools, "--overwrite") == 0
    assert tools.snapshot(own_study / "out" / "day2") == others
    table = pd.read_csv(own_study / "out" / "recordings.csv").set_index("recording")
    assert list(table["n_trials"]) == [9, 10]


def test_two_runs_into_one_folder_do_not_mix(own_study, tools, capsys):
    before = tools.snapshot(own_study)
    with opened_journal(own_study / "out"):
        assert batch(own_study, tools) == 2
    assert "Another batch is writing to" in capsys.readouterr().err
    assert tools.snapshot(own_study) == before


@pytest.mark.parametrize(
    ("out", "message"),
    [
        ("axon1.tif", "is a file; give a folder for the study"),
        ("out/day1/axon1.release", "holds the results of one recording"),
        ("foreign", "holds a recordings.csv that no batch wrote"),
        ("of_other", "holds the study of other.csv, not of study.csv"),
    ],
)
def test_nothing_of_others_is_replaced(own_study, tools, capsys, out, message):
    shutil.copy(own_study / "day1" / "axon1.tif", own_study / "axon1.tif")
    (own_study / "foreign").mkdir()
    (own_study / "foreign" / "recordings.csv").write_text("mine\n")
    shutil.copytree(own_study / "out", own_study / "of_other")
    content = json.loads((own_study / "of_other" / "batch.json").read_text())
    content["manifest"]["name"] = "other.csv"
    (own_study / "of_other" / "batch.json").write_text(json.dumps(content))
    before = tools.snapshot(own_study)
    assert main(["batch", str(own_study / "study.csv"), "--out", str(own_study / out), *tools.words]) == 2
    assert message in capsys.readouterr().err
    assert tools.snapshot(own_study) == before


def test_a_wrong_manifest_or_call_does_nothing(own_study, tools, capsys):
    before = tools.snapshot(own_study)
    with (own_study / "study.csv").open("a") as file:
        file.write("none.tif,broken.protocol.toml,,\n")
    assert batch(own_study, tools) == 2
    assert "study.csv, row 5, column movie: none.tif does not exist" in capsys.readouterr().err
    with pytest.raises(br.InputError, match="workers must be 1 or more"):
        br.batch.run_batch(own_study / "study.csv", workers=0)
    with pytest.raises(br.InputError, match="not both"):
        br.batch.run_batch(own_study / "study.csv", workers=1, scheduler="tcp://127.0.0.1:1")
    del before["study.csv"]
    assert tools.snapshot(own_study).items() >= before.items()
