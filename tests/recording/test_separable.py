"""Fast filters give what plain ones give."""

import numpy as np
import pytest
from scipy import ndimage

from napari_boutonrelease.recording.separable import box_sum, convolve, gaussian_kernel
from napari_boutonrelease.recording.spline_pixels import SplinePixels


@pytest.fixture
def image():
    return np.random.default_rng(2).normal(3.0, 1.0, (150, 260)).astype(np.float32)


@pytest.mark.parametrize("axis", [0, 1])
@pytest.mark.parametrize("sigma_px", [0.8, 1.4, 5.0])
def test_even_and_odd_kernels(image, axis, sigma_px):
    kernel = gaussian_kernel(sigma_px, truncate=3.5)
    assert kernel.sum() == pytest.approx(1.0)
    slope = kernel * np.arange(-(len(kernel) // 2), len(kernel) // 2 + 1)
    for taps in (kernel, slope):
        plain = ndimage.convolve1d(image.astype(float), taps, axis=axis, mode="constant")
        np.testing.assert_allclose(convolve(image, taps, axis=axis), plain, atol=2e-5)


@pytest.mark.parametrize("axis", [0, 1])
@pytest.mark.parametrize("half", [0, 1, 2, 9, 20])
def test_sums_over_a_box(image, axis, half):
    plain = ndimage.convolve1d(image.astype(float), np.ones(2 * half + 1), axis=axis, mode="constant")
    np.testing.assert_allclose(box_sum(image, half, axis=axis), plain, rtol=1e-5, atol=1e-4)


def test_an_image_smaller_than_its_kernel():
    image = np.random.default_rng(1).normal(size=(5, 7)).astype(np.float32)
    kernel = gaussian_kernel(3.0, truncate=3.5)
    for axis in (0, 1):
        plain = ndimage.convolve1d(image.astype(float), kernel, axis=axis, mode="constant")
        np.testing.assert_allclose(convolve(image, kernel, axis=axis), plain, atol=1e-5)
        np.testing.assert_allclose(box_sum(image, 9, axis=axis)[2, 3], image.sum(axis=axis)[[3, 2][axis]], rtol=1e-4)


@pytest.mark.parametrize(("dy", "dx"), [(0.0, 0.0), (0.5, -0.25), (-0.3, 0.5)])
def test_a_surface_and_its_slopes_between_pixels(dy, dx):
    def surface(y, x):
        return np.sin(0.3 * y) * np.cos(0.2 * x) + 0.01 * y * x

    rows, columns = np.mgrid[0:40, 0:50].astype(float)
    y, x = np.mgrid[8:32:3, 8:42:5].reshape(2, -1)
    image, along_y, along_x = SplinePixels(surface(rows, columns), y=y, x=x).read(dy=dy, dx=dx)
    at_y, at_x = y + dy, x + dx
    np.testing.assert_allclose(image, surface(at_y, at_x), atol=1e-3)
    np.testing.assert_allclose(along_y, (surface(at_y + 0.01, at_x) - surface(at_y - 0.01, at_x)) / 0.02, atol=2e-3)
    np.testing.assert_allclose(along_x, (surface(at_y, at_x + 0.01) - surface(at_y, at_x - 0.01)) / 0.02, atol=2e-3)
