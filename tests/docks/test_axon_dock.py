"""The Axon dock: the map and the plot of any number, and what is selected."""

import numpy as np
import pytest
from napari.components import ViewerModel
from qtpy.QtCore import QPoint, Qt
from qtpy.QtGui import QTextDocumentFragment
from qtpy.QtTest import QTest

from napari_boutonrelease.analysis.selection import measure_selection, selection_summary
from napari_boutonrelease.docks.axon_dock import AxonDock
from napari_boutonrelease.docks.axon_plot import choices
from napari_boutonrelease.docks.bouton_marks import NO_NUMBER, SILENT, sequential
from napari_boutonrelease.docks.layers import add_movie, set_movie_layer
from napari_boutonrelease.docks.panel import model_of

LONG_MS = 60_000


@pytest.fixture(scope="module")
def recording(simulate):
    """Two boutons that release, and one that never does."""
    boutons = (
        {"y_px": y, "x_px": x, "n_sites": 1, "p_site": p, "q_dff": 0.6, "f0_photons": 40.0}
        for y, x, p in ((15.0, 12.0, 0.4), (18.0, 32.0, 0.0), (21.0, 52.0, 0.8))
    )
    return simulate(*boutons, seed=3, height_px=36, width_px=64, trials=20, trial_interval_s=0.5)


@pytest.fixture
def empty(recording, quick, qtbot):
    viewer = ViewerModel()
    movie, protocol = recording
    set_movie_layer(viewer, add_movie(viewer, movie))
    model = model_of(viewer)
    model.settings = quick
    model.open(movie, protocol)
    dock = AxonDock(viewer)
    dock.resize(1000, 240)
    dock.show()
    yield viewer, dock
    dock.unlink()
    qtbot.waitUntil(lambda: not dock.runner.busy, timeout=LONG_MS)
    dock.deleteLater()


@pytest.fixture
def shown(empty, recall, qtbot):
    viewer, dock = empty
    recall(dock)
    dock.layers.measure()
    qtbot.waitUntil(lambda: dock.model.measured is not None and not dock.runner.busy, timeout=LONG_MS)
    drawn(qtbot, dock)
    return viewer, dock


def drawn(qtbot, dock):
    """Wait until the plot shows the latest."""
    qtbot.waitUntil(lambda: not dock.plot._outdated, timeout=LONG_MS)


def click(dock, bouton, *, beside_px=0):
    x, y = dock.plot.screen_px(bouton)
    ratio = dock.plot.device_pixel_ratio
    at = QPoint(round(x / ratio) + beside_px, round(dock.plot.height() - y / ratio))
    QTest.mouseClick(dock.plot, Qt.MouseButton.LeftButton, pos=at)


def test_says_that_nothing_was_measured(empty):
    _, dock = empty
    assert dock.shown.count() == 0
    assert not dock.colour.isEnabled()
    assert not dock.text.isVisible()


def words(dock):
    """What the dock says of all boutons, without its markup."""
    return QTextDocumentFragment.fromHtml(dock.words.text()).toPlainText()


def test_population_in_words(shown):
    _, dock = shown
    said, summary = words(dock), dock.model.summary()
    assert said.startswith("Mean p_release is ")
    assert "no release" in said
    assert f"True SD of p_release between boutons: {summary['heterogeneity']['sd']:.2f}" in said
    failures = summary["stimulus_failures"]
    assert f"At {failures['trials']:.0f} stimuli every bouton failed" in said
    assert "Release and paired-pulse ratio\nNeeds 5 boutons" in said
    assert "Missed boutons" not in said


def test_missed_boutons_are_looked_for_when_asked(shown, qtbot):
    _, dock = shown
    assert dock.missed.isVisible()
    dock.text.ensureWidgetVisible(dock.missed)
    QTest.mouseClick(dock.missed, Qt.MouseButton.LeftButton)
    qtbot.waitUntil(lambda: not dock.runner.busy, timeout=LONG_MS)
    assert not dock.missed.isVisible()
    expected = selection_summary(measure_selection(dock.model.measured))
    assert dock.model.summary()["selection"] == expected
    assert "Missed boutons\n" in words(dock)
    dock.model.set_threshold(4.0)
    assert dock.model.summary()["selection"] == expected  # it knows no threshold


def test_every_number_with_its_unit_can_be_chosen(shown, qtbot):
    _, dock = shown
    names = [dock.shown.itemData(i) for i in range(dock.shown.count())]
    assert names[0] == "p_release"
    assert {"ppr", "q", "snr", "f0", "spontaneous_per_min"} <= set(names)
    assert not {"bouton", "y_px", "found_by", "flags", "p_release_lo"} & set(names)
    dock.shown.setCurrentIndex(names.index("q"))
    drawn(qtbot, dock)
    assert dock.shown.currentText() == "q (dF/F)"
    assert dock.plot.figure.axes[0].get_ylabel() == "q (dF/F)"
    assert "one vesicle" in dock.meaning.text()


def test_a_click_on_a_point_selects_the_bouton_everywhere(shown, qtbot):
    viewer, dock = shown
    click(dock, 3)
    assert dock.model.selection.bouton == 3
    assert viewer.layers["boutons"].selected_data == {2}
    drawn(qtbot, dock)
    click(dock, 1)
    assert dock.model.selection.bouton == 1
    drawn(qtbot, dock)
    click(dock, 3, beside_px=60)
    assert dock.model.selection.bouton == 1


def test_marks_take_the_colours_of_the_chosen_number(shown, qtbot):
    viewer, dock = shown
    points = viewer.layers["boutons"]
    by_found = points.border_color.copy()
    dock.colour.setChecked(True)
    assert points.border_contrast_limits == (0.0, 1.0)
    assert points.border_colorbar.visible
    p_release = dock.model.table("boutons").p_release.to_numpy()
    assert points.border_color == pytest.approx(sequential().map(p_release), abs=1e-3)
    names = [dock.shown.itemData(i) for i in range(dock.shown.count())]
    dock.shown.setCurrentIndex(names.index("f0"))
    assert points.border_contrast_limits[1] == pytest.approx(dock.model.table("boutons").f0.max())
    dock.colour.setChecked(False)
    assert points.border_color == pytest.approx(by_found)
    assert not points.border_colorbar.visible


def test_silent_boutons_and_those_without_a_number_differ_by_symbol_and_stay_visible(shown, qtbot):
    viewer, dock = shown
    points = viewer.layers["boutons"]
    dock.colour.setChecked(True)
    symbols = [str(one) for one in points.symbol]
    assert symbols == ["disc", SILENT, "disc"]
    names = [dock.shown.itemData(i) for i in range(dock.shown.count())]
    dock.shown.setCurrentIndex(names.index("n_sites"))
    assert np.all(points.border_color[:, 3] == 1.0)
    points.add((30.0, 32.0))
    assert str(points.symbol[-1]) == NO_NUMBER
    assert np.all(points.border_color[:, 3] == 1.0)
    drawn(qtbot, dock)
    assert len(dock.plot.figure.axes) == 1


def test_numbers_stand_along_a_drawn_axon(shown, qtbot):
    _, dock = shown
    assert dock.plot.figure.axes[0].get_xlabel() == "bouton"
    dock.model.draw_axon(np.array([[22.0, 60.0], [14.0, 4.0]]))
    assert dock.stale.isVisibleTo(dock)
    qtbot.waitUntil(lambda: not dock.model.stale and not dock.runner.busy, timeout=LONG_MS)
    drawn(qtbot, dock)
    assert dock.plot.figure.axes[0].get_xlabel() == "distance along the axon (µm)"
    assert not dock.stale.isVisibleTo(dock)
    assert np.all(np.diff(dock.plot._at[:, 0]) > 0)


def test_nothing_found_leaves_no_choice(shown, qtbot):
    _, dock = shown
    boutons = dock.model.sites()
    edits = dock.model.edits
    for y, x in zip(boutons.y_px, boutons.x_px, strict=True):
        edits = edits.delete((float(y), float(x)))
    dock.model.edit(edits)
    qtbot.waitUntil(lambda: not dock.model.stale and not dock.runner.busy, timeout=LONG_MS)
    drawn(qtbot, dock)
    assert choices(dock.model.table("boutons")) == []
    assert dock.shown.count() == 0
    assert words(dock).startswith("No bouton was found")


def test_follows_the_theme(shown, qtbot):
    viewer, dock = shown
    before = dock.plot.figure.get_facecolor()
    viewer.theme = "light"
    drawn(qtbot, dock)
    assert dock.plot.figure.get_facecolor() != before


def test_words_stand_beside_the_plot_where_there_is_room(shown, qtbot):
    _, dock = shown
    dock.resize(1000, 220)
    qtbot.waitUntil(lambda: dock.text.x() > dock.plot.x(), timeout=5000)
    narrow = AxonDock(dock.viewer)
    qtbot.addWidget(narrow)
    narrow.resize(340, 600)
    narrow.show()
    qtbot.waitUntil(lambda: narrow.text.y() > narrow.plot.y(), timeout=5000)
    narrow.unlink()
