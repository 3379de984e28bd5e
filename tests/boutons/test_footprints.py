import numpy as np
import pytest

from napari_boutonrelease.boutons import (
    Optics,
    build_footprints,
    crosstalk_matrix,
    estimate_spot_sigma,
    footprints_from_labels,
)
from napari_boutonrelease.errors import InputError

from .conftest import spot

SHAPE = (60, 120)
SIGMA = 1.6
RADIUS = 14.0


def optics(image, *, variance=None, saturated=None, dead=None, dy=(0.0, 0.0), dx=(0.0, 0.0)):
    nothing = np.zeros(image.shape, dtype=bool)
    return Optics(
        mean_image=image,
        variance_image=2.0 * image + 4.0 if variance is None else variance,
        saturated=nothing if saturated is None else saturated,
        dead=nothing if dead is None else dead,
        dy_range_px=dy,
        dx_range_px=dx,
    )


def build(y, x, view, **kwargs):
    settings = {
        "spot_sigma_px": SIGMA,
        "background_radius_px": RADIUS,
        "mode": "weighted",
        "response_image": None,
        "response_variance": None,
    }
    return build_footprints(y_px=y, x_px=x, optics=view, **{**settings, **kwargs})


def read(footprints, image):
    return np.array(
        [
            np.sum(weights * image[y0 : y0 + weights.shape[0], x0 : x0 + weights.shape[1]])
            for weights, y0, x0 in zip(footprints.weights, footprints.y0, footprints.x0, strict=True)
        ]
    )


def scene(y, x, heights, *, background=30.0):
    return background + sum(h * spot(a, b, shape=SHAPE, sigma=SIGMA) for a, b, h in zip(y, x, heights, strict=True))


@pytest.mark.parametrize("mode", ["weighted", "disc"])
def test_reads_heights_of_overlapping_spots_whatever_the_background(mode):
    y, x = [30.2, 31.0, 29.4, 30.0], [20.3, 25.2, 60.0, 64.6]
    weights = build(y, x, optics(scene(y, x, [100] * 4)), mode=mode)
    profiles = np.array([scene(y, x, np.eye(4)[i], background=0.0) for i in range(4)])
    if mode == "disc":
        profiles = (profiles >= 0.5).astype(float)
    frame = 77.0 + np.tensordot([50.0, 0.0, 10.0, 400.0], profiles, axes=1)
    np.testing.assert_allclose(read(weights, frame), [50.0, 0.0, 10.0, 400.0], atol=0.3 if mode == "weighted" else 1e-6)


def test_noise_is_within_a_fifteenth_of_the_cramer_rao_bound():
    # What F costs beyond a fit that knows the true profile, in a frame with a background to be found: a wrong width of
    # the profile, unequal weights, and neighbours.
    y, x = [30.2, 30.5, 29.4], [20.3, 60.1, 66.0]
    image = scene(y, x, [80.0] * 3)
    view = optics(image)
    sigma = estimate_spot_sigma(
        image + np.random.default_rng(1).normal(0, 0.5, SHAPE),
        y_px=y,
        x_px=x,
        start_sigma_px=1.3,
        usable=np.ones(SHAPE, dtype=bool),
    )
    assert sigma == pytest.approx(SIGMA, rel=0.05)
    footprints = build(y, x, view, spot_sigma_px=sigma)
    profiles = np.array([spot(a, b, shape=SHAPE, sigma=SIGMA) for a, b in zip(y, x, strict=True)])
    gain = read_matrix(footprints, profiles)
    for i in range(3):
        weights, y0, x0 = footprints.weights[i], footprints.y0[i], footprints.x0[i]
        variance = view.variance_image[y0 : y0 + weights.shape[0], x0 : x0 + weights.shape[1]]
        sd = np.sqrt(np.sum(weights**2 * variance)) / gain[i, i]
        design = np.vstack([np.ones(image.size), profiles.reshape(3, -1)])
        rows, columns = np.mgrid[: SHAPE[0], : SHAPE[1]]
        near = (np.hypot(rows - y[i], columns - x[i]) <= RADIUS).ravel()
        fisher = (design * near / view.variance_image.ravel()) @ design.T
        touched = list(np.flatnonzero(np.diag(fisher) > 1e-6 * fisher[1 + i, 1 + i]))
        own = touched.index(1 + i)
        bound = np.sqrt(np.linalg.inv(fisher[np.ix_(touched, touched)])[own, own])
        assert 0.999 <= sd / bound <= 1.15
        assert sd <= 1.15 / np.sqrt(np.sum(profiles[i] ** 2 / view.variance_image))  # even were the background known


def read_matrix(footprints, profiles):
    return np.stack([read(footprints, profile) for profile in profiles], axis=1)


def test_the_axon_under_a_bouton_is_taken_out_of_its_baseline():
    x_path = np.arange(-20, 140, 0.1)
    y_path = 30 + 4 * np.sin(x_path / 14)
    step = np.hypot(np.gradient(x_path), np.gradient(y_path))
    shaft = sum(
        length * spot(a, b, shape=SHAPE, sigma=1.45) for a, b, length in zip(y_path, x_path, step, strict=True)
    ) / (1.45 * np.sqrt(2 * np.pi))
    x = np.array([20.2, 51.4, 57.0, 90.3])
    y = 30 + 4 * np.sin(x / 14)
    heights = np.array([200.0, 50.0, 120.0, 40.0])
    image = scene(y, x, heights) + 20.0 * shaft
    footprints = build(y, x, optics(image))
    baseline = read(footprints, image)
    assert np.all(baseline - heights > 15)
    np.testing.assert_allclose(baseline - footprints.shaft_counts, heights, atol=4.0)


def test_without_an_axon_nothing_is_taken_out():
    image = scene([30.0], [60.0], [100.0])
    assert build([30.0], [60.0], optics(image)).shaft_counts == pytest.approx([0.0], abs=0.5)


def test_unusable_pixels_have_no_weight_and_are_flagged():
    y, x = [30.0, 30.0, 30.0], [20.0, 60.0, 100.0]
    image = scene(y, x, [100.0] * 3)
    saturated, dead = np.zeros((2, *SHAPE), dtype=bool)
    saturated[30, 60] = True
    dead[31, 101] = True
    footprints = build(y, x, optics(image, saturated=saturated, dead=dead))
    assert footprints.flags == (frozenset(), frozenset({"saturated"}), frozenset({"dead_pixels"}))
    spoiled = np.where(saturated, 65535.0, np.where(dead, 0.0, image))
    np.testing.assert_allclose(read(footprints, spoiled), 100.0, atol=0.1)


def test_pixels_that_drift_out_of_the_image_are_left_out_and_flagged():
    y, x = [30.0, 4.0, 0.5], [60.0, 60.0, 20.0]
    footprints = build(y, x, optics(scene(y, x, [100.0] * 3), dy=(-3.2, 2.0)))
    assert footprints.flags[0] == frozenset()
    assert footprints.flags[1] == footprints.flags[2] == frozenset({"edge"})
    rows = np.nonzero(footprints.weights[1])[0] + footprints.y0[1]
    assert rows.min() - 3.2 >= 0
    assert read(footprints, scene(y, x, [100.0] * 3))[1] == pytest.approx(100.0, abs=0.5)


def test_a_bouton_that_no_pixel_shows_is_nan():
    dead = np.zeros(SHAPE, dtype=bool)
    dead[20:42, 50:72] = True
    footprints = build([30.0], [60.0], optics(scene([30.0], [60.0], [100.0]), dead=dead))
    assert np.all(np.isnan(footprints.weights[0]))
    assert np.isnan(footprints.shaft_counts[0])


def test_labels_number_the_core_pixels():
    y, x = [30.0, 30.0], [40.0, 42.6]
    footprints = build(y, x, optics(scene(y, x, [100.0] * 2)))
    assert footprints.label[30, 40] == 1
    assert footprints.label[30, 43] == 2
    assert set(np.unique(footprints.label)) == {0, 1, 2}
    np.testing.assert_array_equal(footprints.footprint_px, np.bincount(footprints.label.ravel())[1:])


def test_crosstalk_is_what_unseparated_weights_read_of_a_neighbour():
    y, x = np.array([30.0, 30.0, 30.0]), np.array([20.0, 24.0, 90.0])
    footprints = build(y, x, optics(scene(y, x, [100.0] * 3), variance=np.ones(SHAPE)))
    matrix = crosstalk_matrix(footprints)
    overlap = np.exp(-(4.0**2) / (4 * SIGMA**2))
    flat = 4 * SIGMA**2 / RADIUS**2  # squared correlation of a spot with the background around it
    assert matrix[0, 1] == pytest.approx((overlap - flat) / (1 - flat), abs=0.003)
    assert matrix[0, 2] == pytest.approx(0.0, abs=1e-6)
    np.testing.assert_allclose(np.diag(matrix), 1.0)


def test_adaptive_footprints_follow_a_clear_response_and_ignore_noise():
    rng = np.random.default_rng(3)
    image = scene([30.0], [60.0], [100.0])
    odd = spot(30, 59, shape=SHAPE, sigma=1.2) + 0.8 * spot(30, 62, shape=SHAPE, sigma=1.2)
    clear = 50 * odd + rng.normal(0, 0.5, SHAPE)
    noise = spot(30, 60, shape=SHAPE, sigma=SIGMA) + rng.normal(0, 5.0, SHAPE)

    def profile(response, variance):
        built = build(
            [30.0],
            [60.0],
            optics(image),
            mode="adaptive",
            response_image=response,
            response_variance=np.full(SHAPE, variance),
        )
        full = np.zeros(SHAPE)
        height, width = built.profiles[0].shape
        full[built.y0[0] : built.y0[0] + height, built.x0[0] : built.x0[0] + width] = built.profiles[0]
        return full

    gaussian = spot(30, 60, shape=SHAPE, sigma=SIGMA)
    near = np.hypot(*(np.mgrid[: SHAPE[0], : SHAPE[1]] - np.array([30, 60])[:, None, None])) <= 4

    def likeness(a, b):
        return np.corrcoef(a[near], b[near])[0, 1]

    assert likeness(profile(clear, 0.25), odd) > 0.99 > likeness(gaussian, odd)
    assert likeness(profile(noise, 25.0), gaussian) > 0.95


def test_adaptive_footprints_need_a_response():
    with pytest.raises(InputError, match="mean response image"):
        build([30.0], [60.0], optics(scene([30.0], [60.0], [100.0])), mode="adaptive")


def test_drawn_masks_are_read_as_their_mean_without_background_and_neighbour():
    label = np.zeros(SHAPE, dtype=np.int32)
    label[28:33, 18:23] = 4
    label[28:33, 23:28] = 9
    flat = np.ones(SHAPE)
    footprints = footprints_from_labels(
        label, optics=optics(50 * flat), spot_sigma_px=SIGMA, background_radius_px=RADIUS
    )
    frame = 70 * flat + 5.0 * (label == 4) + 300.0 * (label == 9)
    np.testing.assert_allclose(read(footprints, frame), [5.0, 300.0], atol=1e-6)
    np.testing.assert_allclose(footprints.y_px, [30.0, 30.0])
    np.testing.assert_allclose(footprints.x_px, [20.0, 25.0])
    np.testing.assert_array_equal(np.unique(footprints.label), [0, 1, 2])
    np.testing.assert_array_equal(footprints.footprint_px, [25, 25])


def test_no_boutons_give_empty_footprints():
    footprints = build([], [], optics(np.full(SHAPE, 40.0)))
    assert footprints.weights == ()
    assert footprints.footprint_px.shape == (0,)
    assert crosstalk_matrix(footprints).shape == (0, 0)
