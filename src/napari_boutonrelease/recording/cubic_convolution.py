"""Reading an image between its pixels by cubic convolution: four taps along each axis, exact for parabolas.

Keys RG, 1981, IEEE Trans Acoust Speech Signal Process 29:1153, with a = -1/2.
"""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from ..errors import InputError

if TYPE_CHECKING:
    from numpy.typing import ArrayLike, NDArray

__all__ = ["shift_frame_block", "taps"]


def taps(fraction: ArrayLike) -> NDArray[np.float64]:
    """Weights of the pixels i-1, i, i+1, i+2 that give the value at i + fraction.

    Parameters
    ----------
    fraction : array_like of float
        Any shape, each in [0, 1].

    Returns
    -------
    ndarray of float, shape (..., 4)
        The four weights; they sum to 1.

    Examples
    --------
    >>> taps(0.5)
    array([-0.0625,  0.5625,  0.5625, -0.0625])
    """
    f = np.asarray(fraction, dtype=np.float64)
    return np.stack(
        [
            0.5 * f * (f * (2.0 - f) - 1.0),
            0.5 * (f * f * (3.0 * f - 5.0) + 2.0),
            0.5 * f * (f * (4.0 - 3.0 * f) + 1.0),
            0.5 * f * f * (f - 1.0),
        ],
        axis=-1,
    )


def shift_frame_block(block: ArrayLike, *, dy: ArrayLike, dx: ArrayLike) -> NDArray[np.float32]:
    """Bring moved frames back: pixel (y, x) of the result is the frame read at (y + dy, x + dx).

    For images to look at and to average. It mixes the noise of neighbouring pixels, so that nothing should be measured
    on its result that could be measured on the frames themselves.

    Parameters
    ----------
    block : (n_frames, n_y, n_x) array_like
        Frames of any numeric type.
    dy, dx : (n_frames,) array_like of float
        Drift of each frame, in px.

    Returns
    -------
    (n_frames, n_y, n_x) ndarray of float32
        Beyond the border the nearest pixel of the frame stands in.

    Raises
    ------
    InputError
        If the shapes do not fit or a drift is not finite.

    Examples
    --------
    >>> frame = np.arange(6.0).reshape(1, 1, 6)
    >>> shift_frame_block(frame, dy=[0.0], dx=[1.5])[0, 0]
    array([1.5   , 2.5   , 3.5   , 4.5625, 5.0625, 5.    ], dtype=float32)
    """
    frames = np.asarray(block)
    dy, dx = (np.asarray(drift, dtype=np.float64) for drift in (dy, dx))
    if frames.ndim != 3 or dy.shape != frames.shape[:1] or dx.shape != frames.shape[:1]:
        raise InputError(
            f"block must be (frames, y, x) with one dy and one dx per frame "
            f"(given shapes {frames.shape}, {dy.shape} and {dx.shape})."
        )
    if not (np.isfinite(dy).all() and np.isfinite(dx).all()):
        raise InputError("dy and dx must be finite; leave frames of unknown drift out of the block.")
    n_y, n_x = frames.shape[1:]
    shifted = np.empty(frames.shape, dtype=np.float32)
    whole_y, whole_x = np.floor(dy).astype(np.intp), np.floor(dx).astype(np.intp)
    weights_y, weights_x = (taps(drift - whole).astype(np.float32) for drift, whole in ((dy, whole_y), (dx, whole_x)))
    for k, frame in enumerate(frames):
        rows = np.clip(np.arange(-1, n_y + 2) + whole_y[k], 0, n_y - 1)
        columns = np.clip(np.arange(-1, n_x + 2) + whole_x[k], 0, n_x - 1)
        tile = frame[rows].astype(np.float32)[:, columns]
        along_y = sum(weight * tile[tap : tap + n_y] for tap, weight in enumerate(weights_y[k]))
        shifted[k] = sum(weight * along_y[:, tap : tap + n_x] for tap, weight in enumerate(weights_x[k]))
    return shifted
