"""The Responses dock, driven with mouse and keys."""

from dataclasses import replace
from itertools import pairwise

import numpy as np
import pytest
from napari.components import ViewerModel
from qtpy.QtCore import QEvent, QPoint, QPointF, Qt
from qtpy.QtGui import QMouseEvent, QWheelEvent
from qtpy.QtTest import QTest
from qtpy.QtWidgets import QApplication

from napari_boutonrelease.analysis.model import AnalysisModel, compute
from napari_boutonrelease.docks.layers import add_movie, set_movie_layer
from napari_boutonrelease.docks.panel import model_of
from napari_boutonrelease.docks.responses_dock import NOTHING_YET, ResponsesDock

N_TRIALS = 24


@pytest.fixture(scope="module")
def recording(simulate, quick):
    """A movie of three boutons, its protocol, and what was measured."""
    boutons = (
        {"y_px": 16.0, "x_px": x, "n_sites": n, "p_site": p, "q_dff": 0.6, "f0_photons": 30.0}
        for x, n, p in ((12.0, 1, 0.4), (32.0, 2, 0.5), (52.0, 1, 0.8))
    )
    movie, protocol = simulate(*boutons, seed=2, height_px=32, width_px=64, trials=N_TRIALS, trial_interval_s=0.6)
    model = AnalysisModel()
    model.open(movie, protocol)
    model.settings = quick
    measured = compute(model.request())
    assert len(measured.places.bouton) == 3
    return movie, protocol, measured


def fill(model, recording):
    movie, protocol, measured = recording
    model.open(movie, protocol)
    model.settings = measured.settings
    model.accept(model.request(), measured)


@pytest.fixture
def viewer(recording):
    made = ViewerModel()
    set_movie_layer(made, add_movie(made, recording[0]))
    return made


@pytest.fixture
def dock(qtbot, viewer, recording):
    """A dock that shows what was measured, at the size it has at the bottom of a small window."""
    made = ResponsesDock(viewer)
    qtbot.addWidget(made)
    made.resize(1346, 230)
    made.show()
    made.activateWindow()  # keys go to the active window only
    qtbot.waitUntil(made.isActiveWindow)
    fill(made.model, recording)
    settle()
    yield made
    made.unlink()


def settle():
    for _ in range(12):  # plots take turns
        QApplication.processEvents()


def on(plot, x_px, y_px):
    """From the plot's own pixels, y upwards, to those of Qt."""
    ratio = plot.device_pixel_ratio
    return QPoint(round(x_px / ratio), round((plot.figure.bbox.height - y_px) / ratio))


def send_mouse(plot, kind, at, *, buttons=Qt.MouseButton.LeftButton):
    button = Qt.MouseButton.NoButton if kind == QEvent.Type.MouseMove else Qt.MouseButton.LeftButton
    where = QPointF(at)
    event = QMouseEvent(
        kind, where, QPointF(plot.mapToGlobal(at)), button, buttons, Qt.KeyboardModifier.NoModifier
    )  # fmt: skip
    QApplication.sendEvent(plot, event)
    settle()


def drag(plot, start, stop, *, steps=4):
    send_mouse(plot, QEvent.Type.MouseButtonPress, start)
    for k in range(1, steps + 1):
        send_mouse(plot, QEvent.Type.MouseMove, start + (stop - start) * k / steps)
    send_mouse(plot, QEvent.Type.MouseButtonRelease, stop, buttons=Qt.MouseButton.NoButton)


def click(plot, at):
    QTest.mouseClick(plot, Qt.MouseButton.LeftButton, pos=at)
    settle()


def press(widget, key):
    QTest.keyClick(widget, key)
    settle()


def frame_of(model, trial, pulse=1):
    timing = model.measured.timing
    start = timing.stimulus_s[trial - 1, pulse - 1]
    return np.flatnonzero(timing.frame_start_s <= start)[-1]


def hollow_trials(dock):
    """Trials whose point in the amplitude plot is hollow."""
    lines = [line for line in dock.amplitudes.axes.lines if line.get_fillstyle() == "none" and line.get_marker() == "o"]
    left_out = next(line for line in lines if line.get_markersize() < 6)
    return np.asarray(left_out.get_xdata()).astype(int).tolist()


def test_says_what_to_do_before_anything_is_measured(qtbot, viewer):
    dock = ResponsesDock(viewer)
    qtbot.addWidget(dock)
    dock.show()
    settle()
    assert dock.message.isVisible()
    assert dock.message.text() == NOTHING_YET
    assert not dock.content.isVisible()
    press(dock, Qt.Key.Key_Down)  # nothing to select, nothing to fail
    press(dock, Qt.Key.Key_X)
    assert dock.model.selection.bouton is None
    dock.unlink()


def test_shows_the_first_bouton_at_once(dock):
    assert dock.content.isVisible()
    assert not dock.message.isVisible()
    assert [dock.bouton.itemText(i) for i in range(dock.bouton.count())] == ["1", "2", "3"]
    assert dock.bouton.currentText() == "1"
    amplitude = dock.model.measured.amplitudes.amplitude[0, :, 0]
    drawn = np.concatenate([line.get_ydata() for line in dock.amplitudes.axes.lines if len(line.get_xdata()) > 2])
    np.testing.assert_allclose(np.sort(drawn), np.sort(amplitude))
    assert not dock.again.isEnabled()


def test_dragging_the_line_calls_all_boutons_anew(dock):
    model, plot = dock.model, dock.amplitudes
    before = model.measured.counts.calls.n_called.copy()
    start = on(plot, 100, plot.threshold_px())
    wanted = float(np.quantile(model.measured.amplitudes.amplitude[0, :, 0], 0.9))
    stop = on(plot, 100, plot.axes.transData.transform((0, wanted))[1])
    drag(plot, start, stop)
    calls = model.measured.counts.calls
    assert calls.threshold[0] == pytest.approx(wanted, abs=0.02)
    assert calls.n_called[0, 0] == np.sum(model.measured.amplitudes.amplitude[0, :, 0] > calls.threshold[0])
    assert (calls.n_called[1:, 0] < before[1:, 0]).any()  # the others are called anew as well
    assert calls.threshold[1] / calls.threshold[0] == pytest.approx(
        model.measured.amplitudes.noise_sd[1] / model.measured.amplitudes.noise_sd[0]
    )
    assert plot.threshold_px() == pytest.approx(plot.figure.bbox.height - stop.y() * plot.device_pixel_ratio, abs=2)
    assert dock.threshold.value() == pytest.approx(model.settings.calls.threshold_sd, abs=0.006)
    assert not model.stale  # nothing but the calls rests on the threshold


def test_costs_of_the_threshold_stand_beside_it(dock):
    model = dock.model
    dock.threshold.setValue(4.0)
    settle()
    counts = model.measured.counts
    assert model.settings.calls.threshold_sd == 4.0
    words = dock.costs.text()
    assert f"{counts.calls.n_called[0, 0]} of {N_TRIALS} called" in words
    loose = words
    dock.threshold.setValue(1.0)
    settle()
    assert dock.costs.text() != loose
    noise = float(dock.costs.text().split("·")[1].split()[0])
    missed = float(dock.costs.text().split("·")[2].split()[0])
    counts = model.measured.counts
    assert noise == pytest.approx(counts.calls.false_calls_expected[0, 0], rel=0.06)
    assert missed == pytest.approx(counts.missed_expected[0, 0], rel=0.06)


def test_line_cannot_be_dragged_below_zero(dock):
    plot = dock.amplitudes
    drag(plot, on(plot, 100, plot.threshold_px()), on(plot, 100, 5))
    assert dock.model.settings.calls.threshold_sd > 0


def test_click_on_a_point_selects_its_trial_and_goes_to_its_frame(dock, viewer):
    trial = 17
    click(dock.amplitudes, on(dock.amplitudes, *dock.amplitudes.point_px(trial - 1)))
    assert dock.model.selection.trial == trial
    assert viewer.dims.current_step[0] == frame_of(dock.model, trial)
    assert dock.trial.value() == trial


def test_click_on_a_call_selects_bouton_and_trial(dock, viewer):
    dock.pulse.setCurrentIndex(1)
    click(dock.raster, on(dock.raster, *dock.raster.cell_px(2, 8)))
    assert (dock.model.selection.bouton, dock.model.selection.trial) == (3, 9)
    assert viewer.dims.current_step[0] == frame_of(dock.model, 9, pulse=2)
    assert dock.bouton.currentText() == "3"


def test_click_on_an_overlaid_trial_selects_it(dock, viewer):
    axes = dock.trials.axes
    lines = next(one for one in axes.collections if len(one.get_segments()) == N_TRIALS)
    peaks = [segment[:, 1].max() for segment in lines.get_segments()]
    largest = int(np.argmax(peaks))
    segment = lines.get_segments()[largest]
    at = axes.transData.transform(segment[np.argmax(segment[:, 1])])
    at[1] = min(at[1], axes.bbox.y1 - 2)
    click(dock.trials, on(dock.trials, *at))
    assert dock.model.selection.trial is not None
    chosen = dock.model.selection.trial
    assert viewer.dims.current_step[0] == frame_of(dock.model, chosen)
    assert peaks[chosen - 1] > 0.8 * peaks[largest]


def test_click_on_the_trace_goes_there(dock, viewer):
    axes = dock.trace.axes
    time_s = float(dock.model.measured.timing.stimulus_s[10, 0]) + 0.2
    click(dock.trace, on(dock.trace, axes.transData.transform((time_s, 0))[0], axes.bbox.y0 + 0.5 * axes.bbox.height))
    interval = dock.model.measured.timing.frame_interval_s
    pixel_s = (dock.trace.view_s[1] - dock.trace.view_s[0]) / axes.bbox.width
    assert viewer.dims.current_step[0] * interval == pytest.approx(time_s, abs=interval + pixel_s)
    assert dock.model.selection.trial == 11


def test_wheel_zooms_the_trace_drag_pans_double_click_shows_all(dock, viewer):
    plot = dock.trace
    whole = plot.view_s
    axes = plot.axes
    middle = on(plot, axes.bbox.x0 + 0.5 * axes.bbox.width, axes.bbox.y0 + 0.5 * axes.bbox.height)
    for _ in range(5):
        wheel = QWheelEvent(
            QPointF(middle), QPointF(plot.mapToGlobal(middle)), QPoint(0, 0), QPoint(0, 120),
            Qt.MouseButton.NoButton, Qt.KeyboardModifier.NoModifier, Qt.ScrollPhase.NoScrollPhase, False,
        )  # fmt: skip
        QApplication.sendEvent(plot, wheel)
    settle()
    start, stop = plot.view_s
    assert (stop - start) < 0.4 * (whole[1] - whole[0])
    assert start < 0.5 * sum(whole) < stop
    assert axes.get_xlim() == pytest.approx((start, stop))
    frame, trial = viewer.dims.current_step[0], dock.model.selection.trial
    drag(plot, middle, middle + QPoint(-60, 0))
    moved = plot.view_s
    assert moved[0] - start == pytest.approx(60 * (stop - start) / (axes.bbox.width / plot.device_pixel_ratio), rel=0.1)
    assert moved[1] - moved[0] == pytest.approx(stop - start)
    assert (viewer.dims.current_step[0], dock.model.selection.trial) == (frame, trial)  # a drag is no click
    send_mouse(plot, QEvent.Type.MouseButtonDblClick, middle)
    assert plot.view_s == whole


def test_trace_marks_the_frame_that_the_viewer_shows(dock, viewer):
    viewer.dims.set_current_step(0, 200)
    settle()
    marks = {float(np.mean(line.get_xdata())) for line in dock.trace.axes.lines if len(line.get_xdata()) == 2}
    interval = dock.model.measured.timing.frame_interval_s
    assert any(abs(one - 200.5 * interval) < 1e-9 for one in marks)


def test_keys_walk_through_boutons_and_trials(dock, viewer):
    model = dock.model
    dock.trace.setFocus()
    press(dock.trace, Qt.Key.Key_Down)
    press(dock.trace, Qt.Key.Key_Down)
    press(dock.trace, Qt.Key.Key_Down)  # no further than the last
    assert model.selection.bouton == 3
    press(dock.trace, Qt.Key.Key_Up)
    assert model.selection.bouton == 2
    for _ in range(3):
        press(dock.trace, Qt.Key.Key_Right)
    press(dock.trace, Qt.Key.Key_Left)
    assert model.selection.trial == 2
    assert viewer.dims.current_step[0] == frame_of(model, 2)
    for name, words in (("↑", dock.bouton.toolTip()), ("←", dock.trial.toolTip()), ("X", dock.exclude.toolTip())):
        assert name in words
        assert name in dock.help.text()


def test_arrow_keys_in_the_threshold_change_the_threshold(dock):
    dock.threshold.setFocus()
    before = dock.model.settings.calls.threshold_sd
    press(dock.threshold, Qt.Key.Key_Up)
    assert dock.model.settings.calls.threshold_sd == pytest.approx(before + 0.1)
    assert dock.model.selection.bouton == 1


def test_trial_left_out_with_a_reason_ends_up_in_the_tables(dock, qtbot):
    model = dock.model
    model.select(trial=5)
    settle()
    assert dock.exclude.text() == "Leave trial 5 out"
    field = dock.reason.lineEdit()
    field.setFocus()
    QTest.keyClicks(field, "axis moved")  # the x is part of the word
    assert model.edits.excluded == ()
    QTest.mouseClick(dock.exclude, Qt.MouseButton.LeftButton)
    settle()
    assert model.edits.excluded == ((5, "axis moved"),)
    assert hollow_trials(dock) == [5]
    assert dock.exclude.text() == "Take trial 5 back"
    assert dock.again.isEnabled()
    with qtbot.waitSignal(dock.runner.changed, timeout=60_000, check_params_cb=lambda: not dock.runner.busy):
        QTest.mouseClick(dock.again, Qt.MouseButton.LeftButton)
    settle()
    assert not model.stale
    assert not dock.again.isEnabled()
    responses = model.table("responses")
    mine = responses[responses["trial"] == 5]
    assert (mine["used"] == 0).all()
    assert (mine["reason"] == "axis moved").all()
    assert (responses[responses["trial"] != 5]["used"] == 1).all()
    assert (model.table("boutons")["trials"] == N_TRIALS - 1).all()
    assert hollow_trials(dock) == [5]  # still to be seen
    assert f"of {N_TRIALS - 1} called" in dock.costs.text()


def test_key_leaves_a_trial_out_and_takes_it_back(dock):
    model = dock.model
    press(dock, Qt.Key.Key_X)
    assert model.edits.excluded == ()  # no trial is selected
    model.select(trial=9)
    press(dock, Qt.Key.Key_X)
    assert model.edits.excluded == ((9, "by hand"),)
    assert hollow_trials(dock) == [9]
    press(dock, Qt.Key.Key_X)
    assert model.edits.excluded == ()
    assert hollow_trials(dock) == []
    model.undo()
    settle()
    assert hollow_trials(dock) == [9]


def test_reason_is_not_carried_over_to_the_next_trial(dock):
    dock.model.select(trial=3)
    settle()
    dock.reason.setCurrentText("movement")
    QTest.mouseClick(dock.exclude, Qt.MouseButton.LeftButton)
    dock.model.select(trial=4)
    settle()
    QTest.mouseClick(dock.exclude, Qt.MouseButton.LeftButton)
    assert dock.model.edits.excluded == ((3, "movement"), (4, "by hand"))


def test_follows_what_others_choose(dock):
    dock.model.choose("calls", threshold_sd=3.0)  # as a form would: results are not made anew
    settle()
    assert dock.again.isEnabled()
    dock.model.set_threshold(3.0)
    dock.model.select(bouton=2, trial=4, pulse=2)
    settle()
    assert dock.threshold.value() == 3.0
    assert not dock.again.isEnabled()
    assert (dock.bouton.currentText(), dock.trial.value(), dock.pulse.currentText()) == ("2", 4, "2")


def test_only_moving_parts_are_drawn_while_the_threshold_moves(dock, monkeypatch):
    drawn = []
    for plot in (dock.trace, dock.trials, dock.amplitudes, dock.raster):
        monkeypatch.setattr(plot, "fill", lambda _, plot=plot: drawn.append(plot))
    dock.model.set_threshold(3.1)
    settle()
    assert drawn == []
    dock.model.select(bouton=2)
    settle()
    assert set(drawn) == {dock.trace, dock.trials, dock.amplitudes}  # the raster shows all boutons already


def test_two_viewers_stay_apart(dock, qtbot, recording):
    other_viewer = ViewerModel()
    other = ResponsesDock(other_viewer)
    qtbot.addWidget(other)
    other.show()
    fill(other.model, recording)
    dock.model.select(bouton=3, trial=6)
    dock.model.set_threshold(3.7)
    settle()
    assert other.model.selection.bouton == 1
    assert other.threshold.value() == 2.5
    assert model_of(other_viewer) is not dock.model
    other.unlink()


def test_closed_dock_no_longer_listens(closed_for_good, recording):
    viewer = closed_for_good(ResponsesDock, lambda model: fill(model, recording))
    model_of(viewer).set_threshold(3.0)
    set_movie_layer(viewer, add_movie(viewer, recording[0]))
    viewer.dims.set_current_step(0, 30)
    settle()


def test_colours_follow_the_theme(dock, viewer):
    dark = dock.trace.figure.get_facecolor()
    viewer.theme = "light"
    settle()
    assert dock.trace.figure.get_facecolor() != dark
    assert dock.trace.axes is not None
    dock.model.select(bouton=2)
    settle()
    assert dock.bouton.currentText() == "2"


def test_plots_stand_below_one_another_in_a_narrow_dock(dock):
    dock.resize(400, 700)
    settle()
    places = [plot.geometry() for plot in (dock.trace, dock.trials, dock.amplitudes, dock.raster)]
    assert all(one.bottom() < other.top() for one, other in pairwise(places))
    assert dock.horizontalScrollBar().maximum() == 0
    dock.resize(1346, 230)
    settle()
    assert len({plot.geometry().top() for plot in (dock.trace, dock.trials, dock.amplitudes, dock.raster)}) == 1


@pytest.fixture
def with_failures(dock, recording):
    """The dock on a recording in which pulse 1 of two trials seems to have reached no bouton."""
    movie, protocol, measured = recording
    failed = measured.failed
    suspected, probability = np.zeros_like(failed.suspected), failed.found.probability.copy()
    suspected[[4, 9], 0] = True
    probability[[4, 9], 0] = 0.97
    doubtful = replace(failed, suspected=suspected, found=replace(failed.found, probability=probability))
    fill(dock.model, (movie, protocol, replace(measured, failed=doubtful)))
    settle()
    return dock


def marked(plot):
    """Trials marked above a plot."""
    line = next(line for line in plot.axes.lines if line.get_marker() == "v")
    return np.asarray(line.get_xdata()).tolist()


def test_suspected_stimulus_failures_are_marked_at_their_pulse(with_failures):
    dock = with_failures
    assert marked(dock.raster) == marked(dock.amplitudes) == [5, 10]
    assert "no stimulus?" in dock.raster.axes.get_title(loc="right")
    at = on(dock.raster, *dock.raster.cell_px(1, 4))
    assert "0.97" in dock.raster._words_at(at.x(), at.y())
    at = on(dock.raster, *dock.raster.cell_px(1, 5))
    assert "no bouton" not in dock.raster._words_at(at.x(), at.y())
    dock.pulse.setCurrentIndex(1)
    settle()
    assert marked(dock.raster) == marked(dock.amplitudes) == []


def test_one_button_leaves_all_suspected_failures_out_and_undo_takes_them_back(with_failures):
    dock, model = with_failures, with_failures.model
    model.edit(model.edits.exclude(5, "movement"))
    settle()
    assert dock.leave_out.text() == "Leave out 1 suspected failure"
    model.undo()
    settle()
    assert dock.leave_out.text() == "Leave out 2 suspected failures"
    click(dock.leave_out, dock.leave_out.rect().center())
    assert model.edits.excluded == ((5, "suspected stimulus failure"), (10, "suspected stimulus failure"))
    assert not dock.leave_out.isVisible()
    assert marked(dock.raster) == []
    assert dock.again.isEnabled()
    assert {5, 10} <= set(hollow_trials(dock))
    model.undo()
    settle()
    assert model.edits.excluded == ()
    assert marked(dock.raster) == [5, 10]


def test_without_suspicion_there_is_no_button(dock):
    assert not dock.leave_out.isVisible()
    assert marked(dock.raster) == []
    assert "no stimulus?" not in dock.raster.axes.get_title(loc="right")
