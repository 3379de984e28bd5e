"""Reading an image between its pixels by cubic convolution: four taps along each axis, exact for parabolas.

Keys RG, 1981, IEEE Trans Acoust Speech Signal Process 29:1153, with a = -1/2.
"""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from ..errors import InputError

if TYPE_CHECKING:
    from numpy.typing import ArrayLike, NDArray

__all__ = ["DisplacedPixels", "shift_frame_block", "taps"]

_MOST_CELLS = 16  # whole-pixel displacements whose neighbours are kept
_STRIP_ROWS = 64  # rows worked on at a time, so that they stay in the processor's cache


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
    shifted = np.empty(frames.shape, dtype=np.float32)
    whole_y, whole_x = np.floor(dy).astype(np.intp), np.floor(dx).astype(np.intp)
    weights_y, weights_x = (taps(drift - whole).astype(np.float32) for drift, whole in ((dy, whole_y), (dx, whole_x)))
    for k, frame in enumerate(frames):
        for start in range(0, frames.shape[1], _STRIP_ROWS):
            strip = shifted[k, start : start + _STRIP_ROWS]
            tile = _read_around(frame, y=start + int(whole_y[k]), x=int(whole_x[k]), shape=strip.shape)
            along_y = _weighted_sum([tile[tap : tap + len(strip)] for tap in range(4)], weights_y[k])
            _weighted_sum([along_y[:, tap : tap + strip.shape[1]] for tap in range(4)], weights_x[k], out=strip)
    return shifted


class DisplacedPixels:
    """Reads some pixels of one image at many small displacements.

    The sixteen neighbours of each pixel are gathered once for all displacements of the same whole pixels; the rest is
    one small product.

    Parameters
    ----------
    image : (y, x) ndarray
        What to read.
    pixels : (n,) ndarray of int
        Flat indices of the pixels.
    """

    def __init__(self, image: NDArray[np.floating], pixels: NDArray[np.intp]) -> None:
        self._image = image
        self._y, self._x = np.divmod(pixels, image.shape[1])
        self._neighbours: dict[tuple[int, int], NDArray[np.float64]] = {}

    def read(self, *, dy: float, dx: float) -> NDArray[np.float64]:
        """Read the image at (y + dy, x + dx) of each pixel, (n,); beyond the border the nearest pixel."""
        whole = int(np.floor(dy)), int(np.floor(dx))
        if whole not in self._neighbours:
            n_y, n_x = self._image.shape
            step = np.arange(-1, 3)
            y = np.clip(self._y[:, None] + whole[0] + step, 0, n_y - 1)
            x = np.clip(self._x[:, None] + whole[1] + step, 0, n_x - 1)
            if len(self._neighbours) >= _MOST_CELLS:
                self._neighbours.pop(next(iter(self._neighbours)))
            around = self._image[y[:, :, None], x[:, None, :]].reshape(len(y), 16)
            self._neighbours[whole] = around.astype(np.float64)
        mixing = np.outer(taps(dy - whole[0]), taps(dx - whole[1])).ravel()
        result: NDArray[np.float64] = self._neighbours[whole] @ mixing
        return result


def _read_around(frame: NDArray[np.generic], *, y: int, x: int, shape: tuple[int, ...]) -> NDArray[np.float32]:
    """Pixels from one before (y, x) to two after the far corner of `shape`; beyond the border the nearest pixel."""
    (n_y, n_x), height, width = frame.shape, shape[0] + 3, shape[1] + 3
    inside = y > 0 and y + height - 1 <= n_y
    rows = frame[y - 1 : y - 1 + height] if inside else frame[np.clip(np.arange(y - 1, y - 1 + height), 0, n_y - 1)]
    before = min(max(1 - x, 0), width)
    after = min(max(x - 1 + width - n_x, 0), width - before)
    tile = np.empty((height, width), dtype=np.float32)
    tile[:, before : width - after] = rows[:, max(x - 1, 0) : max(x - 1, 0) + width - before - after]
    tile[:, :before] = rows[:, :1]
    tile[:, width - after :] = rows[:, -1:]
    return tile


def _weighted_sum(
    parts: list[NDArray[np.float32]], weights: NDArray[np.float32], *, out: NDArray[np.float32] | None = None
) -> NDArray[np.float32]:
    total: NDArray[np.float32] = np.multiply(parts[0], weights[0], out=out)
    term = np.empty_like(total)
    for part, weight in zip(parts[1:], weights[1:], strict=True):
        total += np.multiply(part, weight, out=term)
    return total
