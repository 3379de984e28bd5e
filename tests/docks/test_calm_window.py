"""What keeps the window answering: plots take turns, hidden docks and tables wait."""

from __future__ import annotations

import time
from types import SimpleNamespace

import pytest
from napari.components import ViewerModel
from qtpy.QtCore import Qt
from qtpy.QtWidgets import QDockWidget, QMainWindow

from napari_boutonrelease.analysis.model import AnalysisModel, compute
from napari_boutonrelease.docks.calm import CALM_MS, WhenCalm
from napari_boutonrelease.docks.panel import Panel
from napari_boutonrelease.docks.turns import Turns


class SlowPlot:
    """Counts how often it is asked to paint itself again."""

    def __init__(self):
        self.asked = 0

    def update(self):
        self.asked += 1


def test_plots_beyond_the_time_of_a_turn_draw_in_the_next(qtbot, monkeypatch):
    monkeypatch.setattr("napari_boutonrelease.docks.turns.isalive", lambda _: True)
    turns, first, second = Turns(), SlowPlot(), SlowPlot()
    assert turns.may_draw(first)
    time.sleep(0.05)
    assert not turns.may_draw(second)
    qtbot.waitUntil(lambda: second.asked == 1)
    assert first.asked == 0
    assert turns.may_draw(second)


def test_a_hidden_dock_shows_once_when_it_is_seen(qtbot):
    window, shown = QMainWindow(), []
    qtbot.addWidget(window)
    front, behind, panel = QDockWidget("front"), QDockWidget("behind"), Panel(ViewerModel())
    behind.setWidget(panel)
    for dock in (front, behind):
        window.addDockWidget(Qt.DockWidgetArea.RightDockWidgetArea, dock)
    window.tabifyDockWidget(behind, front)
    window.show()
    qtbot.waitExposed(window)
    front.raise_()

    def show():
        shown.append(1)

    qtbot.waitUntil(lambda: behind.visibleRegion().isEmpty())
    panel.when_seen(show)
    panel.when_seen(show)
    assert shown == []
    behind.raise_()
    qtbot.waitUntil(lambda: shown == [1])
    panel.when_seen(show)
    assert shown == [1, 1]
    panel.unlink()


def test_new_results_show_at_once_and_calls_once_the_threshold_rests(qtbot):
    model, shown = SimpleNamespace(measured=None), []
    calm = WhenCalm(model, lambda: shown.append(model.measured))
    calm.follow()
    assert shown == [None]
    release = object()
    first, second, third = (SimpleNamespace(release=release) for _ in range(3))
    model.measured = first
    calm.follow()
    assert shown == [None, first]
    for again in (second, third):
        model.measured = again
        calm.follow()
    assert shown == [None, first]
    qtbot.wait(3 * CALM_MS)
    assert shown == [None, first, third]


def test_results_are_never_stale_while_the_threshold_moves(recording, quick):
    model, stale = AnalysisModel(), []
    model.open(*recording)
    model.settings = quick
    model.accept(model.request(), compute(model.request()))
    for signal in (model.settings_changed, model.measured_changed):
        signal.connect(lambda: stale.append(model.stale))
    model.set_threshold(3.25)
    assert stale == [False, False]
    assert model.measured.counts.calls.threshold == pytest.approx(3.25 * model.measured.amplitudes.noise_sd)


@pytest.fixture(scope="module")
def recording(simulate):
    places = (
        {"y_px": 16.0, "x_px": x, "n_sites": 2, "p_site": 0.5, "q_dff": 0.6, "f0_photons": 30.0} for x in (14, 40)
    )
    return simulate(*places, seed=4, height_px=32, width_px=56, trials=20, trial_interval_s=0.6)
