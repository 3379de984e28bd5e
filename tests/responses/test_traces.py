from types import SimpleNamespace

import numpy as np
import pytest

from napari_boutonrelease.errors import InputError
from napari_boutonrelease.recording import movie_from_array
from napari_boutonrelease.responses import extract_traces

SIGMA = 1.6


def footprints_at(centres, half=7):
    """Least-squares weights of a Gaussian spot and a constant background, on a square patch."""
    y0, x0, weights = [], [], []
    for y, x in centres:
        corner = round(y) - half, round(x) - half
        rows, columns = np.mgrid[0 : 2 * half + 1, 0 : 2 * half + 1]
        spot = np.exp(-((rows + corner[0] - y) ** 2 + (columns + corner[1] - x) ** 2) / (2 * SIGMA**2))
        design = np.column_stack([spot.ravel(), np.ones(spot.size)])
        y0.append(corner[0])
        x0.append(corner[1])
        weights.append(np.linalg.pinv(design)[0].reshape(spot.shape))
    return SimpleNamespace(y0=np.array(y0), x0=np.array(x0), weights=tuple(weights))


def drift_of(dy, dx, used=None):
    dy, dx = np.asarray(dy, dtype=float), np.asarray(dx, dtype=float)
    return SimpleNamespace(dy_px=dy, dx_px=dx, used=np.ones(dy.size, dtype=bool) if used is None else np.asarray(used))


def spots(centres, brightness, dy, dx, shape=(40, 60), background=100.0):
    rows, columns = np.mgrid[0 : shape[0], 0 : shape[1]]
    frames = np.full((len(dy), *shape), background)
    for (y, x), series in zip(centres, brightness, strict=True):
        for i in range(len(dy)):
            away = (rows - y - dy[i]) ** 2 + (columns - x - dx[i]) ** 2
            frames[i] += series[i] * np.exp(-away / (2 * SIGMA**2))
    return frames


def extract(frames, footprints, drift, block_frames=64):
    return extract_traces(
        movie_from_array(frames), footprints=footprints, drift=drift, block_frames=block_frames, progress=None
    )


def test_without_movement_a_trace_is_the_sum_of_weights_times_frame():
    rng = np.random.default_rng(1)
    frames = rng.integers(0, 4000, (50, 30, 40)).astype(np.uint16)
    footprints = SimpleNamespace(
        y0=np.array([3, 10]), x0=np.array([5, 20]), weights=(rng.normal(size=(9, 7)), rng.normal(size=(5, 6)))
    )
    found = extract(frames, footprints, drift_of(np.zeros(50), np.zeros(50)))
    direct = [
        np.einsum("ij,tij->t", footprints.weights[0], frames[:, 3:12, 5:12].astype(float)),
        np.einsum("ij,tij->t", footprints.weights[1], frames[:, 10:15, 20:26].astype(float)),
    ]
    assert found == pytest.approx(np.array(direct), rel=1e-12)


def test_weights_follow_the_sample_between_pixels():
    rng = np.random.default_rng(2)
    centres = [(15.3, 20.8), (22.0, 40.4)]
    dy, dx = np.cumsum(rng.normal(0, 0.15, 300)), np.cumsum(rng.normal(0, 0.15, 300))
    brightness = rng.uniform(50, 150, (2, 300))
    frames = spots(centres, brightness, dy, dx)
    followed = extract(frames, footprints_at(centres), drift_of(dy, dx)) / brightness
    ignored = extract(frames, footprints_at(centres), drift_of(0 * dy, 0 * dx)) / brightness
    assert np.median(np.abs(followed - 1)) < 0.006  # what cubic convolution takes off a spot of this size
    assert np.std(followed) < 0.15 * np.std(ignored)


def test_whole_pixel_moves_are_exact():
    rng = np.random.default_rng(3)
    centres = [(18.0, 25.0)]
    dy, dx = rng.integers(-4, 5, 40), rng.integers(-6, 7, 40)
    brightness = rng.uniform(50, 150, (1, 40))
    found = extract(spots(centres, brightness, dy, dx), footprints_at(centres), drift_of(dy, dx))
    assert found == pytest.approx(brightness, rel=1e-9)


def test_blocks_do_not_matter_and_progress_is_reported():
    rng = np.random.default_rng(4)
    frames = rng.integers(0, 4000, (101, 40, 60)).astype(np.uint16)
    footprints = footprints_at([(15.0, 20.0), (30.0, 50.0)])
    drift = drift_of(rng.normal(0, 2, 101), rng.normal(0, 2, 101))
    steps = []
    small = extract_traces(
        movie_from_array(frames),
        footprints=footprints,
        drift=drift,
        block_frames=7,
        progress=lambda done, total: steps.append((done, total)),
    )
    np.testing.assert_allclose(small, extract(frames, footprints, drift, block_frames=1000), rtol=1e-12, atol=1e-9)
    assert steps[-1] == (101, 101)
    assert len(steps) == 15


def test_unused_frames_are_nan_and_their_drift_is_not_looked_at():
    rng = np.random.default_rng(5)
    frames = rng.integers(0, 4000, (30, 40, 60)).astype(np.uint16)
    used = rng.random(30) > 0.3
    dy = np.where(used, 0.3, np.nan)
    found = extract(frames, footprints_at([(15.0, 20.0)]), drift_of(dy, dy, used))
    assert np.array_equal(np.isfinite(found[0]), used)


def test_at_the_border_a_trace_goes_on_until_the_bouton_has_left():
    centres = [(9.0, 12.0)]
    dy = -np.arange(0.0, 24.0)
    dx = 0.5 + np.zeros(24)
    frames = spots(centres, np.full((1, 24), 100.0), dy, dx)
    found = extract(frames, footprints_at(centres), drift_of(dy, dx))[0]
    assert found[:3] == pytest.approx(np.full(3, 100.0), rel=0.01)
    assert np.isfinite(found[:8]).all()
    assert np.isnan(found[14:]).all()


def test_a_bouton_that_cannot_be_seen_is_nan():
    footprints = footprints_at([(15.0, 20.0), (30.0, 40.0)])
    footprints.weights = (footprints.weights[0], np.full_like(footprints.weights[1], np.nan))
    found = extract(np.ones((4, 40, 60)), footprints, drift_of(np.full(4, 0.2), np.zeros(4)))
    assert np.isfinite(found[0]).all()
    assert np.isnan(found[1]).all()


def test_drift_of_another_movie_is_refused():
    with pytest.raises(InputError, match=r"drift describes 9 frames but the movie .* has 4"):
        extract(np.ones((4, 40, 60)), footprints_at([(15.0, 20.0)]), drift_of(np.zeros(9), np.zeros(9)))


def test_moving_the_weights_leaves_the_noise_as_it_is():
    rng = np.random.default_rng(6)
    frames = rng.poisson(200.0, (1500, 40, 60)).astype(np.uint16)
    footprints = footprints_at([(18.0, 25.0)])
    still = extract(frames, footprints, drift_of(np.zeros(1500), np.zeros(1500)))[0]
    moved = extract(frames, footprints, drift_of(rng.uniform(-2, 2, 1500), rng.uniform(-2, 2, 1500)))[0]
    assert np.std(moved) == pytest.approx(np.std(still), rel=0.1)
