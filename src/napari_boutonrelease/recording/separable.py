"""Filters of single-precision images by sums of shifted images: a few operations on whole rows a tap.

Nothing lies beyond the border: there the image counts as 0.
"""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    from numpy.typing import NDArray

    FloatArray = NDArray[np.float64]
    Single = NDArray[np.float32]

__all__ = ["box_sum", "convolve", "gaussian_kernel"]

_STRIP_NUMBERS = 32_768  # pixels worked on at a time, so that they stay in the processor's cache


def gaussian_kernel(sigma_px: float, *, truncate: float) -> FloatArray:
    """Gaussian of sum 1, cut off at `truncate` sigmas; (2 * reach + 1,)."""
    reach = int(truncate * sigma_px + 0.5)
    kernel: FloatArray = np.exp(-0.5 * (np.arange(-reach, reach + 1) / sigma_px) ** 2)
    kernel /= kernel.sum()
    return kernel


def convolve(image: Single, kernel: FloatArray, *, axis: int) -> Single:
    """Convolve an image along one axis with a kernel that is its own mirror image, or minus that.

    Parameters
    ----------
    image : (y, x) ndarray of float32
    kernel : (2 * reach + 1,) ndarray
        Even, or odd (as a slope's).
    axis : int
        0 or 1.

    Returns
    -------
    (y, x) ndarray of float32
    """
    reach = len(kernel) // 2
    pair = np.add if np.allclose(kernel, kernel[::-1]) else np.subtract
    weights = kernel[reach:].astype(np.float32)
    n_y, n_x = image.shape
    padded = np.zeros((n_y + 2 * reach * (axis == 0), n_x + 2 * reach * (axis == 1)), dtype=np.float32)
    padded[reach * (axis == 0) :, reach * (axis == 1) :][:n_y, :n_x] = image
    result = np.empty_like(image)
    rows = max(1, _STRIP_NUMBERS // n_x)
    for start in range(0, n_y, rows):
        strip = result[start : start + rows]
        shifted = [
            padded[start + k * (axis == 0) :, k * (axis == 1) :][: len(strip), :n_x] for k in range(2 * reach + 1)
        ]
        np.multiply(shifted[reach], weights[0], out=strip)
        term = np.empty_like(strip)
        for k in range(1, reach + 1):
            pair(shifted[reach - k], shifted[reach + k], out=term)
            term *= weights[k]
            strip += term
    return result


def box_sum(image: Single, half: int, *, axis: int) -> Single:
    """Sum over `half` pixels on either side of each one along one axis, by sums of sums of twice the length.

    Parameters
    ----------
    image : (y, x) ndarray of float32
    half : int
    axis : int
        0 or 1.

    Returns
    -------
    (y, x) ndarray of float32
    """
    n_y, n_x = image.shape
    width = 2 * half + 1
    padded = np.zeros((n_y + 2 * half * (axis == 0), n_x + 2 * half * (axis == 1)), dtype=np.float32)
    padded[half * (axis == 0) :, half * (axis == 1) :][:n_y, :n_x] = image
    result = np.zeros_like(image)
    sums, length, done = padded, 1, 0  # sums of `length` pixels from each one on
    while True:
        if width & length:
            result += sums[done * (axis == 0) :, done * (axis == 1) :][:n_y, :n_x]
            done += length
        if done == width:
            return result
        ahead = sums[length * (axis == 0) :, length * (axis == 1) :]
        sums = sums[: ahead.shape[0], : ahead.shape[1]] + ahead
        length *= 2
