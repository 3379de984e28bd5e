"""Trains and pulse intervals of one recording: rows where there are any, near the truth, doubts in words."""

from types import SimpleNamespace

import numpy as np
import pytest

from napari_boutonrelease.analysis.columns import SUMMARY, TABLES
from napari_boutonrelease.analysis.pulse_intervals import (
    interval_cautions,
    interval_summary,
    interval_table,
    recovery_table,
)
from napari_boutonrelease.analysis.run import run_analysis
from napari_boutonrelease.analysis.settings import Settings
from napari_boutonrelease.analysis.trains import train_cautions, train_summary, train_table
from napari_boutonrelease.quanta import release_shares
from napari_boutonrelease.recording import movie_from_array
from napari_boutonrelease.simulation import BoutonRecipe

TRAIN_S, SITES, P_SITE, Q, RECOVERY_S, NOISE_SD = 0.05 * np.arange(8), 5, 0.4, 0.5, 0.4, 0.05


def draw_amplitudes(rng, stimulus_s, *, sites=SITES):
    """Sites of probability 0.4 that get their vesicle back with 0.4 s, in noise."""
    amplitude = np.full(stimulus_s.shape, np.nan)
    full = np.ones((len(stimulus_s), sites), dtype=bool)
    for j in range(stimulus_s.shape[1]):
        if j:
            full |= rng.random(full.shape) < -np.expm1(-np.diff(stimulus_s)[:, j - 1, None] / RECOVERY_S)
        released = full & (rng.random(full.shape) < P_SITE)
        full &= ~released
        there = np.isfinite(stimulus_s[:, j])
        amplitude[there, j] = Q * released.sum(axis=1)[there] + rng.normal(0, NOISE_SD, there.sum())
    return amplitude


def measured(stimulus_s, amplitude):
    """What the tables of trains look at: two boutons that release, one that is silent, one without any amplitude."""
    known = np.array([True, True, True, False])
    axon = SimpleNamespace(
        q=np.where(known, Q, np.nan),
        q_lo=np.where(known, 0.95 * Q, np.nan),
        q_hi=np.where(known, 1.05 * Q, np.nan),
        silent_probability=np.array([0.0, 0.0, 1.0, np.nan]),
    )
    return SimpleNamespace(
        settings=Settings(pairs={"bootstrap": 200}),
        timing=SimpleNamespace(stimulus_s=stimulus_s),
        places=SimpleNamespace(bouton=np.arange(1, 5)),
        amplitudes=SimpleNamespace(amplitude=amplitude, noise_sd=np.where(known, NOISE_SD, np.nan)),
        release=SimpleNamespace(axon=axon),
    )


def recording(stimulus_s, *, seed=1):
    rng = np.random.default_rng(seed)
    amplitude = np.stack(
        [
            draw_amplitudes(rng, stimulus_s),
            draw_amplitudes(rng, stimulus_s),
            np.where(np.isfinite(stimulus_s), rng.normal(0, NOISE_SD, stimulus_s.shape), np.nan),
            np.full(stimulus_s.shape, np.nan),
        ]
    )
    return measured(stimulus_s, amplitude)


def trials_at(*times_s):
    """Trials two seconds apart."""
    width = max(len(one) for one in times_s)
    table = np.full((len(times_s), width), np.nan)
    for trial, one in enumerate(times_s):
        table[trial, : len(one)] = 2.0 * trial + np.asarray(one)
    return table


def check_tables(found):
    for name, make in (("trains", train_table), ("intervals", interval_table), ("recovery", recovery_table)):
        assert tuple(make(found).columns) == TABLES[name].names
    for group, content in (("train", train_summary(found)), ("pulse_intervals", interval_summary(found))):
        for key, value in content.items():
            assert f"{group}.{key}" in SUMMARY
            assert not (isinstance(value, float) and not np.isfinite(value)), key


def test_trains_come_back():
    found = recording(trials_at(*[TRAIN_S] * 80))
    check_tables(found)
    table = train_table(found).set_index("bouton")
    for bouton in (1, 2):
        row = table.loc[bouton]
        assert (row["pulses"], row["trials"]) == (8, 80)
        assert row["interval_s"] == pytest.approx(0.05)
        for name, truth in (("u", P_SITE), ("tau_rec_s", RECOVERY_S), ("resources", SITES * Q)):
            # three intervals of 95 % at two boutons, widened to let chance fail them once in thousands
            low, high, value = row[f"{name}_lo"], row[f"{name}_hi"], row[name]
            assert value - 2 * (value - low) < truth < value + 2 * (high - value), name
        assert row["pool_vesicles"] == pytest.approx(row["pool"] / Q)
        assert row["pool_vesicles_lo"] < row["pool_vesicles"] < row["pool_vesicles_hi"]
    shares = release_shares(TRAIN_S, u=P_SITE, tau_rec_s=RECOVERY_S, tau_facil_s=0.0)
    summary = train_summary(found)
    assert summary["amplitude"] == pytest.approx(2 * SITES * Q * shares, abs=0.45)
    assert summary["cumulative"] == pytest.approx(np.cumsum(summary["amplitude"]))
    assert summary["u_lo"] < P_SITE < summary["u_hi"]
    assert "lower limit" in " ".join(train_cautions(found))


def test_boutons_that_say_nothing_about_trains_say_why():
    table = train_table(recording(trials_at(*[TRAIN_S] * 30))).set_index("bouton")
    assert "within noise of zero" in table.loc[3, "note"]
    assert table.loc[4, "note"] == "no amplitude could be measured"
    assert table.loc[[3, 4], ["pool", "pool_vesicles", "u", "tau_rec_s", "model_p"]].isna().all(axis=None)


@pytest.mark.parametrize("pulses", [1, 2, 4])
def test_short_trials_have_no_row(pulses):
    found = recording(trials_at(*[TRAIN_S[:pulses]] * 20))
    check_tables(found)
    assert train_table(found).empty
    assert interval_table(found).empty
    assert recovery_table(found).empty
    assert train_summary(found) == interval_summary(found) == {}
    assert train_cautions(found) == interval_cautions(found) == []


def test_pulses_that_are_not_evenly_spaced_have_a_model_but_no_pool():
    uneven = np.cumsum([0.0, 0.02, 0.1, 0.05, 0.3, 0.05])
    table = train_table(recording(trials_at(*[uneven] * 40))).set_index("bouton")
    assert "not evenly spaced" in table.loc[1, "note"]
    assert np.isnan(table.loc[1, "pool"])
    assert table.loc[1, "u_lo"] < P_SITE < table.loc[1, "u_hi"]


def test_trains_of_two_kinds_are_told_apart():
    found = recording(trials_at(*[TRAIN_S, 3 * TRAIN_S[:6], TRAIN_S] * 20))
    check_tables(found)
    assert train_table(found)["trials"].tolist()[:2] == [40, 40]
    assert "2 kinds" in " ".join(train_cautions(found))
    assert sorted(interval_table(found)["interval_s"].unique()) == pytest.approx([0.05, 0.15])
    assert "a time course needs 3" in recovery_table(found)["note"][0]


def test_pulse_intervals_come_back():
    gaps = (0.03, 0.1, 0.3, 1.0)
    found = recording(trials_at(*[(0.0, gap) for gap in gaps] * 60), seed=4)
    check_tables(found)
    table = interval_table(found)
    assert table["trials"].tolist() == [60] * 12
    for bouton in (1, 2):
        rows = table[table["bouton"] == bouton]
        truth = 1 - P_SITE * np.exp(-np.array(gaps) / RECOVERY_S)
        assert rows["interval_s"].to_numpy() == pytest.approx(gaps)
        assert rows["ppr"].to_numpy() == pytest.approx(rows["second_mean"] / rows["first_mean"], rel=0.02)
        assert np.all(np.abs(rows["ppr"] - truth) < 1.8 * (rows["ppr_hi"] - rows["ppr_lo"]) / 2)
    assert table[table["bouton"] == 3]["ppr"].isna().all()
    courses = recovery_table(found).set_index("bouton")
    assert courses.loc[3, "note"] == "the first response is within noise of zero"
    assert courses.loc[4, "model"] == "none"
    summary = interval_summary(found)
    assert summary["model"] == "depression"
    assert summary["depression_lo"] < P_SITE < summary["depression_hi"]
    assert summary["depression_s_lo"] < RECOVERY_S < (summary["depression_s_hi"] or np.inf)
    assert summary["interval_s"] == list(gaps)
    assert "4 different pulse intervals" in interval_cautions(found)[0]


def test_an_interval_that_occurs_once_or_twice_is_no_group():
    found = recording(trials_at(*[(0.0, 0.05)] * 20, (0.0, 0.2), (0.0, 0.2)))
    assert interval_table(found).empty


def test_no_bouton_gives_empty_tables_with_their_columns():
    found = recording(trials_at(*[TRAIN_S] * 12, *[2 * TRAIN_S] * 12))
    empty = measured(found.timing.stimulus_s, np.empty((0, 24, 8)))
    empty.places.bouton = np.empty(0, dtype=int)
    empty.amplitudes.noise_sd = np.empty(0)
    check_tables(empty)
    assert train_table(empty).empty
    assert train_summary(empty) == interval_summary(empty) == {}


@pytest.fixture(scope="module")
def analysed(simulate):
    bouton = BoutonRecipe(y_px=15.0, x_px=32.0, n_sites=4, p_site=0.5, q_dff=0.5, f0_photons=40.0)
    times, table = 0.4, []
    for trial in range(24):
        table.append(tuple(times + (0.06, 0.06, 0.15)[trial % 3] * np.arange(5)))
        times = table[-1][-1] + 0.5
    simulation = simulate(boutons=(bouton,), pulse_table_s=tuple(table), recovery_s=0.3, decay_s=0.03)
    movie = movie_from_array(simulation.frames, frame_interval_s=0.01, pixel_size_um=0.18)
    return run_analysis(
        movie, simulation.protocol, settings=Settings(quanta={"n_max": 4, "bootstrap": 0}, pairs={"bootstrap": 100})
    )


def test_a_movie_of_trains_at_two_rates_has_rows_in_every_table(analysed):
    train = analysed.trains.iloc[0]
    assert (train["pulses"], train["trials"]) == (5, 16)
    assert train["u_lo"] < 0.5 < train["u_hi"]
    assert analysed.intervals["interval_s"].tolist() == pytest.approx([0.06, 0.15])
    assert analysed.intervals["trials"].tolist() == [16, 8]
    assert analysed.recovery["model"].tolist() == ["none"]
    assert {"train", "pulse_intervals"} <= analysed.summary.keys()


def test_cumulative_amplitudes_are_the_sums_of_the_means(analysed):
    pulses = analysed.pulses[analysed.pulses["bouton"] == 1]
    assert pulses["cumulative_mean"].to_numpy() == pytest.approx(np.cumsum(pulses["amplitude_mean"]))
    assert pulses["cumulative_se"].iloc[0] == pytest.approx(pulses["amplitude_se"].iloc[0])
    assert (pulses["cumulative_se"] > 0).all()
