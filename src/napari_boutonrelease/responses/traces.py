"""Brightness of every bouton in every frame: the weights move with the sample, frames are never resampled."""

from __future__ import annotations

from collections.abc import Callable
from typing import TYPE_CHECKING

import numpy as np

from ..checks import check_positive
from ..errors import InputError
from ..recording.cubic_convolution import taps

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from ..boutons.footprints import Footprints
    from ..recording.motion import Drift
    from ..recording.movie import Movie

__all__ = ["extract_traces"]

_MOST_OUTSIDE = 0.5
"""A frame in which more than this share of a bouton's weights lies outside the image says nothing about it."""


def extract_traces(
    movie: Movie,
    *,
    footprints: Footprints,
    drift: Drift,
    block_frames: int,
    progress: Callable[[int, int], None] | None,
) -> NDArray[np.float64]:
    """Apply each bouton's extraction weights, moved by the drift of the frame, to every frame.

    Reading a frame between its pixels by cubic convolution (Keys 1981) and weighting what was read is the same as
    weighting the pixels themselves with weights spread over 16 of them: sixteen sums over a patch give the brightness
    at any sub-pixel position, and no pixel outside the patches is touched.

    Parameters
    ----------
    movie : Movie
        The movie, (frame, y, x).
    footprints : Footprints
        Extraction weights of each bouton in the reference.
    drift : Drift
        Position of each frame, and which frames may be used.
    block_frames : int
        Frames held in memory at a time.
    progress : callable or None
        Called with (frames done, frames in all).

    Returns
    -------
    (n_boutons, n_frames) ndarray
        Background-free brightness, counts. NaN in frames that are not used, and where the drift carries more than half
        of a bouton's weights out of the image; smaller parts outside take the value of the nearest pixel.

    Raises
    ------
    InputError
        If drift and movie have different numbers of frames.
    """
    n_frames, n_y, n_x = movie.shape
    if drift.used.shape != (n_frames,):
        raise InputError(
            f"drift describes {drift.used.size} frames but the movie {movie.name} has {n_frames}; "
            "measure the drift on this movie."
        )
    check_positive("block_frames", block_frames)
    whole_y, whole_x = np.floor(drift.dy_px), np.floor(drift.dx_px)
    taps_y, taps_x = taps(drift.dy_px - whole_y), taps(drift.dx_px - whole_x)
    whole_y, whole_x = (np.nan_to_num(whole).astype(np.intp) for whole in (whole_y, whole_x))
    still = not (np.any(drift.dy_px[drift.used]) or np.any(drift.dx_px[drift.used]))
    spread = [_spread(weights, still=still) for weights in footprints.weights]
    margin = 0 if still else 1
    result = np.full((len(spread), n_frames), np.nan)
    for start in range(0, n_frames, block_frames):
        stop = min(start + block_frames, n_frames)
        kept = start + np.flatnonzero(drift.used[start:stop])
        if kept.size:
            block = movie.read(start, stop)
            for cell in np.unique(np.column_stack([whole_y[kept], whole_x[kept]]), axis=0):
                at = kept[(whole_y[kept] == cell[0]) & (whole_x[kept] == cell[1])]
                frames = block if at.size == stop - start else block[at - start]
                mixing = np.ones((at.size, 1)) if still else _mixing(taps_y[at], taps_x[at])
                for bouton, sums in enumerate(spread):
                    height, width = sums.shape[:2]
                    rows = np.arange(height) + footprints.y0[bouton] + cell[0] - margin
                    columns = np.arange(width) + footprints.x0[bouton] + cell[1] - margin
                    outside = (rows < 0)[:, None] | (rows >= n_y)[:, None] | (columns < 0) | (columns >= n_x)
                    if outside.any() and _share(sums, outside) > _MOST_OUTSIDE:
                        continue
                    patch = _patch(frames, rows, columns)
                    result[bouton, at] = np.sum((patch @ sums.reshape(height * width, -1)) * mixing, axis=1)
        if progress is not None:
            progress(stop, n_frames)
    return result


def _spread(weights: NDArray[np.float64], *, still: bool) -> NDArray[np.float64]:
    """Weights for each of the sixteen neighbours that a position between pixels is read from, (h + 3, w + 3, 16).

    A movie that never moves needs the weights alone, (h, w, 1).
    """
    height, width = weights.shape
    if still:
        return np.asarray(weights, dtype=np.float64)[:, :, None]
    spread = np.zeros((height + 3, width + 3, 4, 4))
    for i in range(4):
        for j in range(4):
            spread[i : i + height, j : j + width, i, j] = weights
    return spread.reshape(height + 3, width + 3, 16)


def _mixing(taps_y: NDArray[np.float64], taps_x: NDArray[np.float64]) -> NDArray[np.float64]:
    """Share of each of the sixteen neighbours, (n_frames, 16)."""
    return (taps_y[:, :, None] * taps_x[:, None, :]).reshape(-1, 16)


def _share(sums: NDArray[np.float64], outside: NDArray[np.bool_]) -> float:
    size = np.sum(np.abs(sums), axis=2)
    total = float(np.sum(size))
    return float(np.sum(size[outside])) / total if total > 0 else 1.0


def _patch(frames: NDArray[np.generic], rows: NDArray[np.intp], columns: NDArray[np.intp]) -> NDArray[np.float64]:
    """Pixels of a patch, (n_frames, n_pixels); beyond the border the nearest pixel."""
    n_y, n_x = frames.shape[1:]
    if rows[0] >= 0 and rows[-1] < n_y and columns[0] >= 0 and columns[-1] < n_x:
        patch = frames[:, rows[0] : rows[-1] + 1, columns[0] : columns[-1] + 1]
    else:
        patch = frames[:, np.clip(rows, 0, n_y - 1)[:, None], np.clip(columns, 0, n_x - 1)]
    return patch.astype(np.float64).reshape(frames.shape[0], -1)
