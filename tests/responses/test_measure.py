"""The whole room on small simulated movies, from frames to amplitudes."""

from dataclasses import replace

import numpy as np
import pytest

from napari_boutonrelease.boutons import Optics, build_footprints
from napari_boutonrelease.recording import measure_drift, measure_light, movie_from_array, resolve_timing
from napari_boutonrelease.response_shape import ResponseShape
from napari_boutonrelease.responses import detect_spontaneous, extract_traces, measure_responses
from napari_boutonrelease.simulation import preset_recipe, simulate_recording


def analyse(recipe, *, seed, shape=None):
    simulation = simulate_recording(recipe, rng=np.random.default_rng(seed))
    truth = simulation.truth
    movie = movie_from_array(
        simulation.frames,
        frame_interval_s=simulation.protocol.frame_interval_s,
        file_frames=tuple(int(n) for n in np.bincount(truth.segment)),
    )
    timing = resolve_timing(movie, simulation.protocol)
    light = measure_light(movie, camera_offset=timing.camera_offset, block_frames=256)
    drift = measure_drift(movie, light=light, max_shift_px=8.0, block_frames=256)
    spots = truth.boutons
    optics = Optics(
        mean_image=drift.reference,
        variance_image=np.maximum(light.variance_at(drift.reference), 1e-3),
        saturated=light.saturated,
        dead=light.dead,
        dy_range_px=(float(np.min(drift.dy_px)), float(np.max(drift.dy_px))),
        dx_range_px=(float(np.min(drift.dx_px)), float(np.max(drift.dx_px))),
    )
    footprints = build_footprints(
        y_px=truth.y_px[spots] - np.median(drift.dy_px - truth.dy_px),
        x_px=truth.x_px[spots] - np.median(drift.dx_px - truth.dx_px),
        optics=optics,
        spot_sigma_px=recipe.psf_sigma_um / timing.pixel_size_um,
        background_radius_px=14.0,
        mode="weighted",
        response_image=None,
        response_variance=None,
    )
    f = extract_traces(movie, footprints=footprints, drift=drift, block_frames=256, progress=None)
    f = f - footprints.shaft_counts[:, None]
    found = measure_responses(
        f,
        timing=timing,
        y_px=footprints.y_px,
        used=drift.used,
        shape=shape,
        baseline_method="bleaching",
        baseline_s=None,
        percentile=10.0,
        running_s=5.0,
        slope=False,
    )
    spontaneous = detect_spontaneous(
        f,
        baseline=found.baseline,
        fit=found.amplitudes,
        timing=timing,
        y_px=footprints.y_px,
        shape=found.shape,
        used=drift.used,
        threshold_sd=2.5,
        false_per_bouton=0.05,
    )
    return truth, found, spontaneous


@pytest.mark.parametrize("name", ["fast-pair", "rolling"])
def test_amplitudes_of_a_simulated_movie(name):
    recipe = replace(preset_recipe(name), trials=40, width_px=120, n_boutons=4, specks_on_axon=0, specks_off_axon=0)
    truth, found, _ = analyse(recipe, seed=1)
    true = truth.amplitude_dff[truth.boutons]
    amplitude, error = found.amplitudes.amplitude, found.amplitudes.amplitude - true
    assert found.baseline.usable.all()
    assert found.shape_from == "recording"
    assert found.shape.decay_s == pytest.approx(recipe.decay_s, rel=0.15)
    assert np.sum(amplitude * true) / np.sum(true**2) == pytest.approx(1.0, abs=0.15)
    failures = true == 0
    z = error[failures] / found.amplitudes.amplitude_se[failures]
    assert np.sqrt(np.mean(z**2)) == pytest.approx(1.0, abs=0.2)
    assert np.mean(error[failures]) == pytest.approx(0.0, abs=0.02)


def test_a_shape_in_the_protocol_is_kept():
    recipe = replace(
        preset_recipe("fast-single"), trials=20, width_px=100, n_boutons=3, specks_on_axon=0, specks_off_axon=0
    )
    stated = ResponseShape(latency_s=0.001, rise_s=0.003, decay_s=0.06)
    truth, found, spontaneous = analyse(recipe, seed=2, shape=stated)
    assert found.shape == stated
    assert found.shape_from == "protocol"
    assert found.shape_fit is None
    assert found.amplitudes.amplitude.shape == truth.amplitude_dff[truth.boutons].shape
    assert spontaneous.observed_s.min() > 1.0
