"""The Boutons dock, driven with mouse and keys on real layers."""

import gc
import weakref

import numpy as np
import pytest
from napari.components import ViewerModel
from napari.utils import interactions
from napari.utils._test_utils import read_only_mouse_event
from qtpy.QtCore import Qt
from qtpy.QtTest import QTest

from napari_boutonrelease.docks.boutons_dock import NO_RECORDING, BoutonsDock
from napari_boutonrelease.docks.layers import add_movie, set_movie_layer
from napari_boutonrelease.docks.panel import model_of
from napari_boutonrelease.recording import movie_from_array

PLACES = ((16.0, 12.0), (18.0, 32.0), (16.0, 52.0))
LONG_MS = 60_000


@pytest.fixture(scope="module")
def recording(simulate):
    boutons = (
        {"y_px": y, "x_px": x, "n_sites": 1, "p_site": p, "q_dff": 0.6, "f0_photons": 30.0}
        for (y, x), p in zip(PLACES, (0.4, 0.5, 0.8), strict=True)
    )
    return simulate(*boutons, seed=2, height_px=36, width_px=64, trials=20, trial_interval_s=0.5)


@pytest.fixture
def open_dock(recording, quick):
    """Put a movie that is ready to be searched into a viewer, and make the dock."""

    def make(viewer):
        movie, protocol = recording
        set_movie_layer(viewer, add_movie(viewer, movie))
        model = model_of(viewer)
        model.settings = quick
        model.open(movie, protocol)
        return BoutonsDock(viewer)

    return make


def close(qtbot, dock):
    dock.unlink()
    qtbot.waitUntil(lambda: not dock.runner.busy, timeout=LONG_MS)
    dock.deleteLater()


@pytest.fixture
def opened(open_dock, qtbot):
    """Open docks, and close them in the end."""
    docks = []

    def make(viewer=None):
        viewer = viewer or ViewerModel()
        docks.append(open_dock(viewer))
        return viewer, docks[-1]

    yield make
    for dock in docks:
        close(qtbot, dock)


@pytest.fixture
def found(opened, recall, qtbot):
    """A viewer and its dock after Find."""
    viewer, dock = opened()
    recall(dock)
    find(qtbot, dock)
    return viewer, dock


def find(qtbot, dock):
    dock.find.click()
    settle(qtbot, dock)


def settle(qtbot, dock):
    """Wait until everything is measured."""
    qtbot.waitUntil(lambda: dock.model.measured is not None and not dock.model.stale, timeout=LONG_MS)
    qtbot.waitUntil(lambda: not dock.runner.busy, timeout=LONG_MS)


def mouse(viewer, layer, *places_px, release=True, hover=False):
    """Come if wanted, press at the first place, move over the others, release at the last; (y, x) px of the layer."""

    def event(kind, place, *, dragging=False):
        world = layer.data_to_world(place)
        full = (*np.zeros(viewer.dims.ndim - 2), *world)
        return read_only_mouse_event(
            type=kind, position=full, pos=np.array(place, dtype=float) * 10, is_dragging=dragging, button=1,
            dims_displayed=list(viewer.dims.displayed), view_direction=None, up_direction=None,
        )  # fmt: skip

    if hover:
        interactions.mouse_move_callbacks(layer, event("mouse_move", places_px[0]))
    interactions.mouse_press_callbacks(layer, event("mouse_press", places_px[0]))
    for place in places_px[1:]:
        interactions.mouse_move_callbacks(layer, event("mouse_move", place, dragging=True))
    if release:
        interactions.mouse_release_callbacks(layer, event("mouse_release", places_px[-1]))


def place_of(dock, bouton):
    sites = dock.model.sites()
    at = int(np.flatnonzero(sites.bouton == bouton)[0])
    return float(sites.y_px[at]), float(sites.x_px[at])


def ids(dock):
    return dock.layers.marks.bouton.tolist()


def test_says_what_is_missing(qtbot):
    dock = BoutonsDock(ViewerModel())
    qtbot.addWidget(dock)
    assert dock.message.text() == NO_RECORDING
    assert not dock.find.isEnabled()
    assert not dock.tools.isEnabled()


def test_find_marks_the_boutons_and_lists_them(found):
    viewer, dock = found
    assert ids(dock) == [1, 2, 3]
    points = viewer.layers["boutons"]
    assert sorted(points.data[:, 1]) == pytest.approx(sorted(x for _, x in PLACES), abs=1.0)
    assert tuple(points.scale) == tuple(viewer.layers[0].scale[-2:])
    assert dock.table.rowCount() == 3
    assert dock.table.item(0, 0).text() == "1"
    assert float(dock.table.item(0, 2).text()) == pytest.approx(dock.model.table("boutons").p_release[0], abs=0.006)
    assert set(np.unique(viewer.layers["footprints"].data)) == {0, 1, 2, 3}
    assert dock.message.text().startswith("3 boutons")


def test_find_can_be_cancelled(opened, qtbot):
    _, dock = opened()
    dock.find.click()
    dock.progress.button.click()
    qtbot.waitUntil(lambda: not dock.runner.busy, timeout=LONG_MS)
    assert dock.model.measured is None
    find(qtbot, dock)
    assert ids(dock) == [1, 2, 3]


def test_a_click_adds_a_bouton_at_once_and_its_numbers_follow(found, qtbot):
    viewer, dock = found
    dock.modes["add"].click()
    points = viewer.layers["boutons"]
    assert viewer.layers.selection.active is points
    mouse(viewer, points, (28.0, 40.0))
    assert ids(dock) == [1, 2, 3, 4]
    assert points.features["bouton"].tolist() == [1, 2, 3, 4]
    assert points.features["found_by"].tolist()[-1] == "hand"
    assert dock.model.selection.bouton == 4
    assert dock.table.item(3, 1).text() == "hand"
    settle(qtbot, dock)
    assert dock.model.table("boutons").bouton.tolist() == [1, 2, 3, 4]
    assert viewer.layers["footprints"].data[28, 40] == 4


def test_a_click_on_a_bouton_adds_none(found):
    viewer, dock = found
    dock.modes["add"].click()
    mouse(viewer, viewer.layers["boutons"], place_of(dock, 2))
    assert ids(dock) == [1, 2, 3]
    assert len(viewer.layers["boutons"].data) == 3
    assert not dock.model.can_undo


def test_dragging_a_mark_moves_the_bouton_and_keeps_its_id(found, qtbot):
    viewer, dock = found
    dock.modes["select"].click()
    points, before = viewer.layers["boutons"], place_of(dock, 2)
    mouse(viewer, points, before, (before[0] + 1, before[1]), (before[0] + 4, before[1] + 3))
    assert ids(dock) == [1, 2, 3]
    assert place_of(dock, 2) == pytest.approx((before[0] + 4, before[1] + 3))
    assert points.data[1] == pytest.approx((before[0] + 4, before[1] + 3))
    settle(qtbot, dock)
    dock.undo.click()
    assert place_of(dock, 2) == pytest.approx(before)
    assert points.data[1] == pytest.approx(before)


def test_a_mark_dragged_onto_another_goes_back(found):
    viewer, dock = found
    dock.modes["select"].click()
    before = place_of(dock, 2)
    mouse(viewer, viewer.layers["boutons"], before, (17.0, 40.0), place_of(dock, 3))
    assert place_of(dock, 2) == pytest.approx(before)
    assert viewer.layers["boutons"].data[1] == pytest.approx(before)


def test_results_that_arrive_during_a_drag_wait_for_its_end(found, qtbot):
    viewer, dock = found
    dock.modes["select"].click()
    points, before = viewer.layers["boutons"], place_of(dock, 2)
    mouse(viewer, points, before, (before[0] + 1, before[1]), (before[0] + 3, before[1]), release=False)
    dock.model.accept(dock.model.request(), dock.model.measured)
    assert points.data[1] == pytest.approx((before[0] + 3, before[1]))


@pytest.mark.parametrize("how", ["button", "key in the list", "layer"])
def test_deleting(found, how):
    viewer, dock = found
    viewer.layers["boutons"].selected_data = {0}
    assert dock.model.selection.bouton == 1
    if how == "button":
        dock.delete.click()
    elif how == "layer":
        viewer.layers["boutons"].remove_selected()
    else:
        QTest.keyClick(dock.table, Qt.Key.Key_Delete)
    assert ids(dock) == [2, 3]
    assert viewer.layers["boutons"].features["bouton"].tolist() == [2, 3]
    dock.undo.click()
    assert ids(dock) == [1, 2, 3]


def test_all_boutons_can_go(found, qtbot):
    viewer, dock = found
    viewer.layers["boutons"].selected_data = {0, 1, 2}
    viewer.layers["boutons"].remove_selected()
    assert ids(dock) == []
    settle(qtbot, dock)
    assert len(dock.model.table("boutons")) == 0
    dock.modes["add"].click()
    mouse(viewer, viewer.layers["boutons"], (28.0, 40.0))
    assert len(ids(dock)) == 1


def test_merging_the_selected(found):
    _, dock = found
    assert not dock.merge.isEnabled()
    between = np.mean([place_of(dock, 2), place_of(dock, 3)], axis=0)
    dock.layers.select((2, 3))
    dock.merge.click()
    assert ids(dock) == [1, 2]
    assert place_of(dock, 2) == pytest.approx(tuple(between), abs=1.0)


def test_a_footprint_painted_anew(found, qtbot):
    viewer, dock = found
    dock.layers.select((2,))
    labels = viewer.layers["footprints"]
    dock.redraw.click()
    assert viewer.layers.selection.active is labels
    assert labels.selected_label == 2
    assert not dock.delete.isEnabled()
    y, x = (round(value) for value in place_of(dock, 2))
    mouse(viewer, labels, (y + 2.0, float(x)), (y + 2.0, x + 3.0), (y + 2.0, x + 5.0))
    painted = np.argwhere(labels.data == 2)
    dock.done.click()
    placed = dock.model.edits.placed[0]
    assert sorted(placed.pixels) == sorted(map(tuple, painted.tolist()))
    settle(qtbot, dock)
    assert np.array_equal(np.argwhere(labels.data == 2), painted)
    assert str(labels.mode) == "pan_zoom"
    assert viewer.layers["boutons"].visible
    assert ids(dock) == [1, 2, 3]


def test_painting_can_be_left(found):
    viewer, dock = found
    labels = viewer.layers["footprints"]
    before = labels.data.copy()
    dock.layers.select((2,))
    dock.redraw.click()
    mouse(viewer, labels, (28.0, 40.0), (28.0, 44.0))
    assert not np.array_equal(labels.data, before)
    dock.leave.click()
    assert np.array_equal(labels.data, before)
    assert not dock.model.can_undo


def test_painting_outside_of_redrawing_changes_nothing(found):
    viewer, dock = found
    labels = viewer.layers["footprints"]
    before = labels.data.copy()
    viewer.layers.selection.active = labels
    labels.mode = "paint"
    mouse(viewer, labels, (28.0, 40.0), (28.0, 44.0))
    assert np.array_equal(labels.data, before)
    assert not dock.model.can_undo


def test_undo_and_redo_by_key(found):
    viewer, dock = found
    viewer.layers["boutons"].add((28.0, 40.0))
    assert ids(dock) == [1, 2, 3, 4]
    dock.undo.click()
    assert ids(dock) == [1, 2, 3]
    dock.redo.click()
    assert ids(dock) == [1, 2, 3, 4]
    keymap = {str(key): act for key, act in viewer.layers["boutons"].keymap.items()}
    keymap["Ctrl+Z"](viewer.layers["boutons"])
    assert ids(dock) == [1, 2, 3]
    keymap["Ctrl+Shift+Z"](viewer.layers["boutons"])
    assert ids(dock) == [1, 2, 3, 4]


def test_changes_by_hand_survive_finding_again(found, qtbot):
    viewer, dock = found
    points = viewer.layers["boutons"]
    points.selected_data = {0}
    points.remove_selected()
    points.add((28.0, 40.0))
    settle(qtbot, dock)
    places = points.data[np.argsort(points.data[:, 1])]
    dock.model.choose("detection", false_discovery=0.02)
    find(qtbot, dock)
    assert points.data[np.argsort(points.data[:, 1])] == pytest.approx(places, abs=0.2)


def test_selection_is_the_same_everywhere(found):
    viewer, dock = found
    dock.model.select(bouton=3)
    assert viewer.layers["boutons"].selected_data == {2}
    assert {index.row() for index in dock.table.selectedIndexes()} == {2}
    dock.table.selectRow(0)
    assert dock.model.selection.bouton == 1
    assert viewer.layers["boutons"].selected_data == {0}
    viewer.layers["boutons"].selected_data = {1}
    assert dock.model.selection.bouton == 2


def test_preview_of_another_cut_computes_nothing_anew(found):
    viewer, dock = found
    measured = dock.model.measured
    dock.preview.setChecked(True)
    assert viewer.layers["evidence"].data.shape == (36, 64)
    loose = len(viewer.layers["would be found"].data)
    assert loose >= 3
    dock.false_share.setValue(0)
    assert len(viewer.layers["would be found"].data) <= loose
    assert "pass a cut of" in dock.preview_words.text()
    assert dock.model.settings.detection.false_discovery == pytest.approx(0.001)
    assert dock.model.measured is measured
    assert not dock.runner.busy
    dock.preview.setChecked(False)
    assert "evidence" not in viewer.layers
    assert "would be found" not in viewer.layers


def test_the_mean_image_lies_between_movie_and_marks(found):
    viewer, dock = found
    dock.mean.setChecked(True)
    names = [layer.name for layer in viewer.layers]
    assert names.index("mean") == 1
    assert names.index("boutons") > 1
    viewer.layers.remove("mean")
    assert not dock.mean.isChecked()


def test_settings_come_with_unit_meaning_and_range(found):
    _, dock = found
    width = dock.form.fields["bouton_um"]
    assert width.accessibleName() == "Width of a bouton (µm)"
    assert "half maximum" in width.toolTip()
    width.setValue(0.8)
    assert dock.model.settings.detection.bouton_um == 0.8
    dock.model.choose("detection", footprint="disc")
    assert dock.form.fields["footprint"].currentText() == "disc"


def test_an_axon_drawn_by_clicks_numbers_the_boutons_along_it(found, qtbot):
    viewer, dock = found
    dock.draw_axon.click()
    layer = viewer.layers["axon"]
    assert str(layer.mode) == "add_polyline"
    for place in ((16.0, 60.0), (17.0, 32.0), (16.0, 4.0)):
        mouse(viewer, layer, place, hover=True)
    layer._finish_drawing()  # as a double click does
    qtbot.waitUntil(lambda: dock.axon.path_px is not None, timeout=LONG_MS)
    assert dock.axon.path_px[[0, -1]] == pytest.approx(np.array([[16.0, 60.0], [16.0, 4.0]]))
    assert len(dock.axon.path_px) > 40
    assert np.all(np.diff(viewer.layers["boutons"].data[:, 1]) < 0)
    assert not dock.draw_axon.isChecked()
    assert dock.axon_words.text() == "Boutons are numbered along it."
    settle(qtbot, dock)
    assert np.all(np.diff(dock.model.table("boutons").axon_um) > 0)
    dock.clear_axon.click()
    assert np.all(np.diff(viewer.layers["boutons"].data[:, 0]) >= 0)
    settle(qtbot, dock)
    assert dock.model.table("boutons").axon_um.isna().all()


def test_an_axon_in_straight_lines(found, qtbot):
    viewer, dock = found
    dock.follow.setChecked(False)
    dock.draw_axon.click()
    viewer.layers["axon"].add_paths([np.array([[16.0, 60.0], [17.0, 32.0], [16.0, 4.0]])])
    qtbot.waitUntil(lambda: dock.axon.path_px is not None, timeout=LONG_MS)
    assert dock.axon.path_px == pytest.approx(np.array([[16.0, 60.0], [17.0, 32.0], [16.0, 4.0]]))
    assert len(viewer.layers["axon"].data) == 1


def test_a_line_of_one_point_is_no_axon(found, qtbot):
    viewer, dock = found
    dock.draw_axon.click()
    layer = viewer.layers["axon"]
    mouse(viewer, layer, (16.0, 60.0))
    layer._finish_drawing()
    qtbot.wait(20)
    assert dock.axon.path_px is None
    assert len(layer.data) == 0


def test_another_recording_takes_the_layers_away(found, recording):
    viewer, dock = found
    simulation_movie, protocol = recording
    other = movie_from_array(
        simulation_movie.read(0, simulation_movie.shape[0]), frame_interval_s=0.01, pixel_size_um=0.1
    )
    dock.preview.setChecked(True)
    dock.model.open(other, protocol)
    assert [layer.name for layer in viewer.layers] == ["movie"]
    assert ids(dock) == []
    assert dock.find.text() == "Find boutons"


def test_layers_taken_out_by_hand_come_back_with_the_next_change(found):
    viewer, dock = found
    viewer.layers.remove("boutons")
    assert not dock.tools.isEnabled()
    dock.model.edit(dock.model.edits.add(28.0, 40.0))
    assert viewer.layers["boutons"].features["bouton"].tolist() == [1, 2, 3, 4]


def test_two_viewers_do_not_mix(found, opened):
    viewer, dock = found
    other_viewer, other = opened()
    assert other.model is not dock.model
    assert "boutons" not in other_viewer.layers
    viewer.layers["boutons"].add((28.0, 40.0))
    assert ids(other) == []
    assert other.model.edits != dock.model.edits


def test_a_dock_closed_and_opened_again(make_napari_viewer, opened, qtbot):
    viewer, dock = opened(make_napari_viewer())
    viewer.window.add_dock_widget(dock, name="Boutons")
    find(qtbot, dock)
    dock.preview.setChecked(True)
    viewer.window.remove_dock_widget(dock)
    assert "evidence" not in viewer.layers
    viewer.layers["boutons"].add((28.0, 40.0))
    again = BoutonsDock(viewer)
    viewer.window.add_dock_widget(again)
    assert ids(again) == [1, 2, 3, 4]
    assert again.undo.isEnabled()


def test_nothing_of_a_closed_viewer_stays(open_dock, qtbot):
    viewer = ViewerModel()
    dock = open_dock(viewer)
    find(qtbot, dock)
    dock.preview.setChecked(True)
    gone = [weakref.ref(one) for one in (viewer, dock.layers, dock.axon, dock.pictures, dock.model)]
    close(qtbot, dock)
    del viewer, dock
    qtbot.waitUntil(lambda: gc.collect() >= 0 and not any(one() for one in gone), timeout=5000)


def test_fits_beside_the_image(found, qtbot):
    _, dock = found
    assert dock.body.minimumSizeHint().width() <= 330
    dock.layers.select((2,))
    dock.redraw.click()
    assert dock.body.minimumSizeHint().width() <= 330
    dock.leave.click()
