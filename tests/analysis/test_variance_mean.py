"""Variance against mean beside the other estimates: where trials have three pulses, and the data give an answer."""

from __future__ import annotations

from dataclasses import replace

import pandas as pd
import pytest

from napari_boutonrelease.analysis.pipeline import Pipeline
from napari_boutonrelease.analysis.summary import estimates_table
from napari_boutonrelease.analysis.variance_mean import fit_pulses
from napari_boutonrelease.recording import movie_from_array
from napari_boutonrelease.simulation import BoutonRecipe

Q, SITES = 0.5, 3
METHOD = "variance against mean"


@pytest.fixture(scope="module")
def train(simulate, quick, tmp_path_factory):
    """A silent bouton and a busy one, four pulses a trial."""
    boutons = tuple(
        BoutonRecipe(y_px=15.0, x_px=x, n_sites=SITES, p_site=p, q_dff=Q, f0_photons=60.0)
        for x, p in ((14.0, 0.0), (44.0, 0.75))
    )
    simulation = simulate(boutons=boutons, pulses=4, pulse_interval_s=0.06, recovery_s=0.1, trials=60, seed=3)
    movie = movie_from_array(simulation.frames, frame_interval_s=0.01, pixel_size_um=0.16)
    places = tmp_path_factory.mktemp("places") / "places.csv"
    places.write_text("y_px,x_px\n15,14\n15,44\n")
    return Pipeline(movie, simulation.protocol, boutons=places).measure(quick)


def stimulated(measured, stimulus_s):
    timing = replace(measured.timing, stimulus_s=stimulus_s)
    return replace(measured, recording=replace(measured.recording, timing=timing))


def of_parabola(frame):
    return frame[frame["method"] == METHOD]


def test_q_and_sites_stand_beside_the_other_estimates(train):
    mine = of_parabola(estimates_table(train))
    assert set(mine["bouton"]) == {2}  # nothing is known of a silent bouton
    q, sites = (mine[mine["quantity"] == name].iloc[0] for name in ("q", "n_sites"))
    fit = fit_pulses(train, 1)
    assert (q.value, q.lo, q.hi) == (fit.q.value, fit.q.lo, fit.q.hi)
    assert (sites.value, sites.lo, sites.hi) == (fit.n_sites, fit.n_sites_lo, fit.n_sites_hi)
    assert q.lo < Q < q.hi
    assert sites.lo < SITES < sites.hi


def test_one_bouton_gets_the_numbers_that_it_has_in_the_whole_table(train):
    whole = estimates_table(train)
    pd.testing.assert_frame_equal(
        estimates_table(train, row=1), whole[whole["bouton"] == 2].reset_index(drop=True), check_dtype=False
    )


def test_trials_stimulated_at_other_times_are_other_conditions(train):
    assert fit_pulses(train, 1).recording.tolist() == [0] * 4
    stimulus_s = train.timing.stimulus_s.copy()
    stimulus_s[::2, 1:] += 0.04
    assert fit_pulses(stimulated(train, stimulus_s), 1).recording.tolist() == [0] * 4 + [1] * 4


def test_two_pulses_make_no_parabola(train):
    pair = stimulated(train, train.timing.stimulus_s[:, :2])
    assert fit_pulses(pair, 1) is None
    assert of_parabola(estimates_table(pair)).empty
