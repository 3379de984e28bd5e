"""How quickly real docks answer on a recording of half a gigabyte; run with ``pytest -m benchmark -s``.

Machines differ and are busy. So beside the time that passed stands the time that this program itself was at work, which
other programs do not lengthen as much, and the ratio of that to plain work done in the same run: reading one bouton's
pixels out of the movie, or comparing every amplitude with its threshold in a loop. Nothing is asserted of them: the
table is what comes out.
"""

from __future__ import annotations

import sys
import time
from functools import partial

import numpy as np
import pytest
from qtpy.QtCore import QTimer
from qtpy.QtWidgets import QApplication

from napari_boutonrelease.analysis.bouton_edits import move_boutons
from napari_boutonrelease.analysis.model import AnalysisModel, compute
from napari_boutonrelease.analysis.settings import Settings
from napari_boutonrelease.cli.main import main
from napari_boutonrelease.docks.arrange import open_dock, panels
from napari_boutonrelease.docks.bouton_layers import bouton_layers_of
from napari_boutonrelease.docks.bouton_list import BoutonTrace
from napari_boutonrelease.docks.panel import model_of
from napari_boutonrelease.docks.view import view_movie
from napari_boutonrelease.docks.worker import runner_of
from napari_boutonrelease.recording import movie_from_array, open_movie
from napari_boutonrelease.simulation import BoutonRecipe, preset_recipe, simulate_recording

pytestmark = pytest.mark.benchmark

TICK_MS = 5
GOALS_MS = {"longest block": 100.0, "trace after an edit": 300.0, "calls of 100 boutons": 50.0}
LARGE = [
    *("--n-boutons", "20", "--trials", "20", "--trial-interval-s", "0.5"),
    *("--set", "height_px=512", "--set", "width_px=512"),
]
QUICK = Settings.model_validate({"quanta": {"n_max": 3, "bootstrap": 0}, "pairs": {"bootstrap": 100}})


class Watch:
    """Tells for how long, at most, the window did not answer: the longest gap between ticks of a timer.

    Attributes
    ----------
    longest_ms : (float, float)
        Longest gap, and the longest work of this thread in a gap.
    """

    def __init__(self):
        self._timer = QTimer()
        self._timer.setInterval(TICK_MS)
        self._timer.timeout.connect(self._tick)

    def __enter__(self):
        self.longest_ms = 0.0, 0.0
        self._last_s = now_s()
        self._timer.start()
        return self

    def __exit__(self, *_):
        self._tick()
        self._timer.stop()

    def _tick(self):
        before_s, self._last_s = self._last_s, now_s()
        gap_ms = since_ms(before_s, self._last_s)
        self.longest_ms = tuple(max(pair) for pair in zip(self.longest_ms, gap_ms, strict=True))


def now_s():
    """Clock, and work of this thread."""
    return time.perf_counter(), time.thread_time()


def since_ms(begun_s, ended_s):
    return tuple(1e3 * (ended - begun) for begun, ended in zip(begun_s, ended_s, strict=True))


def go_on(seconds):
    end_s = time.perf_counter() + seconds
    while time.perf_counter() < end_s:
        QApplication.processEvents()
        time.sleep(0.001)


def wait_for(happened, seconds=600.0):
    end_s = time.perf_counter() + seconds
    while not happened():
        assert time.perf_counter() < end_s
        QApplication.processEvents()
        time.sleep(0.001)


def taken_ms(act):
    begun_s = now_s()
    act()
    return since_ms(begun_s, now_s())


def show(title, rows, plain, plain_words):
    """Write (what, goal, times in ms); each time is that of the clock and that of work."""
    unit_ms = float(np.median([work for _, work in (taken_ms(plain) for _ in range(9))]))
    lines = [
        "",
        f"{title}; 1 unit = {plain_words}: {unit_ms:.2f} ms of work",
        f"{'':46}{'goal':>7} ms{'median':>9}{'worst':>9} ms{'of it work':>14}{'worst':>9} ms{'work':>12} units",
    ]
    for what, goal_ms, taken in rows:
        (clock, work), (worst, worst_work) = np.median(taken, axis=0), np.max(taken, axis=0)
        times = f"{clock:9.1f}{worst:9.1f}   {work:14.1f}{worst_work:9.1f}   {work / unit_ms:12.1f}"
        lines.append(f"{what:46}{goal_ms:7.0f}   {times}")
    sys.stdout.write("\n".join(lines) + "\n")


@pytest.fixture(scope="module")
def large(tmp_path_factory):
    path = tmp_path_factory.mktemp("benchmark") / "axon.tif"
    assert main(["simulate", str(path), *LARGE]) == 0
    assert path.stat().st_size > 0.5e9
    return path


def test_a_large_movie(large, make_napari_viewer):
    viewer = make_napari_viewer(show=True)
    viewer.window.resize(1366, 768)
    view_movie(viewer, open_movie(large), protocol=large.with_suffix(".protocol.toml"))
    model, layers = model_of(viewer), bouton_layers_of(viewer)
    runner = runner_of(model)
    model.settings = QUICK
    go_on(0.5)
    seen_s = []
    model.traced_changed.connect(lambda: seen_s.append(time.perf_counter()))
    block = GOALS_MS["longest block"]
    rows = []
    with Watch() as watch:
        layers.measure()
        wait_for(lambda: model.traced is not None)
        go_on(0.3)
    rows.append(("longest block: finding, first layers", block, [watch.longest_ms]))
    with Watch() as watch:
        wait_for(lambda: not runner.busy)
        go_on(0.3)
    rows.append(("longest block: first results", block, [watch.longest_ms]))

    for front in ("Boutons", "Axon", "Results", "Quantal"):
        open_dock(viewer, front)
        go_on(0.5)
        taken = []
        for bouton in model.measured.places.bouton[:8]:
            with Watch() as watch:
                model.select(bouton=int(bouton))
                go_on(0.3)
            taken.append(watch.longest_ms)
        rows.append((f"longest block: selecting, {front} in front", block, taken[1:]))
    open_dock(viewer, "Responses")
    for front in ("Boutons", "Axon", "Results"):
        open_dock(viewer, front)
        go_on(0.5)
        taken = []
        for threshold_sd in np.linspace(2.0, 4.0, 20):
            with Watch() as watch:
                model.set_threshold(float(threshold_sd))
                go_on(0.03)
            taken.append(watch.longest_ms)
        with Watch() as watch:  # what waited for the threshold to rest
            go_on(0.5)
        taken.append(watch.longest_ms)
        rows.append((f"longest block: dragging threshold, {front}", block, taken))

    open_dock(viewer, "Boutons")
    go_on(0.5)
    taken, blocked = {"rest": [], "a fit running": []}, []
    for k in range(10):
        name = "a fit running" if k % 2 else "rest"
        if name == "rest":
            wait_for(lambda: not runner.busy)
            go_on(0.3)
        sites = model.sites()
        row = k % len(sites.bouton)
        place = (float(sites.y_px[row]) + 1.0, float(sites.x_px[row]) + 1.0)
        n_seen = len(seen_s)
        with Watch() as watch:
            begun_s = time.perf_counter(), time.process_time()
            move_boutons(model, {int(sites.bouton[row]): place})
            wait_for(lambda n_seen=n_seen: len(seen_s) > n_seen)
            wait_for(lambda: not any(plot.isVisible() and plot.waits for plot in traces(viewer)))
            taken[name].append(since_ms(begun_s, (time.perf_counter(), time.process_time())))
            go_on(0.2)
        blocked.append(watch.longest_ms)
    for name, times in taken.items():
        rows.append((f"trace after an edit, from {name}", GOALS_MS["trace after an edit"], times))
    rows.append(("longest block: edits", block, blocked))
    runner.cancel()
    wait_for(lambda: not runner.busy)

    footprints, movie = model.traced.places.footprints, model.movie
    (height, width), y0, x0 = footprints.weights[0].shape, footprints.y0[0], footprints.x0[0]

    def read():
        return movie.read(0, movie.shape[0])[:, y0 : y0 + height, x0 : x0 + width].astype(np.float64)

    show(f"{movie.shape} frames, {len(footprints.y0)} boutons", rows, read, "reading a bouton's pixels")


def traces(viewer):
    """The plots that show a bouton's trace as soon as it is read."""
    return [plot for panel in panels(viewer) for plot in panel.findChildren(BoutonTrace)]


def test_calls_of_a_hundred_boutons(tmp_path):
    boutons = tuple(
        BoutonRecipe(y_px=12.0 + 22 * i, x_px=12.0 + 22 * j, n_sites=2, p_site=0.4, q_dff=0.6, f0_photons=30.0)
        for i in range(10)
        for j in range(10)
    )
    recipe = preset_recipe(
        "fast-pair", height_px=224, width_px=224, trials=30, trial_interval_s=0.4, boutons=boutons,
        specks_on_axon=0, specks_off_axon=0, wander_um=0.0, drift_walk_px=0.0,
    )  # fmt: skip
    simulation = simulate_recording(recipe, rng=np.random.default_rng(3))
    places = tmp_path / "places.csv"
    places.write_text("y_px,x_px\n" + "".join(f"{one.y_px},{one.x_px}\n" for one in boutons))
    movie = movie_from_array(
        simulation.frames, frame_interval_s=recipe.frame_interval_s, pixel_size_um=recipe.pixel_size_um
    )
    model = AnalysisModel()
    model.open(movie, simulation.protocol, boutons=places)
    model.settings = QUICK
    model.accept(model.request(), compute(model.request()))
    thresholds = iter(np.linspace(2.0, 4.0, 20).tolist())
    called, listed = [], []
    for threshold_sd in thresholds:
        called.append(taken_ms(partial(model.set_threshold, threshold_sd)))
        listed.append(taken_ms(partial(model.table, "boutons")))
    amplitude, limit = model.measured.amplitudes.amplitude, model.measured.counts.calls.threshold

    def plain():
        return [[value > limit[b] for value in row] for b, row in enumerate(amplitude.reshape(len(limit), -1).tolist())]

    goal_ms = GOALS_MS["calls of 100 boutons"]
    rows = [("calls of 100 boutons", goal_ms, called), ("their table, once the threshold rests", goal_ms, listed)]
    show(f"{amplitude.shape} amplitudes", rows, plain, "a plain loop of comparisons")
