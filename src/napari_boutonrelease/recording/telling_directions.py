"""Directions along which an image tells movement: none on a blank, one on a straight axon."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from .separable import convolve, gaussian_kernel

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from .light import Light

    FloatArray = NDArray[np.float64]

__all__ = ["telling_directions"]

_PAIR_PIXELS = 3_000_000  # pixels of all pairs of frames that are looked at
_MOST_NOISE_PX = 1.0  # where photon noise leaves more doubt than this, a correction does not help
_FINE_PX, _COARSE_PX = 1.2, 15  # sigma of the slopes; what is smooth over about 6 px (twice a box of 15) is background


def telling_directions(frames: NDArray[np.generic], sample: NDArray[np.intp], light: Light) -> FloatArray:
    """Project on the directions along which the image tells movement.

    The information on movement is the weighted square of the image's slopes. Taken as the product of the slopes of two
    successive frames, it holds no noise, for they share none.

    Parameters
    ----------
    frames : (n, y, x) ndarray
        Some frames.
    sample : (n,) ndarray of int
        Which ones; at least some follow one another.
    light : Light
        Their noise, and the pixels not to trust.

    Returns
    -------
    (2, 2) ndarray of float
        Projection matrix, (y, x).
    """
    from scipy.ndimage import uniform_filter

    usable = ~(light.dead | light.saturated)
    if not usable.any():
        return np.zeros((2, 2))
    # beyond the border there is no image, and a continued one would seem to have structure
    inside = tuple(slice(min(size // 6, 6), -min(size // 6, 6)) for size in usable.shape)
    weights = np.where(usable, 1.0 / light.variance_at(light.mean_image), 0.0)[inside].ravel().astype(np.float32)
    pairs = np.flatnonzero(np.diff(sample) == 1)
    n_pairs = min(len(pairs), int(np.clip(_PAIR_PIXELS // usable.size, 24, 200)))
    pairs = pairs[np.linspace(0, len(pairs) - 1, n_pairs).round().astype(int)]
    height = gaussian_kernel(_FINE_PX, truncate=4.0)
    slope = height * np.arange(-(len(height) // 2), len(height) // 2 + 1) / _FINE_PX**2
    kernels = ((slope, height), (height, slope))

    def slopes(frame: NDArray[np.generic]) -> NDArray[np.float32]:
        values = frame.astype(np.float32)
        values[~usable] = np.median(values[usable])
        values -= uniform_filter(uniform_filter(values, _COARSE_PX), _COARSE_PX)
        along = [convolve(convolve(values, of_y, axis=0), of_x, axis=1) for of_y, of_x in kernels]
        return np.stack([part[inside].ravel() for part in along])

    products = np.array([(slopes(frames[k]) * weights) @ slopes(frames[k + 1]).T for k in pairs], dtype=np.float64)
    information = 0.5 * (products + products.transpose(0, 2, 1))
    strengths, directions = np.linalg.eigh(information.mean(axis=0))
    projection = np.zeros((2, 2))
    for strength, direction in zip(strengths, directions.T, strict=True):
        doubt = (direction @ information @ direction).std() / np.sqrt(max(n_pairs - 1, 1))
        if n_pairs > 2 and strength > max(5.0 * doubt, _MOST_NOISE_PX**-2, 1e-3 * strengths[-1]):
            projection += np.outer(direction, direction)
    return projection
