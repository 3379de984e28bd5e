"""The output folder is whole or not there, and never takes the place of anything but older results."""

import os
from dataclasses import replace
from pathlib import Path

import pytest

from napari_boutonrelease.errors import OutputError
from napari_boutonrelease.reports import check_can_write, write_result
from napari_boutonrelease.reports import folder as folder_module


def contents(folder):
    return {path.relative_to(folder).as_posix(): path.read_bytes() for path in folder.rglob("*") if path.is_file()}


def write(result, folder, **options):
    return write_result(result, folder, **{"overwrite": False, "figures": False, **options})


@pytest.fixture
def old(small_result, tmp_path):
    """Results of an earlier analysis."""
    return write(replace(small_result, name="earlier"), tmp_path / "axon.release")


def test_everything_promised_is_there(written):
    names = contents(written).keys()
    assert {
        "boutons.csv",
        "pulses.csv",
        "responses.csv",
        "spontaneous.csv",
        "drift.csv",
        "traces.npz",
        "mean_image.tif",
        "footprints.tif",
        "footprint_weights.tif",
        "summary.json",
        "analysis.json",
        "datapackage.json",
        "report.pdf",
    } <= names
    figures = {name for name in names if name.startswith("figures/")}
    assert {"figures/map.svg", "figures/map.png", "figures/bouton_02.svg", "figures/pulse_pairs.png"} <= figures
    assert {Path(name).stem for name in figures if name.endswith(".svg")} == {
        Path(name).stem for name in figures if name.endswith(".png")
    }
    assert all(contents(written).values())
    assert [path.name for path in written.parent.iterdir()] == [written.name]


def test_the_same_result_gives_the_same_files(small_result, tmp_path):
    one, other = (contents(write(small_result, tmp_path / name)) for name in ("one", "other"))
    assert one == other


def test_missing_parents_are_made_and_progress_reaches_the_end(small_result, tmp_path):
    steps = []
    folder = write(small_result, tmp_path / "a" / "b", progress=lambda done, total: steps.append((done, total)))
    assert folder == tmp_path / "a" / "b"
    assert steps[0][0] == 0
    assert steps[-1][0] == steps[-1][1]


def test_extra_files_belong_to_the_results(small_result, tmp_path):
    folder = write(small_result, tmp_path / "out", extra_files={"recording.nwb": lambda path: path.write_bytes(b"nwb")})
    assert (folder / "recording.nwb").read_bytes() == b"nwb"
    assert "recording.nwb" in (folder / "datapackage.json").read_text(encoding="utf-8")
    write(small_result, folder, overwrite=True)
    assert not (folder / "recording.nwb").exists()


def test_results_are_replaced_only_on_demand(small_result, old):
    before = contents(old)
    with pytest.raises(OutputError, match=r"axon\.release already holds results.*--overwrite"):
        write(small_result, old)
    assert contents(old) == before
    write(small_result, old, overwrite=True)
    assert contents(old) != before
    assert [path.name for path in old.parent.iterdir()] == [old.name]


@pytest.mark.parametrize("name", ["write_table", "write_traces", "write_label_image", "write_weights", "write_json"])
@pytest.mark.parametrize(
    "error", [RuntimeError("power cut"), OSError(28, "No space left on device"), KeyboardInterrupt()]
)
def test_a_failure_midway_leaves_the_old_results_whole(small_result, old, monkeypatch, name, error):
    before = contents(old)

    def fail(*args, **kwargs):
        raise error

    monkeypatch.setattr(f"napari_boutonrelease.reports.export.{name}", fail)
    expected = OutputError if isinstance(error, OSError) else type(error)
    with pytest.raises(expected, match=r"No space left|power cut|^$"):
        write(small_result, old, overwrite=True)
    assert contents(old) == before
    assert [path.name for path in old.parent.iterdir()] == [old.name]


def test_a_failure_midway_leaves_nothing_where_nothing_was(small_result, tmp_path, monkeypatch):
    def fail(*args, **kwargs):
        raise ZeroDivisionError("division")

    monkeypatch.setattr("napari_boutonrelease.reports.export.describe_package", fail)
    with pytest.raises(ZeroDivisionError, match="division"):
        write(small_result, tmp_path / "axon.release")
    assert list(tmp_path.iterdir()) == []


@pytest.mark.parametrize("failing_move", [1, 2])
def test_a_failed_move_brings_the_old_results_back(small_result, old, monkeypatch, failing_move):
    """Where the system cannot exchange two folders at once, each of the two moves may fail."""
    before, moves, rename = contents(old), [], Path.rename

    def fail_once(self, target):
        moves.append(target)
        if len(moves) == failing_move:
            raise PermissionError(13, "in use")
        return rename(self, target)

    monkeypatch.setattr(folder_module.sys, "platform", "win32")
    monkeypatch.setattr(Path, "rename", fail_once)
    with pytest.raises(OutputError, match="in use"):
        write(small_result, old, overwrite=True)
    assert contents(old) == before
    assert [path.name for path in old.parent.iterdir()] == [old.name]


def test_replacing_works_without_an_exchange(small_result, old, monkeypatch):
    before = contents(old)
    monkeypatch.setattr(folder_module.sys, "platform", "win32")
    write(small_result, old, overwrite=True)
    assert contents(old).keys() == before.keys()
    assert contents(old) != before
    assert [path.name for path in old.parent.iterdir()] == [old.name]


def test_results_that_a_crash_left_aside_come_back(small_result, old):
    before = contents(old)
    old.rename(old.with_name(f".{old.name}.replaced"))
    with pytest.raises(OutputError, match="already holds results"):
        check_can_write(old, overwrite=False)
    with pytest.raises(OutputError, match="already holds results"):
        write(small_result, old)
    assert contents(old) == before


def test_what_crashes_left_behind_is_removed_unless_it_is_young(small_result, tmp_path):
    stale, young = (tmp_path / f".axon.release.writing-{name}" for name in ("stale", "young"))
    for leftover in (stale, young):
        leftover.mkdir()
        (leftover / "boutons.csv").write_text("half")
    os.utime(stale, (1e9, 1e9))
    write(small_result, tmp_path / "axon.release")
    assert {path.name for path in tmp_path.iterdir()} == {"axon.release", young.name}


def test_a_folder_of_something_else_is_never_replaced(small_result, tmp_path):
    folder = tmp_path / "thesis"
    folder.mkdir()
    (folder / "chapter.txt").write_text("years of work")
    for overwrite in (False, True):
        with pytest.raises(OutputError, match=r"thesis holds files but no results of an analysis"):
            write(small_result, folder, overwrite=overwrite)
    assert contents(folder) == {"chapter.txt": b"years of work"}


def test_files_that_somebody_put_among_results_are_not_lost(small_result, old):
    (old / "my notes.txt").write_text("bouton 3 looks odd")
    with pytest.raises(OutputError, match=r"no analysis wrote \(my notes\.txt\)"):
        write(small_result, old, overwrite=True)
    assert (old / "my notes.txt").exists()


def test_an_empty_folder_and_litter_of_file_browsers_are_no_obstacle(small_result, tmp_path, old):
    (tmp_path / "empty").mkdir()
    assert (write(small_result, tmp_path / "empty") / "boutons.csv").exists()
    (old / ".DS_Store").write_text("")
    write(small_result, old, overwrite=True)


def test_a_file_in_the_place_of_the_folder_is_refused(small_result, tmp_path):
    (tmp_path / "file").write_text("")
    with pytest.raises(OutputError, match="is a file; give a folder"):
        write(small_result, tmp_path / "file", overwrite=True)
    with pytest.raises(OutputError, match="file is a file, so no results"):
        check_can_write(tmp_path / "file" / "results", overwrite=True)


def test_a_place_where_writing_is_not_allowed_is_refused_at_once(small_result, tmp_path, monkeypatch):
    monkeypatch.setattr(folder_module.os, "access", lambda *_: False)
    for attempt in (check_can_write, lambda folder, overwrite: write(small_result, folder, overwrite=overwrite)):
        with pytest.raises(OutputError, match=r"Writing to .* is not allowed"):
            attempt(tmp_path / "axon.release", overwrite=False)
    assert list(tmp_path.iterdir()) == []


def test_a_link_keeps_pointing_at_the_results(small_result, old):
    link = old.parent / "latest"
    link.symlink_to(old, target_is_directory=True)
    before = contents(old)
    write(small_result, link, overwrite=True)
    assert link.is_symlink()
    assert contents(old) != before
