"""From simulated movies to places and readings: nothing of the simulation is known to the analysis but its protocol."""

import numpy as np
import pytest

from napari_boutonrelease.boutons import (
    Optics,
    build_footprints,
    detect_boutons,
    estimate_spot_sigma,
    project_responses,
)
from napari_boutonrelease.recording import movie_from_array, resolve_timing
from napari_boutonrelease.recording.light import measure_light
from napari_boutonrelease.recording.motion import measure_drift
from napari_boutonrelease.response_shape import ResponseShape
from napari_boutonrelease.simulation import (
    Recipe,
    expected_profile,
    noise_variance,
    protocol_of,
    simulate_recording,
)


def analyse(recipe, *, seed):
    simulation = simulate_recording(recipe, rng=np.random.default_rng(seed))
    movie = movie_from_array(
        simulation.frames,
        frame_interval_s=recipe.frame_interval_s,
        pixel_size_um=recipe.pixel_size_um,
        file_frames=recipe.file_frames,
    )
    timing = resolve_timing(movie, protocol_of(recipe))
    light = measure_light(movie, camera_offset=recipe.offset_counts, block_frames=256)
    drift = measure_drift(movie, light=light, max_shift_px=8, block_frames=256)
    stack = project_responses(
        movie,
        timing=timing,
        drift=drift,
        shape=ResponseShape(latency_s=recipe.latency_s, rise_s=recipe.rise_s, decay_s=recipe.decay_s),
        pre_s=0.12,
        post_s=0.24,
        memory_bytes=2e8,
        block_frames=256,
        progress=None,
    )
    dy, dx = drift.dy_px[drift.used], drift.dx_px[drift.used]
    optics = Optics(
        mean_image=stack.mean_image,
        variance_image=light.variance_at(stack.mean_image),
        saturated=light.saturated,
        dead=light.dead,
        dy_range_px=(dy.min(), dy.max()),
        dx_range_px=(dx.min(), dx.max()),
    )
    detection = detect_boutons(
        stack,
        spot_sigma_px=0.255 / recipe.pixel_size_um,
        spacing_px=0.7 / recipe.pixel_size_um,
        false_discovery=0.05,
        shape_candidates=True,
        exclude=~optics.usable(),
        rng=np.random.default_rng(seed),
        progress=None,
    )
    # Drift is measured from its median, in the simulation from its mean.
    y = simulation.truth.y_px + np.median(simulation.truth.dy_px)
    x = simulation.truth.x_px + np.median(simulation.truth.dx_px)
    apart_um = recipe.pixel_size_um * np.hypot(detection.y_px[:, None] - y, detection.x_px[:, None] - x)
    return simulation.truth, optics, detection, apart_um


def test_boutons_of_a_drifting_axon_are_found_and_read():
    recipe = Recipe(
        height_px=48,
        width_px=128,
        trials=30,
        trial_interval_s=0.7,
        pulses=2,
        n_boutons=5,
        silent_boutons=1,
        specks_off_axon=1,
        p_release=(0.2, 0.9),
        q_dff=0.45,
        drift_wave_px=0.6,
    )
    truth, _, detection, apart_um = analyse(recipe, seed=1)
    assert apart_um.min(axis=0).max() < 0.1
    assert np.sum(apart_um.min(axis=1) > 0.4) == 0
    how = np.array(detection.found_by)[apart_um.argmin(axis=0)]
    assert [kind == "releasing" for kind in truth.kind] == [found in ("both", "responses") for found in how]


def test_an_axon_that_never_releases_is_seen_by_shape_alone_and_read_without_its_shaft():
    recipe = Recipe(
        height_px=48,
        width_px=112,
        trials=30,
        trial_interval_s=0.7,
        n_boutons=5,
        silent_boutons=5,
        dim_boutons=1,
        specks_off_axon=1,
        shaft_fraction=0.15,
    )
    truth, optics, detection, apart_um = analyse(recipe, seed=2)
    assert set(detection.found_by) == {"shape"}
    assert apart_um.min(axis=0).max() < 0.1

    sigma = estimate_spot_sigma(
        optics.mean_image,
        y_px=detection.y_px,
        x_px=detection.x_px,
        start_sigma_px=detection.spot_sigma_px,
        usable=optics.usable(),
    )
    footprints = build_footprints(
        y_px=detection.y_px,
        x_px=detection.x_px,
        optics=optics,
        spot_sigma_px=sigma,
        background_radius_px=2.5 / recipe.pixel_size_um,
        mode="weighted",
        response_image=None,
        response_variance=None,
    )
    at = apart_um.argmin(axis=0)
    baseline = np.array(
        [
            np.sum(weights * optics.mean_image[y0 : y0 + weights.shape[0], x0 : x0 + weights.shape[1]])
            for weights, y0, x0 in zip(footprints.weights, footprints.y0, footprints.x0, strict=True)
        ]
    )
    light = recipe.gain * truth.f0_photons * (1 - recipe.bleached / 2)
    own = (baseline - footprints.shaft_counts)[at]
    # A blurred disc is a little flatter than the Gaussian it is fitted with.
    np.testing.assert_allclose(own, light, rtol=0.12)
    for spot, index in enumerate(at):
        y0, x0, profile = expected_profile(truth, spot)
        noise = noise_variance(truth)
        limit = 1 / np.sqrt(np.sum(profile**2 / noise[y0 : y0 + profile.shape[0], x0 : x0 + profile.shape[1]]))
        whole = np.zeros(noise.shape)
        whole[y0 : y0 + profile.shape[0], x0 : x0 + profile.shape[1]] = profile
        weights = np.zeros(noise.shape)
        patch = footprints.weights[index]
        top, left = footprints.y0[index], footprints.x0[index]
        weights[top : top + patch.shape[0], left : left + patch.shape[1]] = patch
        sd = np.sqrt(np.sum(weights**2 * noise)) / np.sum(weights * whole)
        # Even one who knows the profile, the noise and the background could not read it with less noise than `limit`.
        assert limit < sd <= 1.15 * limit
    assert np.all(footprints.shaft_counts[at][: recipe.n_boutons] > 1.0)  # the speck lies off the axon


def test_boutons_a_micrometre_apart_are_told_apart():
    recipe = Recipe(
        height_px=48,
        width_px=80,
        trials=40,
        trial_interval_s=0.7,
        n_boutons=6,
        spacing_um=1.0,
        spacing_sd_um=0.08,
        p_release=(0.2, 0.9),
        q_dff=0.45,
    )
    truth, _, detection, apart_um = analyse(recipe, seed=3)
    assert apart_um.min(axis=0).max() < 0.2
    assert len(set(apart_um.argmin(axis=0))) == len(truth.kind)
    assert {detection.found_by[i] for i in apart_um.argmin(axis=0)} <= {"both", "responses"}
    assert detection.spot_sigma_px * recipe.pixel_size_um == pytest.approx(0.29, abs=0.05)
