"""A reporter that saturates: undone where the settings say how, pointed out where they do not."""

from dataclasses import replace

import numpy as np
import pytest

from napari_boutonrelease.analysis.pipeline import Pipeline
from napari_boutonrelease.analysis.savefile import provenance_of
from napari_boutonrelease.analysis.settings import PairSettings, QuantalSettings, ReporterSettings, Settings
from napari_boutonrelease.analysis.summary import cautions_of
from napari_boutonrelease.analysis.tables import bouton_flags
from napari_boutonrelease.recording import movie_from_array
from napari_boutonrelease.simulation import BoutonRecipe, Recipe, simulate_recording

MAX_DFF, Q = 2.0, 0.5
N_SITES, P_SITE = np.array([2, 3, 4, 3]), np.array([0.6, 0.5, 0.4, 0.3])
SETTINGS = Settings(quanta=QuantalSettings(bootstrap=0, n_max=6), pairs=PairSettings(bootstrap=100))


def told(**reporter):
    return SETTINGS.model_copy(update={"reporter": ReporterSettings(**reporter)})


def simulated(n_sites, p_site, *, trials):
    recipe = Recipe(
        boutons=tuple(
            BoutonRecipe(y_px=16.0, x_px=10.0 + 15 * i, n_sites=int(n), p_site=float(p), q_dff=Q, f0_photons=40.0)
            for i, (n, p) in enumerate(zip(n_sites, p_site, strict=True))
        ),
        height_px=32,
        width_px=15 * len(n_sites) + 6,
        trials=trials,
        first_s=0.4,
        trial_interval_s=0.5,
        wander_um=0.0,
        drift_walk_px=0.0,
        drift_wave_px=0.1,
        saturation_dff=MAX_DFF,
    )
    simulation = simulate_recording(recipe, rng=np.random.default_rng(4))
    movie = movie_from_array(
        simulation.frames, frame_interval_s=recipe.frame_interval_s, pixel_size_um=recipe.pixel_size_um
    )
    return Pipeline(movie, simulation.protocol)


@pytest.fixture(scope="module")
def pipeline():
    return simulated(N_SITES, P_SITE, trials=90)


@pytest.fixture(scope="module")
def shown(pipeline):
    return pipeline.measure(SETTINGS)


@pytest.fixture(scope="module")
def undone(pipeline, shown):
    return pipeline.measure(told(max_dff=MAX_DFF))


def errors(measured):
    axon, order = measured.release.axon, np.argsort(measured.places.footprints.x_px)
    vesicles = axon.vesicles[order, 0]
    return {
        "q": np.abs(axon.q[order] / Q - 1).mean(),
        "n_sites": np.abs(axon.n_sites[order] - N_SITES).mean(),
        "p_site": np.abs(axon.p_site[order, 0] - P_SITE).mean(),
        "vesicles": np.abs(vesicles / (N_SITES * P_SITE) - 1).mean(),
    }


def test_undoing_saturation_brings_quanta_closer_to_the_truth(shown, undone):
    before, after = errors(shown), errors(undone)
    for name in before:
        assert after[name] < before[name], name
    assert after["q"] < 0.08
    assert after["n_sites"] <= 0.75
    assert after["vesicles"] < 0.2


def test_compression_is_pointed_out_where_no_correction_is_set(shown, undone):
    pooled = shown.release.axon_compression
    assert pooled.n_boutons > 0
    assert pooled.compression > 0.05
    clear = replace(pooled, p=1e-4, compression=0.2)
    release = {"axon_compression": clear, "compression": (clear, *shown.release.compression[1:])}
    shown, undone = (replace(one, release=replace(one.release, **release)) for one in (shown, undone))
    assert any("smaller than their sum (p = 0.0001" in caution for caution in cautions_of(shown))
    assert not any("smaller than their sum" in caution for caution in cautions_of(undone))
    assert ["compressed" in flags.split(";") for flags in bouton_flags(shown)] == [
        one.p < 0.01 for one in shown.release.compression
    ]


@pytest.mark.validation
def test_axon_of_six_boutons_is_found_compressed():
    measured = simulated([2, 3, 4, 3, 2, 4], [0.6, 0.5, 0.4, 0.3, 0.4, 0.5], trials=150).measure(SETTINGS)
    assert measured.release.axon_compression.p < 0.01
    assert any("smaller than their sum" in caution for caution in cautions_of(measured))


def test_amplitudes_grow_and_noise_at_rest_stays(shown, undone):
    largest = np.nanmax(shown.amplitudes.amplitude, axis=(1, 2))
    assert np.all(np.nanmax(undone.amplitudes.amplitude, axis=(1, 2)) > 1.2 * largest)
    np.testing.assert_allclose(undone.amplitudes.noise_sd, shown.amplitudes.noise_sd, rtol=0.2)
    assert not undone.above_ceiling.any()


def test_ceiling_that_is_reached_is_said(pipeline):
    measured = pipeline.measure(told(max_dff=0.9))
    assert measured.above_ceiling.sum() > 0
    assert any("max_dff = 0.9: left out" in caution for caution in cautions_of(measured))
    assert np.isfinite(measured.release.axon.p_release).all()


def test_reporter_is_saved_with_the_analysis(pipeline, undone):
    saved = Settings.model_validate(provenance_of(undone, pipeline=pipeline)["settings"])
    assert saved.reporter == ReporterSettings(max_dff=MAX_DFF)


def test_hill_coefficient_needs_the_share_bound_at_rest():
    with pytest.raises(ValueError, match="needs rest_share"):
        ReporterSettings(max_dff=2.0, hill=2.0)
    assert ReporterSettings(max_dff=2.0, hill=2.0, rest_share=0.1).rest_share == 0.1
