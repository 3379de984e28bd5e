"""The Quantal dock: what it shows is what was measured, and it says in words what cannot be known."""

import numpy as np
import pytest
from napari.components import ViewerModel
from qtpy.QtWidgets import QApplication

from napari_boutonrelease.analysis.hand_edits import HandEdits
from napari_boutonrelease.analysis.model import AnalysisModel, compute
from napari_boutonrelease.analysis.summary import estimates_table
from napari_boutonrelease.docks.panel import model_of
from napari_boutonrelease.docks.quantal_dock import QuantalDock
from napari_boutonrelease.docks.responses_dock import NOTHING_YET
from napari_boutonrelease.flags import FLAGS

N_TRIALS = 24
SILENT, BUSY = 1, 2  # ids


def record(simulate, quick, folder, **changes):
    """A silent and a busy bouton, at given places."""
    boutons = (
        {"y_px": 16.0, "x_px": x, "n_sites": 3, "p_site": p, "q_dff": 0.5, "f0_photons": 30.0}
        for x, p in ((14.0, 0.0), (40.0, 0.35))
    )
    chosen = {"seed": 5, "height_px": 32, "width_px": 56, "trials": N_TRIALS, "trial_interval_s": 0.8} | changes
    movie, protocol = simulate(*boutons, **chosen)
    places = folder / "places.csv"
    places.write_text("y_px,x_px\n16,14\n16,40\n")
    model = AnalysisModel()
    model.open(movie, protocol, boutons=places)
    model.settings = quick
    model.choose("quanta", n_max=4)
    return movie, protocol, places, compute(model.request())


@pytest.fixture(scope="module")
def train(simulate, quick, tmp_path_factory):
    return record(simulate, quick, tmp_path_factory.mktemp("train"), pulses=3)


@pytest.fixture(scope="module")
def single(simulate, quick, tmp_path_factory):
    return record(simulate, quick, tmp_path_factory.mktemp("single"), pulses=1)


@pytest.fixture(scope="module")
def long_train(simulate, quick, tmp_path_factory):
    return record(simulate, quick, tmp_path_factory.mktemp("long"), pulses=6, trials=16, recovery_s=0.3)


@pytest.fixture(scope="module")
def two_intervals(simulate, quick, tmp_path_factory):
    """Pairs of pulses, 40 or 160 ms apart in turn."""
    times = tuple((0.5 + 0.7 * k, 0.5 + 0.7 * k + (0.04, 0.16)[k % 2]) for k in range(N_TRIALS))
    return record(simulate, quick, tmp_path_factory.mktemp("intervals"), pulse_table_s=times)


def fill(model, recording):
    movie, protocol, places, measured = recording
    model.open(movie, protocol, boutons=places)
    model.settings = measured.settings
    model.accept(model.request(), measured)


def settle(dock):
    for _ in range(12):  # plots take turns
        QApplication.processEvents()
    while dock._calm.isActive():
        QApplication.processEvents()
    for _ in range(12):  # plots take turns
        QApplication.processEvents()


@pytest.fixture
def show(qtbot):
    """Open a dock on a recording, at the size it has at the bottom of a small window."""
    docks = []

    def open_dock(recording):
        dock = QuantalDock(ViewerModel())
        docks.append(dock)
        qtbot.addWidget(dock)
        dock.resize(1346, 230)
        dock.show()
        if recording is not None:
            fill(dock.model, recording)
        settle(dock)
        return dock

    yield open_dock
    for dock in docks:
        dock.unlink()


def rows(table):
    return [
        tuple(table.item(line, column).text() for column in range(table.columnCount()))
        for line in range(table.rowCount())
    ]


def test_says_what_to_do_before_anything_is_measured(show):
    dock = show(None)
    assert dock.message.isVisible()
    assert dock.message.text() == NOTHING_YET
    assert not dock.content.isVisible()


def test_silent_bouton_is_called_so_with_its_upper_limit(show, train):
    dock = show(train)
    assert dock.bouton.currentText() == str(SILENT)
    words = dock.words.text()
    limit = dock.model.measured.release.axon.p_release_hi[SILENT - 1, 0]
    assert "Silent" in words
    assert f"{limit:.2f}" in words
    assert FLAGS["silent"].meaning in words
    assert FLAGS["silent"].advice in words
    assert not dock.sites.axes.get_visible()
    assert "cannot" in dock.sites.figure.texts[0].get_text()
    assert len(dock.histogram.axes.collections[0].get_segments()) == 0  # no model


def test_bouton_with_several_numbers_of_sites_is_called_unresolved(show, train):
    dock = show(train)
    dock.bouton.setCurrentIndex(BUSY - 1)
    settle(dock)
    members = dock.model.measured.release.axon.n_set[BUSY - 1]
    assert len(members) > 1
    words = dock.words.text()
    assert "unresolved" in words
    assert FLAGS["n_unresolved"].advice in words
    full = [bar for bar in dock.sites.axes.patches if bar.get_fill()]
    assert [round(bar.get_x() + 0.4) for bar in full] == list(members)
    heights = [bar.get_height() for bar in dock.sites.axes.patches]
    assert sum(heights) == pytest.approx(1.0, abs=0.01)


def test_histogram_holds_every_trial_and_the_model_as_many(show, train):
    dock = show(train)
    dock.bouton.setCurrentIndex(BUSY - 1)
    settle(dock)
    axes = dock.histogram.axes
    evoked = axes.patches[0].get_data()
    assert evoked.values.sum() == N_TRIALS
    model = next(line for line in axes.lines if len(line.get_xdata()) > 100)
    x, y = np.asarray(model.get_xdata()), np.asarray(model.get_ydata())
    assert np.trapezoid(y, x) / np.diff(evoked.edges)[0] == pytest.approx(N_TRIALS, rel=0.05)
    assert len(axes.collections[0].get_segments()) == dock.model.measured.release.axon.n_sites[BUSY - 1] + 1
    first = evoked.values.copy()
    dock.pulse.setCurrentIndex(2)
    settle(dock)
    assert dock.model.selection.pulse == 3
    assert "pulse 3" in axes.get_xlabel()
    assert not np.array_equal(axes.patches[0].get_data().values, first)


def test_every_estimate_stands_in_the_table(show, train):
    dock = show(train)
    dock.bouton.setCurrentIndex(BUSY - 1)
    settle(dock)
    expected = estimates_table(dock.model.measured)
    expected = expected[expected["bouton"] == BUSY]
    shown = rows(dock.estimates)
    assert len(shown) == len(expected)
    assert sorted(method for *_, method in shown) == sorted(expected["method"])
    assert [quantity for quantity, *_ in shown if quantity] == [
        "p_release",
        "m (vesicles)",
        "n_sites",
        "p_site",
        "q (dF/F)",
    ]
    best = expected.iloc[0]
    assert shown[0][1] == f"{best['value']:.2f} ({best['lo']:.2f}–{best['hi']:.2f})"


def test_pulse_pair_shows_ratio_and_history(show, train):
    dock = show(train)
    dock.bouton.setCurrentIndex(BUSY - 1)
    settle(dock)
    measured = dock.model.measured
    pair, history = measured.release.pairs[BUSY - 1], measured.counts.histories[BUSY - 1]
    assert f"{pair.ppr.value:.2f}" in dock.pair.axes.get_title(loc="right")
    corners = [text.get_text() for text in dock.pair.axes.texts]
    assert f"both: {history.both}" in corners
    assert f"neither: {history.neither}" in corners
    table = dict(rows(dock.pairs))
    assert table["P(release 2 | release 1)"].startswith(f"{history.after_release.value:.2f} (")
    assert table["paired-pulse ratio of amplitudes"].startswith(f"{pair.ppr.value:.2f} (")
    assert table["verdict, corrected for the number of boutons"] == measured.release.verdicts[BUSY - 1]


def test_train_follows_the_pulse_number(show, train):
    dock = show(train)
    dock.bouton.setCurrentIndex(BUSY - 1)
    settle(dock)
    assert dock.train.isVisible()
    pulses = dock.model.table("pulses")
    mine = pulses[pulses["bouton"] == BUSY]
    for plot, column in ((dock.amplitude_train, "amplitude_mean"), (dock.release_train, "p_release")):
        drawn = next(line for line in plot.axes.lines if len(line.get_xdata()) == 3)
        np.testing.assert_array_equal(drawn.get_xdata(), [1, 2, 3])
        np.testing.assert_allclose(drawn.get_ydata(), mine[column])


def drawn(plot, *, marker="o"):
    line = next(line for line in plot.axes.lines if line.get_marker() == marker)
    return np.asarray(line.get_xdata()), np.asarray(line.get_ydata())


def tabs(dock):
    return [dock.tables.tabText(k) for k in range(dock.tables.count()) if dock.tables.isTabVisible(k)]


def test_three_pulses_are_too_few_for_a_pool(show, train):
    dock = show(train)
    assert not dock.cumulative.isVisible()
    assert not dock.intervals.isVisible()
    assert tabs(dock) == ["Estimates", "Pulse pair"]


def test_train_shows_pool_and_model_of_its_table(show, long_train):
    dock = show(long_train)
    dock.resize(1346, 520)
    dock.bouton.setCurrentIndex(BUSY - 1)
    settle(dock)
    assert dock.cumulative.isVisible()
    pulses, trains = dock.model.table("pulses"), dock.model.table("trains")
    row = trains[trains["bouton"] == BUSY].iloc[0]
    at, total = drawn(dock.cumulative)
    np.testing.assert_array_equal(at, np.arange(1, 7))
    np.testing.assert_allclose(total, pulses[pulses["bouton"] == BUSY]["cumulative_mean"])
    _, mean = drawn(dock.amplitude_train)
    np.testing.assert_allclose(mean, pulses[pulses["bouton"] == BUSY]["amplitude_mean"])
    curve = dock.amplitude_train._model.get_ydata()
    assert len(curve) == 6
    assert curve[0] == pytest.approx(row["u"] * row["resources"])  # the first pulse uses its share
    table = dict(rows(dock.train_table))
    assert table["share that pulse 1 uses, u"].startswith(f"{row['u']:.2f}")
    assert tabs(dock) == ["Estimates", "Pulse pair", "Train"]
    assert np.isfinite(row["pool"])
    _, pool = drawn(dock.cumulative, marker="D")
    assert pool == pytest.approx(row["pool"])
    assert f"pool {row['pool']:.2f}" in dock.cumulative.axes.get_title(loc="right")

    dock.bouton.setCurrentIndex(SILENT - 1)
    settle(dock)
    silent = trains[trains["bouton"] == SILENT].iloc[0]
    assert len(dock.amplitude_train._model.get_ydata()) == (6 if np.isfinite(silent["u"]) else 0)
    assert dict(rows(dock.train_table))["note"] == silent["note"]


def test_ratio_against_the_pulse_interval(show, two_intervals):
    dock = show(two_intervals)
    dock.bouton.setCurrentIndex(BUSY - 1)
    settle(dock)
    assert dock.intervals.isVisible()
    table = dock.model.table("intervals")
    mine = table[table["bouton"] == BUSY]
    gap, ratio = drawn(dock.intervals)
    np.testing.assert_allclose(gap, [0.04, 0.16], atol=1e-6)
    np.testing.assert_allclose(ratio, mine["ppr"])
    assert tabs(dock) == ["Estimates", "Pulse pair", "Intervals"]
    recovery = dock.model.table("recovery")
    assert dict(rows(dock.interval_table))["time course"] == recovery[recovery["bouton"] == BUSY]["model"].iloc[0]
    dock.bouton.setCurrentIndex(SILENT - 1)
    settle(dock)
    assert "no ratio" in dock.intervals.figure.texts[0].get_text() or np.isfinite(drawn(dock.intervals)[1]).any()


def test_table_of_estimates_takes_what_is_left_of_its_row(show, single):
    dock = show(single)  # words, histogram, sites, table
    dock.resize(600, 460)
    settle(dock)
    assert dock.tables.geometry().right() == dock.content.width() - 1


def test_single_pulses_leave_no_room_for_pairs(show, single):
    dock = show(single)
    assert dock.histogram.isVisible()
    assert not dock.pair.isVisible()
    assert not dock.train.isVisible()
    assert not dock.tables.isTabVisible(1)
    assert not dock.pulse.isVisible()
    fill(dock.model, single)
    settle(dock)


def test_dock_follows_another_recording(show, single, train):
    dock = show(single)
    fill(dock.model, train)
    settle(dock)
    assert dock.pair.isVisible()
    assert dock.train.isVisible()
    assert dock.tables.isTabVisible(1)


def test_threshold_moves_lines_and_counts_but_not_the_histogram(show, train, monkeypatch):
    dock = show(train)
    dock.model.select(bouton=BUSY)
    settle(dock)
    filled = []
    for plot in (dock.histogram, dock.sites, dock.pair):
        monkeypatch.setattr(plot, "fill", filled.append)
    before = rows(dock.estimates)
    dock.model.set_threshold(6.0)
    settle(dock)
    assert filled == []
    threshold = dock.model.measured.counts.calls.threshold[BUSY - 1]
    assert any(np.allclose(line.get_xdata(), threshold) for line in dock.histogram.axes.lines)
    history = dock.model.measured.counts.histories[BUSY - 1]
    assert f"both: {history.both}" in [text.get_text() for text in dock.pair.axes.texts]
    after = rows(dock.estimates)
    assert after != before
    assert after[0] == before[0]  # the fit does not know the threshold


def test_stale_numbers_are_called_so(show, train):
    dock = show(train)
    assert "analyse again" not in dock.words.text()
    dock.model.edit(HandEdits().exclude(3, "movement"))
    settle(dock)
    assert "analyse again" in dock.words.text()


def test_two_viewers_stay_apart(show, train):
    dock, other = show(train), show(train)
    dock.model.select(bouton=BUSY)
    settle(dock)
    settle(other)
    assert dock.bouton.currentText() == str(BUSY)
    assert other.bouton.currentText() == str(SILENT)


def test_closed_dock_no_longer_listens(closed_for_good, train):
    viewer = closed_for_good(QuantalDock, lambda model: fill(model, train))
    model_of(viewer).set_threshold(3.0)
    QApplication.processEvents()


@pytest.mark.parametrize("width", [380, 1346])
def test_nothing_is_cut_at_the_side(show, train, width):
    dock = show(train)
    dock.resize(width, 400)
    settle(dock)
    assert dock.horizontalScrollBar().maximum() == 0
