"""The photon-transfer line: how the noise of a pixel grows with its light (EMVA 1288, release 4.0, 2021)."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    from numpy.typing import NDArray

    FloatArray = NDArray[np.float64]

__all__ = ["above_median", "photon_transfer_line", "telling_pixels"]

_ENOUGH_PIXELS = 16_000
"""Twice the 200 that count in each of the line's 80 bins: more of them tell nothing that the line would believe."""


def telling_pixels(mean: FloatArray, usable: NDArray[np.bool_]) -> tuple[NDArray[np.intp], NDArray[np.intp]]:
    """Choose enough pixels for the line, so that not all of a large image need be looked at.

    Parameters
    ----------
    mean : (y, x) ndarray of float
        Mean image, counts.
    usable : (y, x) ndarray of bool
        Pixels to choose from.

    Returns
    -------
    alike, spread : (n,) ndarray of int
        Flat indices of pixels whose brightness is distributed as that of all of them, and of those and others that
        cover the range of brightness evenly; all of the usable ones where these are few.
    """
    pixels = np.flatnonzero(usable & np.isfinite(mean))
    if pixels.size <= _ENOUGH_PIXELS:
        return pixels, pixels
    order = np.argsort(mean.flat[pixels], kind="stable")
    sorted_mean = mean.flat[pixels[order]]
    ranks = np.linspace(0, pixels.size - 1, _ENOUGH_PIXELS // 2).round().astype(np.intp)
    levels = np.linspace(sorted_mean[0], sorted_mean[-1], _ENOUGH_PIXELS // 2)
    spread = np.union1d(ranks, np.searchsorted(sorted_mean, levels))
    return pixels[order[ranks]], pixels[order[spread]]


def above_median(n_pairs: int, *, n_linked: int) -> float:
    """Ratio of the mean to the median of a pixel's mean squared fall over pairs of frames.

    The median lies below the mean by a third of the relative variance, as for chi-square. That is 5 / n for half of the
    squares of n normal numbers; two pairs that share their middle frame seldom both fall, and vary less together.

    Parameters
    ----------
    n_pairs : int
        Pairs of successive frames, at least 1.
    n_linked : int
        How many of them share a frame with the next one.
    """
    return 1.0 + (5.0 - 1.7 * n_linked / n_pairs) / (3.0 * n_pairs)


def photon_transfer_line(mean: FloatArray, variance: FloatArray, *, n_frames: int) -> tuple[float, float, float]:
    """Fit variance = gain * mean + read_variance through pixels, robustly.

    Pixels are gathered in bins of like brightness; the median variance of each bin enters a line whose outlying bins
    lose weight (Tukey's biweight).

    Parameters
    ----------
    mean, variance : (n_pixels,) ndarray of float
        Temporal mean (counts) and variance (counts²) of each pixel.
    n_frames : int
        Frames behind each mean.

    Returns
    -------
    gain, gain_se, read_variance : float
        Slope, its standard error, intercept; NaN where the pixels are too alike in brightness.
    """
    unknown = (float("nan"),) * 3
    if mean.size < 16 or n_frames < 8:
        return unknown
    dark, bright = np.percentile(mean, [1, 99])
    if bright - dark < 5.0 * np.sqrt(np.median(variance) / n_frames) or bright <= dark:
        return unknown
    edges = np.union1d(np.linspace(mean.min(), mean.max(), 41), np.quantile(mean, np.linspace(0, 1, 41)))
    which = np.clip(np.searchsorted(edges, mean, side="right") - 1, 0, edges.size - 2)
    order = np.argsort(which, kind="stable")
    pieces = np.split(order, np.flatnonzero(np.diff(which[order])) + 1)
    pieces = [piece for piece in pieces if piece.size >= 4]
    if len(pieces) < 5:
        return unknown
    x = np.array([mean[piece].mean() for piece in pieces])
    y = np.array([np.median(variance[piece]) for piece in pieces])
    n = np.array([min(piece.size, 200) for piece in pieces])  # a bin is never surer than the line is straight
    middle = float(x.mean())  # a large offset must not swallow the slope
    design = np.stack([x - middle, np.ones_like(x)], axis=1)
    expected, trust = np.maximum(y, 1e-3 * y.max() + 1e-300), np.ones_like(x)
    for _ in range(30):
        scale = np.sqrt(n) / expected
        rows = design * scale[:, None]
        normal = rows.T @ (rows * trust[:, None])
        line = np.linalg.lstsq(normal, rows.T @ (trust * y * scale), rcond=None)[0]
        residual = y * scale - rows @ line
        spread = 1.4826 * np.median(np.abs(residual)) + 1e-12
        trust = np.maximum(1.0 - (residual / (6.0 * spread)) ** 2, 0.0) ** 2
        expected = np.maximum(design @ line, 0.05 * np.median(y) + 1e-300)
    free = max(float(np.sum(trust > 0)) - 2.0, 1.0)
    scatter = float(np.sum(trust * residual**2)) / free
    gain = float(line[0])
    read_variance = float(line[1]) - gain * middle
    gain_se = float(np.sqrt(scatter * np.linalg.pinv(normal)[0, 0]))
    return (gain, gain_se, read_variance) if gain > 3.0 * gain_se else unknown
