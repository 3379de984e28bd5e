"""Cubic convolution reads between pixels, and says where it cannot."""

import numpy as np
import pytest

from napari_boutonrelease.errors import InputError
from napari_boutonrelease.recording.cubic_convolution import DisplacedPixels, shift_frame_block, taps


def test_taps_at_a_pixel_are_that_pixel_and_always_sum_to_one():
    np.testing.assert_allclose(taps([0.0, 1.0]), [[0, 1, 0, 0], [0, 0, 1, 0]], atol=1e-15)
    np.testing.assert_allclose(taps(np.linspace(0, 1, 17)).sum(axis=-1), 1.0, atol=1e-14)


def test_a_parabola_is_read_exactly():
    y, x = np.mgrid[0:20, 0:24].astype(float)

    def surface(y, x):
        return 3.0 + 0.5 * y - 0.2 * x + 0.03 * y**2 - 0.02 * x**2 + 0.01 * y * x

    dy, dx = np.array([0.3, -1.7]), np.array([-0.6, 2.25])
    shifted = shift_frame_block(np.stack([surface(y, x)] * 2), dy=dy, dx=dx)
    for k in range(2):
        np.testing.assert_allclose(shifted[k, 4:-4, 4:-4], surface(y + dy[k], x + dx[k])[4:-4, 4:-4], rtol=1e-5)


def test_a_moved_spot_is_brought_back_where_it_was():
    y, x = np.mgrid[0:24, 0:30].astype(float)
    dy, dx = np.array([1.4, -3.0]), np.array([-2.3, 0.0])
    moved = np.exp(-((y - 11 - dy[:, None, None]) ** 2 + (x - 14 - dx[:, None, None]) ** 2) / 8.0)
    still = np.exp(-((y - 11) ** 2 + (x - 14) ** 2) / 8.0)
    back = shift_frame_block(moved, dy=dy, dx=dx)
    assert back.dtype == np.float32
    np.testing.assert_allclose(back[0], still, atol=1e-2)
    np.testing.assert_allclose(back[1, 3:], still[3:], atol=1e-6)  # a move by whole pixels loses nothing inside


def test_beyond_the_border_the_nearest_pixel_stands_in():
    frame = np.arange(12, dtype=np.uint16).reshape(1, 3, 4)
    np.testing.assert_array_equal(shift_frame_block(frame, dy=[5.0], dx=[0.0])[0], [[8, 9, 10, 11]] * 3)


@pytest.mark.parametrize("shape", [(3, 150, 20), (3, 5, 7), (3, 130, 1)])
@pytest.mark.parametrize("reach_px", [0.5, 30.0, 500.0])
def test_strips_and_borders_are_read_as_every_pixel_by_itself(shape, reach_px):
    rng = np.random.default_rng(4)
    frames = rng.poisson(20.0, shape).astype(np.uint16)
    dy, dx = rng.uniform(-reach_px, reach_px, (2, len(frames)))
    n_y, n_x = shape[1:]
    plain = np.zeros(shape)
    for k in range(len(frames)):
        whole_y, whole_x = int(np.floor(dy[k])), int(np.floor(dx[k]))
        for i, weight_y in enumerate(taps(dy[k] - whole_y)):
            for j, weight_x in enumerate(taps(dx[k] - whole_x)):
                rows = np.clip(np.arange(n_y) + whole_y + i - 1, 0, n_y - 1)
                columns = np.clip(np.arange(n_x) + whole_x + j - 1, 0, n_x - 1)
                plain[k] += weight_y * weight_x * frames[k][np.ix_(rows, columns)]
    np.testing.assert_allclose(shift_frame_block(frames, dy=dy, dx=dx), plain, rtol=1e-4, atol=1e-3)


def test_some_pixels_are_read_as_whole_frames_are():
    rng = np.random.default_rng(5)
    image = rng.uniform(0.0, 50.0, (20, 30))
    pixels = rng.choice(image.size, 80, replace=False)
    displaced = DisplacedPixels(image, pixels)
    for dy, dx in rng.uniform(-4.0, 4.0, (40, 2)):
        whole = shift_frame_block(image[None], dy=[dy], dx=[dx])[0]
        np.testing.assert_allclose(displaced.read(dy=dy, dx=dx), whole.flat[pixels], rtol=1e-5, atol=1e-4)


@pytest.mark.parametrize(
    ("dy", "dx", "message"),
    [([0.0], [0.0, 0.0], "one dy and one dx per frame"), ([np.nan], [0.0], "must be finite")],
)
def test_unusable_drift_is_refused(dy, dx, message):
    with pytest.raises(InputError, match=message):
        shift_frame_block(np.zeros((1, 4, 4)), dy=dy, dx=dx)
