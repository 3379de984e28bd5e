"""Some pixels of an image and its slopes, read half a pixel around by cubic B-splines (Unser et al. 1991).

The spline's coefficients around each pixel are gathered once; every sub-pixel displacement is then one small product.

Unser M, Aldroubi A, Eden M, 1991, IEEE Trans Pattern Anal Mach Intell 13:277.
"""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    from numpy.typing import NDArray

    FloatArray = NDArray[np.float64]

__all__ = ["SplinePixels"]

_REACH = 2  # coefficients on either side that a displacement of up to a pixel needs


class SplinePixels:
    """Reads an image and its slopes near some of its pixels.

    Parameters
    ----------
    image : (y, x) ndarray of float
        What to read.
    y, x : (n,) ndarray of int
        Rows and columns of the pixels.
    """

    def __init__(self, image: FloatArray, *, y: NDArray[np.intp], x: NDArray[np.intp]) -> None:
        from scipy.ndimage import spline_filter

        coefficients = np.pad(spline_filter(image, order=3, mode="mirror"), _REACH, mode="reflect")
        step = np.arange(2 * _REACH + 1)
        around = coefficients[(y[:, None] + step)[:, :, None], (x[:, None] + step)[:, None, :]]
        self._around = around.reshape(len(y), -1).astype(np.float32)

    def read(self, *, dy: float, dx: float) -> tuple[FloatArray, FloatArray, FloatArray]:
        """Image and its slopes along y and x at (y + dy, x + dx) of each pixel, |dy|, |dx| <= 1.

        Returns
        -------
        image, along_y, along_x : (n,) ndarray
        """
        (value_y, slope_y), (value_x, slope_x) = _b_spline(dy), _b_spline(dx)
        weights = np.stack([np.outer(value_y, value_x), np.outer(slope_y, value_x), np.outer(value_y, slope_x)])
        image, along_y, along_x = weights.reshape(3, -1).astype(np.float32) @ self._around.T
        return image.astype(np.float64), along_y.astype(np.float64), along_x.astype(np.float64)


def _b_spline(displacement: float) -> tuple[FloatArray, FloatArray]:
    """Weights of the coefficients around for the value and for the slope, (2 * _REACH + 1,) each."""
    at = displacement - np.arange(-_REACH, _REACH + 1)
    far = np.abs(at)
    value = np.where(far < 1, 2.0 / 3.0 - far**2 + 0.5 * far**3, np.maximum(2.0 - far, 0.0) ** 3 / 6.0)
    slope = np.where(far < 1, 1.5 * far**2 - 2.0 * far, -0.5 * np.maximum(2.0 - far, 0.0) ** 2) * np.sign(at)
    return value, slope
