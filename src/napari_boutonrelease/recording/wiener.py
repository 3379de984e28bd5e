"""An image without the noise of its pixels: Wiener's filter (Wiener 1949), over the cosine transform."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    from numpy.typing import NDArray

    FloatArray = NDArray[np.float64]

__all__ = ["without_noise"]


def without_noise(image: FloatArray, *, noise_variance: float) -> FloatArray:
    """Take white noise out of an image by Wiener's filter, its gain the same along every direction.

    What is left is the expectation of the true image given the noisy one. Slopes of it, unlike slopes of the noisy
    image, tell without bias how much a frame moved.

    Parameters
    ----------
    image : (y, x) ndarray of float
        Noisy image.
    noise_variance : float
        Variance of the noise of each pixel.

    Returns
    -------
    (y, x) ndarray of float
    """
    from scipy.fft import dctn, idctn

    spectrum = dctn(image, norm="ortho")
    along_y, along_x = (np.arange(n) / n for n in image.shape)
    radius = np.hypot(along_y[:, None], along_x)
    n_rings = max(4, min(40, min(image.shape) // 2))
    ring = np.minimum((radius * n_rings).astype(int), n_rings)
    power = np.bincount(ring.ravel(), (spectrum**2).ravel()) / np.maximum(np.bincount(ring.ravel()), 1)
    gain = np.clip(1.0 - noise_variance / np.maximum(power, 1e-300), 0.0, 1.0)
    kept = gain[ring]
    kept[0, 0] = 1.0
    result: FloatArray = idctn(spectrum * kept, norm="ortho")
    return result
