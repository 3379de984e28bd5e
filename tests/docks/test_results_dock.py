"""The Results dock: tables that sort, follow the selection and can be copied; results that are written and opened."""

from __future__ import annotations

import io
from dataclasses import replace
from threading import Event

import numpy as np
import pandas as pd
import pytest
from napari.components import ViewerModel
from qtpy.QtCore import QPoint, Qt
from qtpy.QtGui import QDesktopServices
from qtpy.QtTest import QTest
from qtpy.QtWidgets import QApplication, QFileDialog, QLabel, QMessageBox

from napari_boutonrelease.analysis.columns import BOUTONS, RESPONSES
from napari_boutonrelease.analysis.hand_edits import HandEdits
from napari_boutonrelease.analysis.model import AnalysisModel, compute
from napari_boutonrelease.analysis.plan import Goals, make_plan, plan_table
from napari_boutonrelease.analysis.plan_columns import PLAN
from napari_boutonrelease.analysis.plan_inputs import measured_boutons
from napari_boutonrelease.docks import plan_part, reopen, worker
from napari_boutonrelease.docks.layers import add_movie, current_frame, movie_layer, set_movie_layer
from napari_boutonrelease.docks.results_dock import ResultsDock
from napari_boutonrelease.docks.table_model import TableModel, cell_text, flags_in_words
from napari_boutonrelease.errors import OutputError
from napari_boutonrelease.flags import FLAGS
from napari_boutonrelease.recording import open_movie
from napari_boutonrelease.reports import nwb_details
from napari_boutonrelease.reports.apart import write_result_apart

SPONTANEOUS = 3


@pytest.fixture(scope="module")
def measured(files, quick):
    model = AnalysisModel()
    model.settings = quick
    model.open(open_movie(files.movie), files.protocol)
    return model, compute(model.request())


@pytest.fixture
def dock(qtbot, measured, quick):
    source, values = measured
    viewer = ViewerModel()
    set_movie_layer(viewer, add_movie(viewer, source.movie))
    made = ResultsDock(viewer)
    qtbot.addWidget(made)
    made.resize(420, 620)
    made.show()
    made.activateWindow()
    qtbot.waitUntil(made.isActiveWindow)
    made.model.settings = quick
    made.model.open(source.movie, source.protocol)
    request = made.model.request()
    made.model.accept(request, values)
    yield made
    made.unlink()


def click_row(tab, row):
    at = tab.view.visualRect(tab.view.model().index(row, 0)).center()
    QTest.mouseClick(tab.view.viewport(), Qt.MouseButton.LeftButton, Qt.KeyboardModifier.NoModifier, at)


def selected_rows(tab):
    return sorted(index.row() for index in tab.view.selectionModel().selectedRows())


def click(button):
    at = QPoint(8, button.height() // 2)
    QTest.mouseClick(button, Qt.MouseButton.LeftButton, Qt.KeyboardModifier.NoModifier, at)


def header_click(tab, name):
    header = tab.view.horizontalHeader()
    section = tab.rows.frame.columns.get_loc(name)
    at = QPoint(header.sectionViewportPosition(section) + 10, header.height() // 2)
    QTest.mouseClick(header.viewport(), Qt.MouseButton.LeftButton, Qt.KeyboardModifier.NoModifier, at)


def test_the_tables_are_those_of_the_analysis(dock):
    for k, name in enumerate(("boutons", "pulses", "responses", "spontaneous")):
        dock.tabs.setCurrentIndex(k)
        tab = dock.tables[name]
        pd.testing.assert_frame_equal(tab.rows.frame, dock.model.table(name))


def test_a_click_on_a_header_sorts_and_another_turns_round(dock):
    tab = dock.tables["boutons"]
    header_click(tab, "p_release")
    first = tab.rows.frame["p_release"].to_numpy()
    assert np.all(np.diff(first) >= 0)
    header_click(tab, "p_release")
    assert np.all(np.diff(tab.rows.frame["p_release"].to_numpy()) <= 0)
    assert set(first) == set(dock.model.table("boutons")["p_release"])


def test_empty_cells_come_last_either_way():
    rows = TableModel(BOUTONS)
    frame = pd.DataFrame({name: [np.nan, 2.0, 1.0] for name in BOUTONS.names})
    rows.show(frame)
    column = BOUTONS.names.index("ppr")
    rows.sort(column)
    assert rows.frame["ppr"].tolist()[:2] == [1.0, 2.0]
    rows.sort(column, Qt.SortOrder.DescendingOrder)
    assert rows.frame["ppr"].tolist()[:2] == [2.0, 1.0]
    assert np.isnan(rows.frame["ppr"].iloc[2])


def test_a_clicked_row_is_selected_everywhere(dock):
    tab = dock.tables["boutons"]
    header_click(tab, "p_release")
    click_row(tab, 2)
    assert dock.model.selection.bouton == tab.rows.frame["bouton"].iloc[2]


def test_a_clicked_response_selects_its_trial_and_pulse(dock):
    dock.tabs.setCurrentIndex(list(dock.tables).index("responses"))
    click_row(dock.tables["responses"], 5)
    row = dock.tables["responses"].rows.frame.iloc[5]
    chosen = dock.model.selection
    assert (chosen.bouton, chosen.trial, chosen.pulse) == (row.bouton, row.trial, row.pulse)


def test_what_is_selected_elsewhere_is_selected_here(dock):
    tab = dock.tables["boutons"]
    header_click(tab, "p_release")
    dock.model.select(bouton=2)
    (row,) = selected_rows(tab)
    assert tab.rows.frame["bouton"].iloc[row] == 2
    dock.tabs.setCurrentIndex(list(dock.tables).index("responses"))
    dock.model.select(bouton=3, trial=4, pulse=2)
    (row,) = selected_rows(dock.tables["responses"])
    assert dock.tables["responses"].rows.frame.iloc[row][["bouton", "trial", "pulse"]].tolist() == [3, 4, 2]


def test_the_selection_survives_sorting(dock):
    dock.model.select(bouton=3)
    tab = dock.tables["boutons"]
    for name in ("p_release", "p_release_lo"):
        header_click(tab, name)
        (row,) = selected_rows(tab)
        assert tab.rows.frame["bouton"].iloc[row] == 3
        assert dock.model.selection.bouton == 3


def test_only_the_selected_bouton(dock):
    dock.tabs.setCurrentIndex(list(dock.tables).index("pulses"))
    click(dock.only_selected)
    dock.model.select(bouton=2)
    assert set(dock.tables["pulses"].rows.frame["bouton"]) == {2}
    dock.model.select(bouton=1)
    assert set(dock.tables["pulses"].rows.frame["bouton"]) == {1}
    click(dock.only_selected)
    assert set(dock.tables["pulses"].rows.frame["bouton"]) == {1, 2, 3}


def test_a_spontaneous_release_moves_the_viewer_to_its_frame(dock):
    dock.tabs.setCurrentIndex(SPONTANEOUS)
    tab = dock.tables["spontaneous"]
    frame = dock.model.table("spontaneous")
    if not len(frame):  # the recording has none: show one
        frame = pd.DataFrame(
            {"bouton": [2], "time_s": [3.215], "amplitude": [0.4], "amplitude_se": [0.1], "score": [4.0]}
        )
        tab.rows.show(frame)
    click_row(tab, 0)
    assert dock.model.selection.bouton == frame["bouton"].iloc[0]
    assert current_frame(dock.viewer) == int(frame["time_s"].iloc[0] / 0.01 + 1e-6)


def test_copied_rows_carry_their_header(dock):
    tab = dock.tables["boutons"]
    click_row(tab, 1)
    QTest.keyClick(tab.view, Qt.Key.Key_C, Qt.KeyboardModifier.ControlModifier)
    pasted = pd.read_csv(io.StringIO(QApplication.clipboard().text()), sep="\t")
    assert tuple(pasted.columns) == BOUTONS.names
    assert pasted["bouton"].tolist() == [2]
    assert pasted["p_release"].iloc[0] == pytest.approx(dock.model.table("boutons")["p_release"].iloc[1])


def test_without_selected_rows_the_whole_table_is_copied(dock):
    dock.tabs.setCurrentIndex(list(dock.tables).index("responses"))
    dock.tables["responses"].view.clearSelection()
    click(dock.copy_button)
    pasted = pd.read_csv(io.StringIO(QApplication.clipboard().text()), sep="\t")
    assert tuple(pasted.columns) == RESPONSES.names
    assert len(pasted) == len(dock.model.table("responses"))


def test_delete_in_a_table_stays_in_the_dock(dock):
    got = []
    around = QLabel()
    around.keyPressEvent = lambda event: got.append(event.key())
    dock.setParent(around)
    QTest.keyClick(dock.tables["boutons"].view, Qt.Key.Key_Delete)
    QTest.keyClick(dock.tables["boutons"].view, Qt.Key.Key_F5)
    dock.setParent(None)
    assert got == [Qt.Key.Key_F5]


def test_headers_and_flags_explain_themselves(dock):
    rows = dock.tables["boutons"].rows
    section = BOUTONS.names.index("q")
    tip = rows.headerData(section, Qt.Orientation.Horizontal, Qt.ItemDataRole.ToolTipRole)
    assert "one vesicle" in tip
    assert "dF/F" in tip
    words = flags_in_words("edge;silent")
    assert FLAGS["edge"].meaning in words
    assert FLAGS["silent"].advice in words


@pytest.mark.parametrize(
    ("value", "text"),
    [
        (np.nan, ""),
        (None, ""),
        (pd.NA, ""),
        (3, "3"),
        (np.int64(7), "7"),
        (2.0, "2"),
        (0.123456, "0.1235"),
        (True, "1"),
    ],
)
def test_cells_are_short(value, text):
    assert cell_text(value) == text


def test_export_goes_beside_the_movie_and_asks_before_it_replaces(dock, files, when_idle, monkeypatch):
    assert dock.folder.text() == str(files.movie.with_name("axon.release"))
    click(dock.export_button)
    when_idle(dock)
    folder = files.movie.with_name("axon.release")
    assert {"boutons.csv", "analysis.json", "report.pdf"} <= {path.name for path in folder.iterdir()}
    assert str(folder) in dock.state.text()
    before = (folder / "analysis.json").stat().st_ino

    asked = []

    def refuse(_parent, _title, text):
        asked.append(text)
        return QMessageBox.StandardButton.No

    monkeypatch.setattr(QMessageBox, "question", refuse)
    click(dock.export_button)
    when_idle(dock)
    assert len(asked) == 1
    assert (folder / "analysis.json").stat().st_ino == before
    monkeypatch.setattr(QMessageBox, "question", lambda *_: QMessageBox.StandardButton.Yes)
    click(dock.export_button)
    when_idle(dock)
    assert (folder / "analysis.json").stat().st_ino != before

    shown = []
    monkeypatch.setattr(QDesktopServices, "openUrl", lambda url: shown.append(url.toLocalFile()))
    click(dock.report_button)
    assert shown == [str(folder / "report.pdf")]


def test_an_nwb_file_comes_with_the_export_where_it_is_wanted(dock, tmp_path, when_idle):
    pytest.importorskip("pynwb")
    dock.folder.setText(str(tmp_path / "axon.release"))
    click(dock.nwb)
    click(dock.export_button)
    when_idle(dock)
    assert str(tmp_path) in dock.state.text()
    assert (tmp_path / "axon.release" / "recording.nwb").stat().st_size > 0


def test_what_an_nwb_file_lacks_is_said_before_anything_is_written(dock, tmp_path, monkeypatch):
    monkeypatch.setattr(nwb_details, "find_spec", lambda _name: None)
    dock.folder.setText(str(tmp_path / "axon.release"))
    click(dock.nwb)
    click(dock.export_button)
    assert not dock.runner.busy
    assert "needs the package pynwb" in dock.state.text()
    assert not list(tmp_path.iterdir())


def test_a_folder_of_other_things_is_not_replaced(dock, tmp_path, when_idle):
    (tmp_path / "diary.txt").write_text("dear")
    dock.folder.setText(str(tmp_path))
    click(dock.export_button)
    when_idle(dock)
    assert "choose another folder" in dock.state.text()
    assert [path.name for path in tmp_path.iterdir()] == ["diary.txt"]


def test_export_asks_where_to_write_what_has_no_place_of_its_own(dock, tmp_path, when_idle, monkeypatch):
    dock.folder.clear()  # as for a movie that is no file
    assert dock.export_button.text() == "Export..."
    monkeypatch.setattr(QFileDialog, "getExistingDirectory", lambda *_: "")
    click(dock.export_button)
    assert not dock.runner.busy
    monkeypatch.setattr(QFileDialog, "getExistingDirectory", lambda *_: str(tmp_path))
    click(dock.export_button)
    when_idle(dock)
    assert dock.folder.text() == str(tmp_path)
    assert dock.export_button.text() == "Export"
    assert (tmp_path / "boutons.csv").is_file()


def test_what_has_changed_since_cannot_be_exported(dock):
    assert dock.export_button.isEnabled()
    dock.model.edit(HandEdits().exclude(3, "artefact"))
    assert not dock.export_button.isEnabled()
    assert "analyse again" in dock.state.text()
    dock.model.undo()
    assert dock.export_button.isEnabled()


def test_a_failing_process_is_an_output_error(dock, tmp_path):
    (tmp_path / "file").write_text("")
    with pytest.raises(OutputError, match="is a file"):
        write_result_apart(dock.model.result(), tmp_path / "file", overwrite=False)


def test_writing_apart_ends_when_its_progress_says_so(dock, tmp_path):
    def stop(done, total):
        if done > 3:
            raise worker.Cancelled

    with pytest.raises(worker.Cancelled):
        write_result_apart(dock.model.result(), tmp_path / "half", overwrite=False, progress=stop)
    assert not (tmp_path / "half").exists()


def test_reopen_asks_for_a_movie_that_has_moved(dock, files, tmp_path, when_idle, monkeypatch, qtbot):
    write_result_apart(dock.model.result(), tmp_path / "away" / "axon.release", overwrite=False)
    saved = tmp_path / "away" / "axon.release" / "analysis.json"
    saved.write_text(saved.read_text().replace(str(files.movie), str(tmp_path / "gone" / "other.tif")))
    monkeypatch.setattr(QFileDialog, "getOpenFileName", lambda *_: (str(saved), ""))
    monkeypatch.setattr(QFileDialog, "getOpenFileNames", lambda *_: ([str(files.movie)], ""))
    before = dock.model.table("boutons")
    click(dock.reopen_button)
    qtbot.waitUntil(lambda: not dock.runner.busy and dock.model.measured is not None, timeout=60_000)
    pd.testing.assert_frame_equal(dock.model.table("boutons"), before)
    assert movie_layer(dock.viewer) is dock.viewer.layers[-1]


def test_another_movie_than_the_one_analysed_is_refused(dock, files, tmp_path, when_idle, monkeypatch):
    write_result_apart(dock.model.result(), tmp_path / "axon.release", overwrite=False)
    other = tmp_path / "other.tif"
    content = bytearray(files.movie.read_bytes())
    content[len(content) // 2] ^= 1
    other.write_bytes(content)
    told = []
    monkeypatch.setattr(worker.notifications, "show_error", told.append)
    reopen.reopen(dock.viewer, tmp_path / "axon.release" / "analysis.json", movie_files=(other,))
    when_idle(dock)
    assert len(told) == 1
    assert "its content differs" in told[0]


def test_nothing_measured_is_said(qtbot):
    made = ResultsDock(ViewerModel())
    qtbot.addWidget(made)
    assert "Nothing was measured yet" in made.state.text()
    assert not made.export_button.isEnabled()
    assert made.tables["boutons"].rows.rowCount() == 0
    made.unlink()


# planning


@pytest.fixture
def planner(dock, when_idle, monkeypatch):
    """The tab Plan, with few simulations; a call presses its button and waits."""
    monkeypatch.setattr(plan_part, "USUAL_SIMULATIONS", 50)
    dock.tabs.setCurrentIndex(list(dock.tables).index("plan"))

    def press():
        click(dock.plan.button)
        when_idle(dock)
        return dock.tables["plan"].rows.frame

    return press


def enter(field, text):
    QTest.mouseClick(field, Qt.MouseButton.LeftButton)
    field.selectAll()
    QTest.keyClicks(field, text)


def test_the_plan_is_that_of_the_command_line(dock, planner):
    assert dock.tables["plan"].rows.rowCount() == 0
    wanted = make_plan(
        measured_boutons(dock.model.table("boutons"), q_over_noise=None, q_cv=None),
        goals=Goals(width=0.2, sites=None, ppr=1.5, change=0.2, change_sd=0.1, power=0.8),
        n_boutons=None,
        n_simulations=50,
        rng=np.random.default_rng(dock.model.settings.seed),
        progress=None,
    )
    pd.testing.assert_frame_equal(planner(), plan_table(wanted))


def test_other_goals_need_other_trials(dock, planner, when_idle):
    before = planner()
    enter(dock.plan.goals["width"], "0.1")
    enter(dock.plan.goals["change"], "-0.25")
    QTest.keyClick(dock.plan.goals["change"], Qt.Key.Key_Return)
    when_idle(dock)
    after = dock.tables["plan"].rows.frame
    needed = [frame.set_index(["bouton", "goal"])["trials_needed"] for frame in (before, after)]
    assert needed[1][1, "width"] > 2 * needed[0][1, "width"]
    assert set(after.loc[after["goal"] == "change", "wanted"]) == {-0.25}


def test_the_plan_follows_the_selection_both_ways(dock, planner):
    tab, frame = dock.tables["plan"], planner()
    dock.model.select(bouton=2)
    assert [frame["bouton"].iloc[row] for row in selected_rows(tab)] == [2] * 4
    third = frame["bouton"].tolist().index(3)
    click_row(tab, third)
    assert dock.model.selection.bouton == 3
    together = frame["goal"].tolist().index("paired_change")
    click_row(tab, together)  # belongs to no bouton
    assert dock.model.selection.bouton == 3
    click(dock.only_selected)
    assert set(tab.rows.frame["bouton"]) == {3}


def test_a_plan_is_copied(dock, planner):
    frame = planner()
    dock.tables["plan"].view.clearSelection()
    click(dock.copy_button)
    pasted = pd.read_csv(io.StringIO(QApplication.clipboard().text()), sep="\t")
    assert tuple(pasted.columns) == PLAN.names
    assert len(pasted) == len(frame)


@pytest.mark.parametrize(
    ("goal", "text", "words"),
    [
        ("width", "", "width is empty: give a number, for example 0.2"),
        ("ppr", "much", "PPR must be a number"),
        ("power", "1.5", "power must lie between 0 and 1"),
        ("change", "0", "change must lie between -1 and 1 and differ from 0"),
    ],
)
def test_a_goal_that_cannot_be_is_said(dock, planner, monkeypatch, goal, text, words):
    monkeypatch.setattr(worker.notifications, "show_error", lambda _: None)
    enter(dock.plan.goals[goal], text or " ")
    assert planner() is None
    assert words in dock.state.text()


def test_planning_can_be_cancelled(dock, planner, when_idle, monkeypatch, qtbot):
    begun, go_on = Event(), Event()

    def wait_and_plan(boutons, *, progress, **rest):
        begun.set()
        assert go_on.wait(20)
        return make_plan(boutons, progress=progress, **rest)

    monkeypatch.setattr(plan_part, "make_plan", wait_and_plan)
    click(dock.plan.button)
    qtbot.waitUntil(begun.is_set)
    assert dock.progress.words.text() == "Planning"
    assert not dock.plan.button.isEnabled()
    click(dock.progress.button)
    go_on.set()
    when_idle(dock)
    assert dock.plan.frame is None
    assert dock.plan.button.isEnabled()


def test_a_plan_goes_with_the_boutons_it_was_made_for(dock, planner):
    frame = planner()
    dock.model.set_threshold(4.0)  # calls change, what a plan rests on does not
    pd.testing.assert_frame_equal(dock.tables["plan"].rows.frame, frame)
    measured = dock.model.measured
    dock.model.accept(dock.model.request(), replace(measured, release=replace(measured.release)))
    assert dock.tables["plan"].rows.rowCount() == 0
