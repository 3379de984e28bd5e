"""Roughly where frames lie on a reference image: cross-correlation with the logarithm of the reference."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    from numpy.typing import NDArray

    FloatArray = NDArray[np.float64]
    Single = NDArray[np.float32]

_FEW_PIXELS = 20_000  # larger frames are binned to about so many
_FRAMES_AT_ONCE = 16


def likelihood_template(image: FloatArray, weights: FloatArray) -> Single:
    """Return the fine structure of a reference's logarithm.

    For Poisson light the log likelihood of a shift is the correlation of the frame with the logarithm of the
    reference; its coarse structure is taken out, so that the background may change.

    Parameters
    ----------
    image : (y, x) ndarray of float
        The reference, counts.
    weights : (y, x) ndarray of float
        One over the noise of one frame's pixel, counts^-2.

    Returns
    -------
    (y, x) ndarray of float32
    """
    from scipy.ndimage import gaussian_filter

    dark = float(np.percentile(image, 5))
    lift = max(float(np.sqrt(1.0 / np.median(weights))), 0.05 * float(np.ptp(image)), 1e-12)
    logarithm = np.log(np.maximum(image - dark, 0.0) + lift)
    fine = gaussian_filter(logarithm, 0.7) - gaussian_filter(logarithm, 8.0)
    template: Single = fine.astype(np.float32)
    return template


def correlate(
    frames: NDArray[np.generic], *, template: Single, usable: NDArray[np.bool_], max_shift_px: float
) -> FloatArray:
    """Find the shifts of frames at which they are most like a template, to about a pixel.

    Parameters
    ----------
    frames : (n_frames, y, x) ndarray
        Frames as recorded.
    template : (y, x) ndarray of float32
        What to look for.
    usable : (y, x) ndarray of bool
        Pixels of the frames to trust.
    max_shift_px : float
        Search range along each axis, px.

    Returns
    -------
    (2, n_frames) ndarray of float
        Shifts along y and x, px.
    """
    from scipy.fft import irfft2, next_fast_len, rfft2

    binning = max(1, round(float(np.sqrt(template.size / _FEW_PIXELS))))
    template = _binned(template[None], binning)[0]
    usable = _binned(usable[None].astype(np.float32), binning)[0] > 0.99
    n_y, n_x = template.shape
    reach_y, reach_x = (min(int(np.ceil(max_shift_px / binning)), n // 2) for n in (n_y, n_x))
    size = (next_fast_len(n_y + reach_y, real=True), next_fast_len(n_x + reach_x, real=True))
    spectrum = np.conj(rfft2(template, s=size))
    lags_y, lags_x = np.arange(-reach_y, reach_y + 1), np.arange(-reach_x, reach_x + 1)
    shift = np.zeros((2, len(frames)))
    for start in range(0, len(frames), _FRAMES_AT_ONCE):
        small = _binned(frames[start : start + _FRAMES_AT_ONCE], binning)
        small = (small - small[:, usable].mean(axis=1)[:, None, None]) * usable
        likeness = irfft2(rfft2(small, s=size) * spectrum, s=size)[:, lags_y[:, None], lags_x]
        best = likeness.reshape(len(small), -1).argmax(axis=1)
        for k, (i, j) in enumerate(zip(*np.divmod(best, len(lags_x)), strict=True)):
            shift[0, start + k] = lags_y[i] + _summit(likeness[k, :, j], i)
            shift[1, start + k] = lags_x[j] + _summit(likeness[k, i], j)
    return binning * shift


def _binned(frames: NDArray[np.generic], binning: int) -> Single:
    if binning == 1:
        return frames.astype(np.float32)
    n, n_y, n_x = frames.shape
    high, wide = n_y // binning * binning, n_x // binning * binning
    rows = np.zeros((n, high // binning, wide), dtype=np.float32)
    for k in range(binning):
        rows += frames[:, k:high:binning, :wide]
    binned: Single = rows[:, :, 0::binning].copy()
    for k in range(1, binning):
        binned += rows[:, :, k::binning]
    return binned


def _summit(profile: Single, at: int) -> float:
    """Where a parabola through the best lag and its neighbours peaks, relative to the best lag."""
    if not 0 < at < len(profile) - 1:
        return 0.0
    before, here, after = (float(value) for value in profile[at - 1 : at + 2])
    bend = before - 2.0 * here + after
    return 0.5 * (before - after) / bend if bend < 0 else 0.0
