from dataclasses import replace

import numpy as np
import pytest

from napari_boutonrelease.simulation import (
    BoutonRecipe,
    Recipe,
    expected_profile,
    frame_blocks,
    noise_variance,
    plan_recording,
    rest_image,
    simulate_recording,
)
from napari_boutonrelease.simulation.movie import photon_blocks

# One bouton, nothing moves or fades, nothing but photons makes noise.
STILL = Recipe(
    height_px=32,
    width_px=40,
    trials=4,
    trial_interval_s=0.5,
    boutons=(BoutonRecipe(y_px=15.0, x_px=20.0, n_sites=1, p_site=0.0, q_dff=0.4, f0_photons=40.0),),
    background_cv=0.0,
    bleached=0.0,
    drift_walk_px=0.0,
    drift_wave_px=0.0,
)
CERTAIN = replace(STILL, boutons=(replace(STILL.boutons[0], p_site=1.0),), jitter_s=0.0, q_cv=0.0)


def rng(seed=1):
    return np.random.default_rng(seed)


def photons(recipe, seed=1):
    truth = plan_recording(recipe, rng=rng(seed))
    return np.concatenate(list(photon_blocks(truth, rng=rng(seed)))), truth


def relative_rise(recipe):
    """Light that responses add, in units of the bouton's F0, frame by frame and row by row of the bouton's column."""
    light, truth = photons(recipe)
    quiet, _ = photons(STILL)
    y0, x0, patch = expected_profile(truth, 0)
    column = 20 - x0
    rise = (light - quiet[0])[:, y0 : y0 + patch.shape[0], 20] / (40.0 * patch[:, column])
    return rise, truth


def test_same_seed_gives_the_same_movie_and_another_seed_another():
    first, again, other = (simulate_recording(Recipe(trials=2), rng=rng(seed)).frames for seed in (1, 1, 2))
    assert np.array_equal(first, again)
    assert not np.array_equal(first, other)


@pytest.mark.parametrize(("multiplying", "excess"), [(False, 1.0), (True, 2.0)])
def test_variance_grows_with_the_mean_by_gain_and_excess(multiplying, excess):
    recipe = replace(STILL, trials=20, electron_multiplying=multiplying, gain=3.0, read_noise_e=2.0)
    simulation = simulate_recording(recipe, rng=rng())
    frames = simulation.frames.astype(float)
    electrons = rest_image(simulation.truth)
    wanted = 9.0 * (excess * electrons + 4.0)
    mean, variance = frames.mean(axis=0) - 100.0, frames.var(axis=0, ddof=1)
    n = len(frames)
    assert n > 1000
    assert np.abs(mean - 3.0 * electrons).max() < 5 * np.sqrt(wanted.max() / n)
    slope, intercept = np.polyfit(mean.ravel(), variance.ravel(), 1, w=1 / wanted.ravel())
    assert slope == pytest.approx(3.0 * excess, rel=0.03)
    assert intercept == pytest.approx(36.0, rel=0.12)
    assert np.median(variance / noise_variance(simulation.truth)) == pytest.approx(1.0, abs=0.01)


def test_photons_are_poisson_distributed_counts():
    recipe = replace(STILL, gain=1.0, read_noise_e=0.0, offset_counts=0.0, shaft_fraction=0.0, background_photons=0.8)
    frames = simulate_recording(recipe, rng=rng()).frames[:, :3, :3]
    empty = (frames == 0).mean()
    assert abs(empty - np.exp(-0.8)) < 4 * np.sqrt(0.25 / frames.size)


def test_axon_is_as_bright_as_stated_beside_a_bouton():
    truth = plan_recording(replace(STILL, photons=40.0), rng=rng())
    assert truth.shaft_photons.max() == pytest.approx(4.0, rel=0.02)
    assert truth.shaft_photons[0].max() < 0.01


def test_response_starts_when_and_as_high_as_the_vesicle_says():
    rise, truth = relative_rise(CERTAIN)
    assert truth.vesicles[0, :, 0].tolist() == [1, 1, 1, 1]
    assert rise[49].max() < 1e-9
    # Latency 2 ms, rise 3 ms: within the frame of the stimulus the peak is nearly reached, and lost by decay after.
    assert rise[50:53].max() == pytest.approx(0.4, rel=0.15)
    assert rise[50] == pytest.approx(np.full(rise.shape[1], rise[50, 0]))
    assert rise[60, 0] / rise[54, 0] == pytest.approx(np.exp(-0.06 / 0.06), rel=1e-6)


def test_rows_of_a_rolling_shutter_see_the_response_later():
    rise, truth = relative_rise(replace(CERTAIN, row_time_s=0.0003))
    y0 = expected_profile(truth, 0)[0]
    later_rows = rise[55] / rise[55, 0]
    rows = np.arange(rise.shape[1])
    assert y0 > 0
    assert later_rows == pytest.approx(np.exp(-0.0003 * rows / 0.06), rel=1e-6)


def test_trials_of_their_own_file_continue_on_the_laboratory_clock():
    recipe = replace(CERTAIN, trials=3, file_s=0.4, trial_interval_s=0.5, first_s=0.3, decay_s=0.2, bleached=0.5)
    light, truth = photons(recipe)
    assert truth.segment.tolist() == [0] * 40 + [1] * 40 + [2] * 40
    assert truth.stimulus_s[:, 0] == pytest.approx([0.3, 0.7, 1.1])
    assert truth.frame_clock_s[[0, 40, 80]] == pytest.approx([0.0, 0.5, 1.0])
    assert truth.light[[0, -1]] == pytest.approx([1.0, 0.5])
    assert truth.light[40] / truth.light[39] == pytest.approx(truth.light[1] / truth.light[0])
    # The tail goes on through the 100 ms between the files.
    tail = light[:, 15, 20] / truth.light - light[0, 15, 20]
    assert tail[40] / tail[39] == pytest.approx(np.exp(-0.11 / 0.2), rel=1e-3)


def test_bouton_moves_with_the_drift_and_keeps_its_light():
    recipe = replace(STILL, shaft_fraction=0.0, background_photons=0.0, drift_walk_px=0.1, drift_jumps=2)
    light, truth = photons(recipe)
    rows, columns = np.mgrid[0:32, 0:40]
    total = light.sum(axis=(1, 2))
    near = np.hypot(truth.dy_px, truth.dx_px) < 5
    assert near.sum() > 50
    assert np.ptp(truth.dy_px) > 0.5
    for index, mean_px, shift in ((rows, 15.0, truth.dy_px), (columns, 20.0, truth.dx_px)):
        centroid = (light * index).sum(axis=(1, 2)) / total
        assert centroid[near] == pytest.approx((mean_px + shift)[near], abs=5e-3)
    assert total[near] == pytest.approx(np.full(near.sum(), total[near][0]), rel=1e-3)
    assert truth.dy_px.mean() == pytest.approx(0.0, abs=1e-12)


def test_light_bleaches_stops_in_dark_frames_and_floods_in_flashes():
    recipe = replace(STILL, bleached=0.3, dark_frames=(5, 6), flash_frames=(9,), flash_photons=500.0)
    light, truth = photons(recipe)
    assert light[5].max() == light[6].max() == 0.0
    assert truth.light[7] / truth.light[4] == pytest.approx(truth.light[4] / truth.light[3])
    assert light[-1] / light[0] == pytest.approx(np.full(light[0].shape, 0.7))
    assert (light[9] - light[10]).min() == pytest.approx(500.0, rel=0.01)


def test_diffuse_light_fluctuates_slowly_by_the_stated_amount():
    recipe = replace(
        STILL,
        trials=100,
        shaft_fraction=0.0,
        background_cv=0.05,
        background_s=0.1,
        background_um=1.0,
        n_boutons=0,
        boutons=(),
    )
    light, _ = photons(recipe)
    relative = light / 3.0 - 1.0
    assert relative.std() == pytest.approx(0.05, rel=0.05)
    together = [np.mean(relative[:-lag, ::8, ::8] * relative[lag:, ::8, ::8]) for lag in (5, 10)]
    assert together[0] / relative.var() == pytest.approx(np.exp(-0.5), abs=0.06)
    assert together[1] / relative.var() == pytest.approx(np.exp(-1.0), abs=0.06)


def test_camera_clips_rounds_and_has_dead_pixels():
    recipe = replace(STILL, bit_depth=8, dtype="uint8", saturated_specks=1, dead_pixels=7, offset_counts=10.0)
    simulation = simulate_recording(recipe, rng=rng())
    assert simulation.frames.dtype == np.uint8
    speck = np.flatnonzero([kind == "speck" for kind in simulation.truth.kind])[0]
    y, x = round(simulation.truth.y_px[speck]), round(simulation.truth.x_px[speck])
    assert np.all(simulation.frames[:, y, x] == 255)
    y, x = simulation.truth.dead_px.T
    assert np.all(simulation.frames[:, y, x] == 10)


def test_floating_point_movies_are_not_rounded():
    frames = simulate_recording(replace(STILL, dtype="float32"), rng=rng()).frames
    assert frames.dtype == np.float32
    assert np.mean(frames == np.rint(frames)) < 0.01


def test_blocks_join_to_the_movie_in_memory():
    generator = rng()
    truth = plan_recording(STILL, rng=generator)
    assert np.array_equal(
        np.concatenate(list(frame_blocks(truth, rng=generator))), simulate_recording(STILL, rng=rng()).frames
    )


def test_progress_ends_with_all_frames():
    reports = []
    simulate_recording(STILL, rng=rng(), progress=lambda done, total: reports.append((done, total)))
    assert reports[-1] == (STILL.n_frames, STILL.n_frames)
    assert [done for done, _ in reports] == sorted(done for done, _ in reports)
