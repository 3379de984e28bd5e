"""Comparing recordings in the Axon dock: the list, what was found, and that it follows the selection."""

import copy
import json
from dataclasses import replace

import numpy as np
import pytest
from matplotlib.colors import to_hex
from napari.components import ViewerModel
from qtpy.QtCore import QMimeData, QPoint, QPointF, Qt, QUrl
from qtpy.QtGui import QDropEvent
from qtpy.QtTest import QTest
from qtpy.QtWidgets import QApplication, QFileDialog, QMessageBox

from napari_boutonrelease.analysis.model import AnalysisModel, compute
from napari_boutonrelease.analysis.pipeline import Pipeline
from napari_boutonrelease.comparison import CompareSettings
from napari_boutonrelease.docks import compared as core
from napari_boutonrelease.docks import comparison_part
from napari_boutonrelease.docks.axon_dock import AxonDock
from napari_boutonrelease.docks.compared import Entry
from napari_boutonrelease.reports.export import write_result

LONG_MS = 60_000
PLACES = ((14.0, 10.0), (19.0, 26.0), (13.0, 42.0), (18.0, 58.0))
ONE_MORE = (7.0, 34.0)  # above the others, so that their ids are higher by one


@pytest.fixture(scope="module")
def recording(simulate):
    """Four boutons at little calcium."""
    return record(simulate, PLACES, 0.25, seed=6)


def record(simulate, places, p_site, *, seed):
    boutons = (
        {"y_px": y, "x_px": x, "n_sites": 2, "p_site": p_site, "q_dff": 0.7, "f0_photons": 60.0} for y, x in places
    )
    return simulate(*boutons, seed=seed, height_px=32, width_px=70, trials=24, trial_interval_s=0.4)


def measure(recording, quick):
    model = AnalysisModel()
    model.open(*recording)
    model.settings = quick
    request = model.request()
    measured = compute(request)
    model.accept(request, measured)
    return model, measured


@pytest.fixture(scope="module")
def low(recording, quick):
    return measure(recording, quick)[1]


@pytest.fixture(scope="module")
def results(simulate, quick, tmp_path_factory):
    """Results on disk: the same boutons, and one more, at much calcium; and a broken folder."""
    model, _ = measure(record(simulate, (*PLACES, ONE_MORE), 0.7, seed=7), quick)
    folder = tmp_path_factory.mktemp("results")
    write_result(model.result(), folder / "high.release", overwrite=False, figures=False)
    (folder / "broken.release").mkdir()
    (folder / "broken.release" / "analysis.json").write_text("{}")
    return folder


@pytest.fixture
def dock(qtbot, recording, low):
    made = AxonDock(ViewerModel())
    qtbot.addWidget(made)
    made.resize(390, 640)
    made.show()
    made.tabs.setCurrentIndex(1)
    made.model.open(*recording)
    made.model.settings = low.settings
    made.model.accept(made.model.request(), low)
    settle()
    yield made
    made.unlink()
    qtbot.waitUntil(lambda: not made.runner.busy, timeout=LONG_MS)


@pytest.fixture
def told(monkeypatch):
    """What notifications said."""
    said = []
    monkeypatch.setattr("napari.utils.notifications.show_error", said.append)
    return said


@pytest.fixture(scope="module")
def comparison(recording, low, results):
    entries = (Entry(name="control", folder=None), Entry(name="high", folder=results / "high.release"))
    present = (low, Pipeline(*recording))
    return core.compare(entries, present=present, settings=CompareSettings(), progress=lambda *_: None)


@pytest.fixture
def compared(dock, results, comparison):
    """The dock with what it found before."""
    add(dock, results / "high.release")
    part = dock.comparison
    part.list.table.item(0, 0).setText("control")
    part.compared.take(comparison, part.compared.entries, dock.model.measured)
    settle()
    return dock


def settle():
    for _ in range(12):  # plots take turns
        QApplication.processEvents()


def add(dock, path):
    """Drop a folder on the list."""
    mime = QMimeData()
    mime.setUrls([QUrl.fromLocalFile(str(path))])
    action, button = Qt.DropAction.CopyAction, Qt.MouseButton.LeftButton
    drop = QDropEvent(QPointF(5, 5), action, mime, button, Qt.KeyboardModifier.NoModifier)
    dock.comparison.list.table.dropEvent(drop)


def press(button):
    QTest.mouseClick(button, Qt.MouseButton.LeftButton)
    settle()


def compare(dock, qtbot):
    press(dock.comparison.compare_button)
    qtbot.waitUntil(lambda: not dock.runner.busy, timeout=LONG_MS)
    settle()


def names(dock):
    table = dock.comparison.list.table
    return [table.item(row, 0).text() for row in range(table.rowCount())]


def title(dock, name):
    tabs = dock.comparison.tabs
    tabs.setCurrentIndex([tabs.tabText(k) for k in range(tabs.count())].index(name))
    settle()


def test_the_analysis_of_the_window_is_in_the_list_and_one_alone_cannot_be_compared(dock):
    part = dock.comparison
    assert names(dock) == [dock.model.movie.name]
    assert part.list.table.item(0, 1).text() == "this window"
    assert not part.compare_button.isEnabled()
    assert "another recording" in part.state.text()
    assert not part.findings.isVisible()


def test_recordings_are_added_named_ordered_and_taken_out(dock, results, told, monkeypatch):
    part, table = dock.comparison, dock.comparison.list.table
    monkeypatch.setattr(QFileDialog, "getExistingDirectory", lambda *_: str(results / "high.release"))
    part.list.menu.actions()[0].trigger()
    assert names(dock)[1] == "high"
    assert part.compare_button.isEnabled()
    monkeypatch.setattr(
        QFileDialog, "getOpenFileName", lambda *_: (str(results / "high.release" / "analysis.json"), "")
    )
    part.list.menu.actions()[1].trigger()
    assert len(told) == 1
    assert "in the list already" in told[0]
    add(dock, results)
    assert len(told) == 2
    assert "holds no results" in told[1]

    table.item(1, 0).setText("4 mM Ca")
    table.item(0, 0).setText("  ")
    assert names(dock) == [dock.model.movie.name, "4 mM Ca"]
    table.selectRow(1)
    press(part.list.up_button)
    assert names(dock)[0] == "4 mM Ca"
    assert not part.list.up_button.isEnabled()
    assert part.folder.text().endswith("high.comparison")
    press(part.list.down_button)
    assert names(dock)[1] == "4 mM Ca"

    table.selectRow(0)
    press(part.list.remove_button)
    assert names(dock) == ["4 mM Ca"]
    dock.model.set_threshold(3.0)  # results again: what was taken out stays out
    assert names(dock) == ["4 mM Ca"]
    assert part.list.present_action.isEnabled()
    part.list.present_action.trigger()
    assert names(dock) == [dock.model.movie.name, "4 mM Ca"]


def test_findings_are_those_of_the_comparison(dock, results, qtbot):
    add(dock, results / "high.release")
    compare(dock, qtbot)
    part, comparison = dock.comparison, dock.comparison.compared.comparison
    assert [recording.name for recording in comparison.recordings] == names(dock)
    assert "4 of 4 boutons" in part.words.text()
    change = comparison.summary["pairs"][0]["p_release_change"]
    assert change > 0.2
    assert f"p_release changed by {change:.2f}" in part.words.text()
    assert part.changes.rowCount() == 4
    assert part.joint.rowCount() == 4
    assert not part.state.isVisible()


def test_selection_goes_both_ways(compared):
    part, model = compared.comparison, compared.model
    title(compared, "p_release")
    x, y = part.release.column_px(3)
    ratio = part.release.device_pixel_ratio
    at = QPoint(round(x / ratio), round(part.release.height() - y / ratio))
    QTest.mouseClick(part.release, Qt.MouseButton.LeftButton, pos=at)
    settle()
    assert model.selection.bouton == 3
    view, rows = part.tables["changes"]
    assert [rows.row(index.row())["bouton"] for index in view.selectionModel().selectedRows()] == [3]
    assert part.release._frame.get_x() == 1.5

    model.select(bouton=2)
    settle()
    assert part.release._frame.get_x() == 0.5
    title(compared, "Changes")
    row = rows.rows_where(bouton=4)[0]
    QTest.mouseClick(
        view.viewport(), Qt.MouseButton.LeftButton, pos=view.visualRect(view.model().index(row, 0)).center()
    )
    assert model.selection.bouton == 4


def test_ids_of_the_window_are_not_those_of_another_first_recording(compared, qtbot):
    part = compared.comparison
    part.list.table.selectRow(1)
    press(part.list.up_button)
    assert "have changed" in part.state.text()
    compare(compared, qtbot)
    conditions = part.compared.comparison.conditions
    here = conditions[conditions["recording"] == "control"]
    assert here["bouton"].tolist() == [2, 3, 4, 5]
    title(compared, "Changes")
    for first, mine in zip(here["bouton"], here["bouton_there"], strict=True):
        assert mine == first - 1
        view, rows = part.tables["changes"]
        at = view.visualRect(view.model().index(rows.rows_where(bouton=first)[0], 0)).center()
        QTest.mouseClick(view.viewport(), Qt.MouseButton.LeftButton, pos=at)
        assert compared.model.selection.bouton == mine
    compared.model.select(bouton=2)
    assert [rows.row(index.row())["bouton"] for index in view.selectionModel().selectedRows()] == [3]


def test_plots_hold_the_intervals_and_follow_the_theme(compared):
    part, viewer = compared.comparison, compared.viewer
    own = part.compared.comparison.conditions["p_release_own"].to_numpy()
    title(compared, "p_release")
    drawn = [line.get_ydata()[0] for line in part.release.axes.lines if len(line.get_ydata()) == 1]
    assert sorted(drawn) == pytest.approx(sorted(own))
    before = colours(part.release)
    title(compared, "n_sites")
    assert part.sites.axes.get_visible()
    viewer.theme = "light"
    title(compared, "p_release")
    assert all(new != old for new, old in zip(colours(part.release), before, strict=True))


def colours(plot):
    """Of the legend, the first recording and the paper."""
    mark = next(line for line in plot.axes.lines if line.get_marker() == "o")
    label = plot.axes.get_legend().get_texts()[0]
    return [to_hex(one) for one in (label.get_color(), mark.get_color(), plot.figure.get_facecolor())]


def test_a_later_threshold_changes_nothing_but_another_fit_does(compared):
    part, model = compared.comparison, compared.model
    model.set_threshold(4.0)
    assert not part.state.isVisible()
    model.accept(model.request(), replace(model.measured, release=copy.copy(model.measured.release)))
    assert "have changed" in part.state.text()


def test_faults_are_told_once(dock, results, told, qtbot):
    add(dock, results / "broken.release")
    compare(dock, qtbot)
    assert len(told) == 1
    assert "summary.json" in told[0]
    assert dock.comparison.compared.comparison is None
    dock.model.edit(dock.model.edits.exclude(1, "movement"))
    compare(dock, qtbot)
    assert len(told) == 2
    assert "analyse again" in told[1]


def test_comparing_can_be_stopped(dock, results, qtbot, monkeypatch, told):
    steps = []

    def slow(*_, progress, **__):
        while True:
            steps.append(None)
            progress(1, 2)

    monkeypatch.setattr(comparison_part, "compare", slow)
    add(dock, results / "high.release")
    press(dock.comparison.compare_button)
    qtbot.waitUntil(lambda: len(steps) > 3, timeout=LONG_MS)
    assert dock.progress.isVisible()
    press(dock.progress.button)
    qtbot.waitUntil(lambda: not dock.runner.busy, timeout=LONG_MS)
    assert told == []
    assert dock.comparison.compared.comparison is None


def test_export_writes_what_the_command_writes(compared, tmp_path, qtbot, monkeypatch, told):
    part = compared.comparison
    assert part.export_button.isEnabled()
    out = tmp_path / "drug.comparison"
    monkeypatch.setattr(QFileDialog, "getExistingDirectory", lambda *_: str(out))
    press(part.choose_button)
    part.export()
    qtbot.waitUntil(lambda: not compared.runner.busy, timeout=2 * LONG_MS)
    assert {"changes.csv", "joint.csv", "conditions.csv", "report.pdf", "comparison.json"} <= {
        path.name for path in out.iterdir()
    }
    saved = json.loads((out / "comparison.json").read_text())
    assert [one["name"] for one in saved["recordings"]] == names(compared)
    assert str(out) in part.state.text()

    asked = []
    monkeypatch.setattr(QMessageBox, "question", lambda *words: asked.append(words) or QMessageBox.StandardButton.No)
    part.export()
    assert len(asked) == 1
    assert not compared.runner.busy
    (tmp_path / "letters").mkdir()
    (tmp_path / "letters" / "mine.txt").write_text("mine")
    part.folder.setText(str(tmp_path / "letters"))
    part.export()
    assert len(told) == 1


def test_a_comparison_outlives_the_dock(compared, qtbot):
    words = compared.comparison.words.text()
    again = AxonDock(compared.viewer)
    qtbot.addWidget(again)
    assert again.comparison.words.text() == words
    assert names(again) == names(compared)
    again.unlink()
    assert np.isfinite(again.comparison.reach.value())


@pytest.mark.parametrize("width", [340, 1346])
def test_nothing_is_cut_at_the_side(compared, width):
    compared.resize(width, 400)
    settle()
    assert compared.horizontalScrollBar().maximum() == 0


def test_the_dock_settles_at_any_size(compared):
    part = compared.comparison
    part._exported(part.list.near())  # a sentence that wraps
    for width in range(320, 1000, 85):
        for height in (200, 330, 620):
            compared.resize(width, height)
            compared.tabs.setCurrentIndex(1 - compared.tabs.currentIndex())
            QApplication.processEvents()
    assert compared.width() == 915
    assert compared.height() == 620
