"""From a movie on disk to exported tables and back, in real windows, as the command line does it without one."""

from __future__ import annotations

import json
import subprocess
import sys

import numpy as np
import pytest
from qtpy.QtCore import Qt
from qtpy.QtTest import QTest
from qtpy.QtWidgets import QFileDialog

from napari_boutonrelease.cli.main import main
from napari_boutonrelease.docks import view
from napari_boutonrelease.docks.arrange import DOCKS, AllDocks, dock_name, open_all, open_all_docks, open_dock, panels
from napari_boutonrelease.docks.layers import movie_layer
from napari_boutonrelease.docks.panel import model_of

PLUGIN = "napari-boutonrelease"
TABLES = ("boutons", "pulses", "responses", "spontaneous", "drift")
OPTIONS = ["--n-max", "3", "--quanta-bootstrap", "0", "--pairs-bootstrap", "100"]


def dock_of(viewer, title):
    inner = viewer.window.dock_widgets[dock_name(title)]
    return getattr(inner, "native", inner)


def click(button):
    QTest.mouseClick(button, Qt.MouseButton.LeftButton)


def tables_of(folder):
    return {name: (folder / f"{name}.csv").read_text(encoding="utf-8").splitlines() for name in TABLES}


@pytest.fixture(scope="module")
def from_command_line(files, tmp_path_factory):
    """Results that the command line writes of the same recording with the same settings."""
    out = tmp_path_factory.mktemp("cli") / "axon.release"
    words = ["analyse", str(files.movie), "--protocol", str(files.protocol_file), "--out", str(out), *OPTIONS]
    assert main(words) == 0
    return out


@pytest.fixture
def analysed(make_napari_viewer, files, quick, when_idle, monkeypatch):
    """A viewer with all docks in which a person has opened and analysed the recording."""
    viewer = make_napari_viewer()
    open_all(viewer)
    recording = dock_of(viewer, "Recording")
    recording.open_button.open_source(files.movie)
    when_idle(recording)
    monkeypatch.setattr(QFileDialog, "getOpenFileName", lambda *_: (str(files.protocol_file), ""))
    click(recording.load_button)
    recording.model.settings = quick
    click(recording.analyse_button)
    when_idle(recording)
    assert recording.model.measured is not None
    return viewer


def test_the_docks_write_what_the_command_line_writes(analysed, from_command_line, tmp_path, when_idle):
    results = dock_of(analysed, "Results")
    results.folder.setText(str(tmp_path / "axon.release"))
    click(results.export_button)
    when_idle(results)
    there, here = tables_of(from_command_line), tables_of(tmp_path / "axon.release")
    assert len(there["boutons"]) == 4
    assert here == there
    contents = [
        json.loads((folder / "analysis.json").read_text()) for folder in (from_command_line, tmp_path / "axon.release")
    ]
    for content in contents:
        content.pop("created")
    assert contents[0] == contents[1]
    names = [
        sorted(str(path.relative_to(folder)) for path in folder.rglob("*"))
        for folder in (from_command_line, tmp_path / "axon.release")
    ]
    assert names[0] == names[1]


def test_edits_survive_export_and_reopening_in_another_viewer(analysed, make_napari_viewer, tmp_path, when_idle, qtbot):
    model = model_of(analysed)
    sites = model.sites()
    first = (float(sites.y_px[0]), float(sites.x_px[0]))
    axon = np.array([[16.0, 0.0], [15.0, 30.0], [16.0, 63.0]])
    model.draw_axon(axon)
    model.edit(model.edits.delete(first).exclude(2, "focus lost"))
    recording = dock_of(analysed, "Recording")
    click(recording.analyse_button)
    when_idle(recording)
    results = dock_of(analysed, "Results")
    results.folder.setText(str(tmp_path / "axon.release"))
    click(results.export_button)
    when_idle(results)
    before = model.table("boutons")
    assert len(before) == 2

    other = make_napari_viewer()
    (layer,) = other.open(str(tmp_path / "axon.release" / "analysis.json"), plugin=PLUGIN)
    again = model_of(other)
    qtbot.waitUntil(lambda: again.measured is not None, timeout=60_000)
    when_idle(dock_of(other, "Recording"))
    assert movie_layer(other) is layer
    assert again.edits == model.edits
    assert again.settings == model.settings
    assert again.protocol == model.protocol
    np.testing.assert_array_equal(again.pipeline.axon, axon)
    assert not again.can_undo, "what was saved is where undoing ends"
    for name in TABLES[:4]:
        assert again.table(name).equals(model.table(name))
    assert dock_of(other, "Recording").form.protocol() == model.protocol
    assert again is not model


def test_other_json_files_are_left_to_others(make_napari_viewer, tmp_path):
    viewer = make_napari_viewer()
    for name in ("my_analysis.json", "analysis.json"):
        (tmp_path / name).write_text('{"format": "something else"}')
    with pytest.raises(Exception, match=r"is not a chosen compatible reader|No compatible readers"):
        viewer.open(str(tmp_path / "my_analysis.json"), plugin=PLUGIN)
    with pytest.raises(Exception, match="is not a saved analysis"):
        viewer.open(str(tmp_path / "analysis.json"), plugin=PLUGIN)
    assert len(viewer.layers) == 0


def test_all_docks_open_once_and_fit_a_small_window(make_napari_viewer, qtbot):
    viewer = make_napari_viewer(show=True)
    window = viewer.window._qt_window
    window.resize(1366, 768)
    open_all_docks(viewer)
    open_all_docks(viewer)
    assert {title for title in DOCKS if dock_name(title) in viewer.window.dock_widgets} == set(DOCKS)
    assert len(panels(viewer)) == len(DOCKS)
    qtbot.wait(200)
    assert (window.width(), window.height()) == (1366, 768)
    assert window.minimumSizeHint().height() <= 768
    assert window.minimumSizeHint().width() <= 1366
    assert viewer.window._qt_viewer.canvas.native.height() > 200, "the movie stays in sight"


def test_the_menu_entry_opens_all_docks_and_goes_away(make_napari_viewer, qtbot):
    viewer = make_napari_viewer()
    viewer.window.add_plugin_dock_widget(PLUGIN, "Bouton release: all docks")
    qtbot.waitUntil(lambda: len(panels(viewer)) == len(DOCKS))
    opener = [one for one in viewer.window.dock_widgets.values() if isinstance(getattr(one, "native", one), AllDocks)]
    assert opener == []


def test_the_menu_and_open_dock_lead_to_the_same_dock(make_napari_viewer):
    viewer = make_napari_viewer()
    open_dock(viewer, "Results")
    open_dock(viewer, "Results")
    assert len(panels(viewer)) == 1
    assert all(issubclass(type(one), type(panels(viewer)[0])) for one in panels(viewer))


def test_a_dock_closed_and_opened_again_shows_the_same(analysed):
    before = model_of(analysed).table("boutons")
    analysed.window.remove_dock_widget(dock_of(analysed, "Results"))
    open_dock(analysed, "Results")
    shown = dock_of(analysed, "Results").tables["boutons"].rows.frame
    assert shown.equals(before)


def test_two_windows_stay_apart(make_napari_viewer, files, when_idle):
    one, other = make_napari_viewer(), make_napari_viewer()
    for viewer in (one, other):
        open_dock(viewer, "Recording")
        open_dock(viewer, "Results")
    dock = dock_of(one, "Recording")
    dock.open_button.open_source(files.movie)
    when_idle(dock)
    dock.load_protocol(files.protocol_file)
    assert model_of(other).movie is None
    assert dock_of(other, "Recording").movies.count() == 0
    assert len(other.layers) == 0
    one.close()
    dock_of(other, "Recording").open_button.open_source(files.movie)
    when_idle(dock_of(other, "Recording"))
    assert len(other.layers) == 1


def test_view_opens_a_movie_with_its_protocol(make_napari_viewer, files, monkeypatch):
    opened = []
    monkeypatch.setattr(
        view, "run", lambda show, **what: show(opened.append(make_napari_viewer()) or opened[0], **what)
    )
    assert main(["view", str(files.movie), "--protocol", str(files.protocol_file)]) == 0
    assert model_of(opened[0]).protocol == files.protocol
    assert len(panels(opened[0])) == len(DOCKS)


def test_view_opens_a_saved_analysis(make_napari_viewer, from_command_line, monkeypatch, qtbot, when_idle):
    opened = []
    monkeypatch.setattr(
        view, "run", lambda show, **what: show(opened.append(make_napari_viewer()) or opened[0], **what)
    )
    assert main(["view", str(from_command_line / "analysis.json")]) == 0
    model = model_of(opened[0])
    qtbot.waitUntil(lambda: model.measured is not None, timeout=60_000)
    when_idle(dock_of(opened[0], "Recording"))
    assert len(model.table("boutons")) == 3


@pytest.mark.parametrize(
    ("words", "sentence"),
    [
        (["view", "nowhere.tif"], "nowhere.tif does not exist"),
        (["view", "nowhere.json"], "nowhere.json"),
        (["view", "nowhere.json", "--channel", "1"], "holds its own movie and protocol"),
    ],
)
def test_view_says_what_is_wrong_before_a_window_opens(words, sentence, capsys):
    assert main(words) == 2
    assert sentence in capsys.readouterr().err


def test_the_help_of_view_loads_no_window():
    code = (
        "import sys; from napari_boutonrelease.cli.main import build_parser; build_parser('view').format_help(); "
        "print([name for name in ('napari', 'qtpy', 'numpy') if name in sys.modules])"
    )
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert done.stdout.strip() == "[]"
