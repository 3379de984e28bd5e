"""What an analysis says of boutons that it would have missed."""

from dataclasses import replace

import numpy as np
import pytest

from napari_boutonrelease.analysis.columns import SUMMARY, TABLES
from napari_boutonrelease.analysis.pipeline import Pipeline
from napari_boutonrelease.analysis.run import put_together, run_analysis
from napari_boutonrelease.analysis.selection import measure_selection, selection_summary
from napari_boutonrelease.analysis.settings import SelectionSettings
from napari_boutonrelease.recording import movie_from_array
from napari_boutonrelease.simulation import BoutonRecipe, Recipe, simulate_recording


def opened(simulation):
    return movie_from_array(simulation.frames, frame_interval_s=0.01, pixel_size_um=0.18), simulation.protocol


@pytest.fixture(scope="module")
def measured(simulate, quick):
    movie, protocol = opened(simulate())
    pipeline = Pipeline(movie, protocol)
    return pipeline, pipeline.measure(quick)


def test_a_clear_recording_misses_only_rare_releasers(measured):
    pipeline, found = measured
    result = put_together(found, pipeline=pipeline)
    assert tuple(result.detection.columns) == TABLES["detection"].names
    assert np.all(np.diff(result.detection["found_share_fit"]) >= 0)
    assert result.detection["found_share"].iloc[-1] == 1.0
    told = result.summary["selection"]
    assert {f"selection.{key}" for key in told} <= SUMMARY.keys()
    assert told["p_found_half_lo"] <= told["p_found_half"] <= told["p_found_half_hi"] < 0.1
    assert told["boutons"] == 3
    assert told["p_release_lo"] < told["p_release"] < told["p_release_hi"]
    assert told["missed_per_found"] < 0.1  # boutons of 0.3 and more are not easily missed
    assert told["p_release"] == pytest.approx(told["p_release_found"], abs=0.1)
    assert any("hardly ever found" in caution for caution in result.cautions)


def test_it_is_repeatable_and_can_be_left_out(measured):
    _, found = measured
    once, again = measure_selection(found), measure_selection(found)
    assert once.found.tolist() == again.found.tolist()
    settings = found.settings.model_copy(update={"selection": SelectionSettings(planted=0)})
    left_out = measure_selection(replace(found, settings=settings))
    assert selection_summary(left_out) == {"method": "none: left out by the settings"}


def test_given_boutons_are_not_a_selection(simulate, quick, tmp_path):
    table = tmp_path / "boutons.csv"
    table.write_text("bouton,y_px,x_px\n1,14,12\n2,17,32\n")
    movie, protocol = opened(simulate())
    result = run_analysis(movie, protocol, settings=quick, boutons=table)
    assert result.detection.empty
    assert result.summary["selection"]["method"] == "none: the boutons were given"


def test_an_axon_that_never_releases_says_so(simulate, quick):
    movie, protocol = opened(simulate(boutons=(), n_boutons=3, silent_boutons=3))
    result = run_analysis(movie, protocol, settings=quick)
    assert result.detection.empty
    assert "no bouton was found by its responses" in result.summary["selection"]["method"]


def test_a_single_stimulus_leaves_nothing_to_plant_in(simulate, quick):
    movie, protocol = opened(simulate(trials=1, trial_interval_s=1.0))
    with pytest.warns(Warning, match="shape alone"):
        result = run_analysis(movie, protocol, settings=quick)
    assert "none" in result.summary["selection"]["method"]


def dim_axon(seed):
    """Twelve boutons of an axon on which release is rare, in so little light that some are missed."""
    rng = np.random.default_rng(seed)
    n = 12
    x = 14 + 18.0 * np.arange(n) + rng.uniform(-3, 3, n)
    y = 20 + 6 * np.sin(x / 40)
    p = rng.beta(1.0, 5.0, n)
    boutons = tuple(
        BoutonRecipe(
            y_px=float(y[i]),
            x_px=float(x[i]),
            n_sites=1,
            p_site=float(p[i]),
            q_dff=float(0.4 * np.exp(0.1 * rng.standard_normal())),
            f0_photons=float(3.0 * np.exp(0.25 * rng.standard_normal())),
        )
        for i in range(n)
    )
    recipe = Recipe(
        height_px=40, width_px=238, trials=40, trial_interval_s=0.6, boutons=boutons, background_photons=1.5
    )
    return y, x, p, simulate_recording(recipe, rng=rng)


@pytest.mark.validation
def test_true_boutons_are_found_as_the_curve_says_and_the_corrected_mean_is_less_biased(quick):
    expected, chance, n_found, plain, corrected, covered = 0.0, 0.0, 0, [], [], []
    law = np.random.default_rng(1).beta(1.0, 5.0, 400_000)
    for seed in range(24):
        y, x, p, simulation = dim_axon(seed)
        movie, protocol = opened(simulation)
        found = Pipeline(movie, protocol).measure(quick)
        selection = measure_selection(found)
        if selection.curve is None:
            continue
        selected = np.array([way in ("responses", "both") for way in found.places.found_by])
        prints = found.places.footprints
        apart = np.hypot(prints.y_px[selected, None] - y, prints.x_px[selected, None] - x).min(axis=0, initial=99)
        share = selection.curve.at(p)
        expected, chance = expected + share.sum(), chance + np.sum(share * (1 - share))
        n_found += int(np.sum(apart < 2))
        correction = selection.correction
        if np.isfinite(correction.mean.value):
            truth = law[law > correction.smallest].mean()
            plain.append(correction.mean_found - truth)
            corrected.append(correction.mean.value - truth)
            covered.append(correction.mean.lo <= truth <= correction.mean.hi)
    # the brightness of few found boutons stands for all: 10 % beyond chance
    assert abs(n_found - expected) < 3.3 * np.sqrt(chance) + 0.1 * expected
    assert abs(np.mean(corrected)) < 0.6 * np.mean(plain)
    assert np.mean(covered) > 0.75
