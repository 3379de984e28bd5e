"""The Recording dock, used as a person uses it: layers, fields, buttons."""

from __future__ import annotations

import gc
import threading
import warnings
import weakref

import numpy as np
import pytest
import tifffile
from napari.components import ViewerModel
from qtpy.QtCore import QPoint, Qt
from qtpy.QtGui import QAction
from qtpy.QtTest import QTest
from qtpy.QtWidgets import QFileDialog, QInputDialog, QLabel

from napari_boutonrelease.docks import worker
from napari_boutonrelease.docks.layers import current_frame, movie_layer, movie_of_layer, show_frame, text_overlay
from napari_boutonrelease.docks.panel import model_of
from napari_boutonrelease.docks.recording_dock import RecordingDock
from napari_boutonrelease.errors import AnalysisWarning, InputError
from napari_boutonrelease.recording import Protocol, RegularStimuli, read_protocol
from napari_boutonrelease.sample_data import fast_pair
from napari_boutonrelease.simulation import presets


@pytest.fixture
def viewer():
    return ViewerModel()


@pytest.fixture
def dock(qtbot, viewer):
    made = RecordingDock(viewer)
    qtbot.addWidget(made)
    made.resize(400, 640)
    made.show()
    yield made
    made.unlink()


@pytest.fixture
def opened(dock, files, when_idle, monkeypatch):
    """The dock after "Open movie... > A file..."."""
    monkeypatch.setattr(QFileDialog, "getOpenFileName", lambda *_: (str(files.movie), ""))
    choose_menu(dock, "A file...")
    when_idle(dock)
    return dock


def choose_menu(dock, text):
    (action,) = (one for one in dock.open_button.menu().actions() if one.text() == text)
    assert isinstance(action, QAction)
    action.trigger()


def type_into(field, text):
    field.setFocus()
    field.selectAll()
    QTest.keyClick(field, Qt.Key.Key_Delete)
    QTest.keyClicks(field, text)
    QTest.keyClick(field, Qt.Key.Key_Return)


def click(button):
    at = QPoint(8, button.height() // 2)  # on a checkbox only the box and its words can be clicked
    QTest.mouseClick(button, Qt.MouseButton.LeftButton, Qt.KeyboardModifier.NoModifier, at)


def enter_stimuli(dock, **values):
    for key, value in values.items():
        type_into(dock.form.stimuli[key], str(value))


def test_an_opened_movie_is_a_lazy_layer_with_units(opened, viewer, files):
    layer = movie_layer(viewer)
    assert layer.name == "axon"
    assert layer.data.chunks[0] == (1,) * len(files.frames)
    np.testing.assert_allclose(layer.scale, (0.01, 0.18, 0.18), rtol=1e-4)
    assert [str(unit) for unit in layer.units] == ["second", "micrometer", "micrometer"]
    np.testing.assert_array_equal(np.asarray(layer.data[7]), files.frames[7])
    assert movie_of_layer(layer).files == (files.movie,)


def test_calibration_comes_from_the_file_and_says_so(opened):
    interval = opened.form.calibration["frame_interval_s"]
    assert interval.text() == "0.01"
    assert "ImageJ" in interval.origin.text()
    assert interval.stated() is None, "the protocol leaves to the file what the file states"


def test_a_typed_value_wins_and_shows_what_the_file_says(opened):
    enter_stimuli(opened, first_s=0.5, trials=1)
    interval = opened.form.calibration["frame_interval_s"]
    type_into(interval, "0.02")
    assert interval.origin.text().startswith("typed here; ImageJ")
    assert "0.01" in interval.origin.text()
    assert opened.model.protocol.frame_interval_s == 0.02
    assert movie_layer(opened.viewer).scale[0] == 0.02


def test_the_form_makes_the_protocol(opened, files):
    stimuli = files.protocol.stimuli
    enter_stimuli(
        opened,
        first_s=stimuli.first_s,
        trials=stimuli.trials,
        trial_interval_s=stimuli.trial_interval_s,
        pulses=2,
        pulse_interval_s=stimuli.pulse_interval_s,
    )
    type_into(opened.form.calibration["camera_offset"], f"{files.protocol.camera_offset:g}")
    assert not opened.error.isVisible()
    assert opened.model.protocol == files.protocol
    assert opened.analyse_button.isEnabled()


@pytest.mark.parametrize(
    ("values", "words"),
    [
        ({"trials": "many", "first_s": "0.5"}, "Trials must be a whole number, without a unit (given many)"),
        ({"trials": "4"}, "First pulse is missing"),
        ({"first_s": "0.5", "trials": "4", "pulses": "2"}, "“Between pulses” is missing: with “Pulses a trial” = 2"),
        ({"first_s": "0.5", "trials": "4", "trial_interval_s": "-1"}, "“Between trials” must be greater than 0"),
        ({"first_s": "900", "trials": "1"}, "the movie ends after 0"),
    ],
)
def test_a_wrong_form_says_in_one_sentence_which_field(opened, values, words):
    enter_stimuli(opened, **values)
    assert opened.error.isVisible()
    assert words in opened.error.text()
    assert "_s" not in opened.error.text(), "fields are called by the names they have in the form"
    assert not opened.analyse_button.isEnabled()
    assert opened.model.protocol is None


def test_protocols_are_saved_and_loaded(opened, files, tmp_path, monkeypatch):
    monkeypatch.setattr(QFileDialog, "getOpenFileName", lambda *_: (str(files.protocol_file), ""))
    click(opened.load_button)
    assert opened.model.protocol == files.protocol
    assert opened.form.calibration["camera_offset"].origin.text() == "protocol"
    assert files.protocol_file.name in opened.about.text()
    monkeypatch.setattr(QFileDialog, "getSaveFileName", lambda *_: (str(tmp_path / "again"), ""))
    click(opened.save_button)
    assert read_protocol(tmp_path / "again.toml") == files.protocol


def test_a_table_of_times_replaces_the_regular_protocol(opened, tmp_path, monkeypatch):
    table = tmp_path / "pulses.csv"
    table.write_text("trial,pulse,time_s\n1,1,0.5\n1,2,0.6\n2,1,2.0\n")
    monkeypatch.setattr(QFileDialog, "getOpenFileName", lambda *_: (str(table), ""))
    opened.form.kind.setCurrentIndex(1)
    opened.form.kind.activated.emit(1)
    click(opened.form.table_button)
    assert opened.form.table_words.text() == "3 pulses in 2 trials, from pulses.csv"
    np.testing.assert_allclose(opened.timing.stimulus_s, [[0.5, 0.6], [2.0, np.nan]])
    table.write_text("trial,pulse,time_s\n1,1,zero\n")
    click(opened.form.table_button)
    assert "line 2, column time_s" in opened.error.text()


def test_a_fixed_response_shape_goes_into_the_protocol(opened):
    enter_stimuli(opened, first_s=0.5, trials=1)
    click(opened.form.fixed_shape)
    assert "Rise is missing" in opened.error.text()
    type_into(opened.form.shape["rise_s"], "0.003")
    type_into(opened.form.shape["decay_s"], "0.06")
    assert not opened.error.isVisible()
    assert opened.model.protocol.reporter.decay_s == 0.06


def test_a_sample_fills_the_form_at_once(dock, viewer, monkeypatch):
    def few_trials(name, preset_recipe=presets.preset_recipe):
        return preset_recipe(name, trials=3)

    monkeypatch.setattr(presets, "preset_recipe", few_trials)
    ((frames, layer, _),) = fast_pair()
    viewer.add_image(frames, **layer)
    assert dock.movies.currentText() == layer["name"]
    assert dock.model.protocol == layer["metadata"]["protocol"]
    assert dock.form.stimuli["trials"].text() == "3"
    assert dock.analyse_button.isEnabled()


def test_a_protocol_beside_the_movie_is_found(dock, files, tmp_path, when_idle):
    tifffile.imwrite(tmp_path / "cell.tif", files.frames[:200])
    (tmp_path / "cell.protocol.toml").write_text(
        "[recording]\nframe_interval_s = 0.01\n[stimuli]\nfirst_s = 0.5\ntrials = 1\n"
    )
    dock.open_button.open_source(tmp_path / "cell.tif")
    when_idle(dock)
    assert dock.model.protocol.stimuli.first_s == 0.5
    assert "cell.protocol.toml" in dock.about.text()


def test_the_choice_follows_the_layers(dock, viewer):
    first, second = np.zeros((4, 3, 3), np.uint16), np.ones((5, 3, 3), np.uint16)
    viewer.add_image(first, name="one")
    viewer.add_image(np.zeros((3, 3)), name="a picture")
    viewer.add_points(np.zeros((1, 3)), name="points")
    viewer.add_image(second, name="two")
    listed = [dock.movies.itemText(k) for k in range(dock.movies.count())]
    assert listed == ["one", "two"]
    assert dock.movies.currentText() == "one", "what was chosen stays chosen"
    dock.movies.setCurrentIndex(1)
    dock.movies.activated.emit(1)
    assert movie_layer(viewer).name == "two"
    viewer.layers["two"].name = "renamed"
    assert dock.movies.currentText() == "renamed"
    viewer.layers.remove(viewer.layers["renamed"])
    assert movie_layer(viewer).name == dock.movies.currentText() == "one"
    viewer.layers.clear()
    assert movie_layer(viewer) is None
    assert dock.movies.currentIndex() == -1


def test_a_layer_that_napari_read_is_opened_again_with_its_metadata(dock, viewer, files):
    from napari.layers._source import layer_source

    with layer_source(path=str(files.movie)):
        viewer.add_image(tifffile.imread(files.movie), name="dropped")
    movie = movie_of_layer(viewer.layers["dropped"])
    assert movie.files == (files.movie,)
    assert movie.frame_interval_s == pytest.approx(0.01)


def test_a_cropped_layer_is_taken_as_it_is(dock, viewer, files):
    from napari.layers._source import layer_source

    with layer_source(path=str(files.movie)):
        viewer.add_image(files.frames[:50], name="cropped", scale=(20, 200, 200), units=("ms", "nm", "nm"))
    movie = movie_of_layer(viewer.layers["cropped"])
    assert movie.files == ()
    assert (movie.frame_interval_s, movie.pixel_size_um) == (pytest.approx(0.02), pytest.approx(0.2))
    assert movie.found_in["frame_interval_s"] == "layer's scale"


def test_channels_are_asked_for(dock, tmp_path, when_idle, monkeypatch):
    stack = np.random.default_rng(0).integers(0, 99, (6, 2, 8, 9), dtype=np.uint16)
    tifffile.imwrite(tmp_path / "two.tif", stack, imagej=True, metadata={"axes": "TCYX"})
    monkeypatch.setattr(QInputDialog, "getItem", lambda _self, _title, _text, items, *_: (items[1], True))
    dock.open_button.open_source(tmp_path / "two.tif")
    when_idle(dock)
    np.testing.assert_array_equal(np.asarray(movie_layer(dock.viewer).data), stack[:, 1])
    assert dock.model.settings.recording.channel == 1


def test_a_file_that_is_no_movie_is_a_sentence(dock, tmp_path, when_idle, monkeypatch):
    told = []
    monkeypatch.setattr(worker.notifications, "show_error", told.append)
    (tmp_path / "notes.tif").write_text("not a movie")
    dock.open_button.open_source(tmp_path / "notes.tif")
    when_idle(dock)
    assert len(told) == 1
    assert "notes.tif" in told[0]


def test_the_current_frame_is_told_in_words_and_the_overlay_put_back(opened, viewer):
    overlay = text_overlay(viewer)
    overlay.text = "mine"
    opened._overlay = None  # as if the words had come before the dock
    enter_stimuli(opened, first_s=0.5, trials=2, trial_interval_s=2.0, pulses=2, pulse_interval_s=0.05)
    show_frame(viewer, 50)
    assert current_frame(viewer) == 50
    assert overlay.visible
    assert overlay.text == "frame 50 · 0.500 s · trial 1, pulse 1 · stimulus in this frame"
    show_frame(viewer, 257)
    assert overlay.text == "frame 257 · 2.570 s · trial 2, pulse 2 · 20 ms after it"
    show_frame(viewer, 10)
    assert overlay.text.endswith("before trial 1")
    opened.unlink()
    assert not overlay.visible


def test_a_click_on_the_time_axis_goes_to_the_frame(opened, viewer, qtbot):
    enter_stimuli(opened, first_s=0.5, trials=2, trial_interval_s=2.0)
    opened.ensureWidgetVisible(opened.plot)
    qtbot.waitUntil(lambda: bool(opened.plot.figure.axes and opened.plot.figure.axes[0].lines))
    axes = opened.plot.figure.axes[0]
    x, y = axes.transData.transform((3.0, 0.5))
    ratio = opened.plot.device_pixel_ratio
    QTest.mouseClick(
        opened.plot,
        Qt.MouseButton.LeftButton,
        Qt.KeyboardModifier.NoModifier,
        QPoint(round(x / ratio), round(opened.plot.height() - y / ratio)),
    )
    assert abs(current_frame(viewer) - 300) <= 5


def test_analysing_shows_progress_and_then_the_quality(opened, files, quick, when_idle, qtbot):
    opened.load_protocol(files.protocol_file)
    opened.model.settings = quick
    click(opened.analyse_button)
    assert opened.progress.isVisible()
    assert not opened.analyse_button.isEnabled()
    when_idle(opened)
    assert not opened.progress.isVisible()
    assert len(opened.model.measured.places.bouton) == 3
    words = opened.quality.text()
    for title in ("Movement", "Bleaching", "Saturation", "Gain", "Frames left out"):
        assert f"<b>{title}</b>" in words
    click(opened.follow)
    assert not opened.model.settings.recording.correct_motion
    assert "analyse again" in opened.state.text()


def test_cancel_leaves_everything_as_it_was(opened, files, quick, when_idle):
    opened.load_protocol(files.protocol_file)
    opened.model.settings = quick
    click(opened.analyse_button)
    click(opened.progress.button)
    when_idle(opened)
    assert opened.model.measured is None
    assert opened.analyse_button.isEnabled()


def test_a_newer_request_replaces_the_running_one(opened, files, quick, when_idle):
    opened.load_protocol(files.protocol_file)
    opened.model.settings = quick
    click(opened.analyse_button)
    opened.model.choose("detection", false_discovery=0.1)
    worker.run_analysis_step(opened.model)
    opened.model.choose("detection", false_discovery=0.2)
    worker.run_analysis_step(opened.model)
    when_idle(opened)
    assert opened.model.measured.settings.detection.false_discovery == 0.2


def test_a_fault_in_the_work_is_one_sentence(dock, when_idle, monkeypatch):
    told = []
    monkeypatch.setattr(worker.notifications, "show_error", told.append)

    def work(progress):
        raise InputError("The lamp was off: switch it on.")

    dock.runner.run(work, pytest.fail, words="Looking", kind="look")
    when_idle(dock)
    assert told == ["The lamp was off: switch it on."]


def test_a_new_dock_shows_what_the_closed_one_held(qtbot, opened, files, viewer):
    opened.load_protocol(files.protocol_file)
    opened.unlink()
    again = RecordingDock(viewer)
    qtbot.addWidget(again)
    assert again.model is opened.model
    assert again.movies.currentText() == "axon"
    assert again.form.protocol() == files.protocol
    again.unlink()


def test_keys_that_delete_stay_in_the_dock(dock):
    got = []
    around = QLabel()
    around.keyPressEvent = lambda event: got.append(event.key())
    dock.setParent(around)
    for key in (Qt.Key.Key_Delete, Qt.Key.Key_Backspace, Qt.Key.Key_F5):
        QTest.keyClick(dock, key)
    dock.setParent(None)
    assert got == [Qt.Key.Key_F5]


def test_two_viewers_stay_apart(qtbot, files, when_idle):
    docks = [RecordingDock(ViewerModel()) for _ in range(2)]
    for one in docks:
        qtbot.addWidget(one)
    docks[0].open_button.open_source(files.movie)
    when_idle(docks[0])
    docks[0].load_protocol(files.protocol_file)
    assert docks[0].model is not docks[1].model
    assert docks[1].model.movie is None
    assert len(docks[1].viewer.layers) == 0
    for one in docks:
        one.unlink()


def test_closing_lets_go_of_the_viewer(make_napari_viewer, files, when_idle, qtbot):
    viewer = make_napari_viewer()
    dock = RecordingDock(viewer)
    viewer.window.add_dock_widget(dock, name="Recording")
    dock.open_button.open_source(files.movie)
    when_idle(dock)
    dock.load_protocol(files.protocol_file)
    dock.analyse()
    model = dock.model
    viewer.window.remove_dock_widget(dock)
    qtbot.waitUntil(lambda: not dock.runner.busy, timeout=20_000)
    assert model.measured is None, "the work nobody waits for has ended"
    viewer.dims.set_point(0, 0.3)
    model.select(trial=1)  # nothing that is gone is called
    assert not any("napari-worker" in thread.name for thread in threading.enumerate())


def test_a_model_does_not_keep_its_viewer():
    viewer = ViewerModel()
    model, gone = model_of(viewer), weakref.ref(viewer)
    del viewer
    gc.collect()
    assert gone() is None
    assert model.movie is None


def test_a_protocol_may_state_everything(opened):
    stimuli = RegularStimuli(first_s=0.2, trials=2, trial_interval_s=1.0, pulses=3, pulse_interval_s=0.1)
    protocol = Protocol(
        frame_interval_s=0.011, exposure_s=0.01, row_time_s=1e-5, pixel_size_um=0.2, camera_offset=-5.0, stimuli=stimuli
    )
    opened.form.show_protocol(protocol, opened.model.movie, origin="from elsewhere")
    assert opened.form.protocol() == protocol


def test_a_folder_of_trials_is_one_recording(dock, tmp_path, when_idle, monkeypatch):
    frames = np.random.default_rng(0).integers(90, 110, (3, 40, 8, 9), dtype=np.uint16)
    for k, trial in enumerate(frames):
        tifffile.imwrite(tmp_path / f"trial_{k}.tif", trial, imagej=True, metadata={"axes": "TYX", "finterval": 0.02})
    monkeypatch.setattr(QFileDialog, "getExistingDirectory", lambda *_: str(tmp_path))
    choose_menu(dock, "A folder, one file a trial...")
    when_idle(dock)
    enter_stimuli(dock, first_s=0.1, trials=3)
    assert movie_layer(dock.viewer).data.shape == (120, 8, 9)
    assert "3 files" in dock.about.text()
    np.testing.assert_allclose(dock.timing.stimulus_s[:, 0], [0.1, 0.9, 1.7])
    show_frame(dock.viewer, 40)
    assert dock.frame_words.text().endswith("before trial 2"), "a trial does not reach into the next file"


def test_doubts_about_a_recording_are_told_and_other_warnings_are_not(dock, when_idle, monkeypatch):
    told = []
    monkeypatch.setattr(worker.notifications, "show_warning", told.append)

    def work(progress):
        warnings.warn("The image is dim: check the lamp.", AnalysisWarning, stacklevel=1)
        warnings.warn("a library's own affair", RuntimeWarning, stacklevel=1)

    dock.runner.run(work, lambda _: None, words="Looking", kind="look")
    when_idle(dock)
    assert told == ["The image is dim: check the lamp."]


def test_an_analysis_goes_with_its_viewer(files, qtbot):
    viewer = ViewerModel()
    dock = RecordingDock(viewer)
    model, runner = weakref.ref(dock.model), weakref.ref(dock.runner)
    dock.unlink()
    dock.deleteLater()
    del viewer, dock
    qtbot.waitUntil(lambda: gc.collect() >= 0 and model() is None and runner() is None, timeout=5000)
