"""The course of an axon between places that a person pointed at: along the ridge of light, not across the dark."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from ..errors import InputError

if TYPE_CHECKING:
    from numpy.typing import ArrayLike, NDArray

_FWHM_TO_SIGMA = 1.0 / 2.354820
_DARK = 0.03  # ridge, of that of the clear ones, at which a step costs half of what it costs in the dark
_CLEAR = 98.0  # percentile of the ridges: boutons on the axon are no better a way than the axon itself
_SMOOTH = 1.0  # SD of the smoothing along the path, in widths: steps from pixel to pixel lengthen a path by up to 8 %


def trace_axon(image: NDArray[np.floating], clicks: ArrayLike, *, width_px: float) -> NDArray[np.float64]:
    """Trace an axon through places, between them along the ridge of light.

    The ridge is the curvature across the brightest direction (Sato et al. 1998), at the scale of the axon's width; the
    path is the cheapest one over pixels whose cost falls with the ridge (Dijkstra 1959), smoothed so that its length
    is that of the axon and not that of the steps from pixel to pixel.

    Parameters
    ----------
    image : (y, x) ndarray
        Mean image; NaN counts as dark.
    clicks : (k, 2) array_like
        (y, x) of places on the axon, in order along it (px), k >= 2.
    width_px : float
        Full width at half maximum of the axon's image (px).

    Returns
    -------
    (m, 2) ndarray
        (y, x) of points about a pixel apart, from the first click to the last one. The path begins and ends at a click
        exactly and passes the others within the smoothing.

    Raises
    ------
    InputError
        If fewer than two different places are given, or one lies outside the image.

    Examples
    --------
    >>> image = np.zeros((9, 30))
    >>> image[4] = 1.0
    >>> trace_axon(image, [(4, 3), (4, 20)], width_px=2.0)[[0, -1]]
    array([[ 4.,  3.],
           [ 4., 20.]])
    """
    from skimage.graph import MCP_Geometric

    places = _checked(clicks, image.shape)
    cost = _cost(image, width_px=width_px)
    pixels = np.clip(np.round(places).astype(np.intp), 0, np.array(image.shape) - 1)
    parts = [places[:1]]
    for start, end, place in zip(pixels[:-1], pixels[1:], places[1:], strict=True):
        search = MCP_Geometric(cost)
        search.find_costs([tuple(start)], [tuple(end)])
        between = np.array(search.traceback(tuple(end)), dtype=np.float64)[1:-1]
        parts += [between.reshape(-1, 2), place[None]]
    return _smoothed(np.vstack(parts), sd_px=_SMOOTH * width_px)


def _checked(clicks: ArrayLike, shape: tuple[int, ...]) -> NDArray[np.float64]:
    places = np.asarray(clicks, dtype=np.float64).reshape(-1, 2)
    height, width = shape
    outside = np.any((places < -0.5) | (places > np.array([height, width]) - 0.5) | ~np.isfinite(places), axis=1)
    if outside.any():
        y, x = places[np.flatnonzero(outside)[0]]
        raise InputError(
            f"A point of the axon at y = {y:g}, x = {x:g} px lies outside the image of {height} x {width} pixels "
            "(height x width); give points within it."
        )
    apart = np.append(True, np.any(np.diff(places, axis=0) != 0, axis=1))
    if np.count_nonzero(apart) < 2:
        raise InputError(
            f"An axon's path needs at least two different points (given {len(places)} in "
            f"{len(np.unique(places, axis=0))} place); give its beginning and its end."
        )
    return np.asarray(places[apart])


def _cost(image: NDArray[np.floating], *, width_px: float) -> NDArray[np.float64]:
    """Cost of a step on each pixel: about 1 on a clear ridge, 1 / `_DARK` where there is none."""
    from skimage.filters import sato

    seen = np.isfinite(image)
    dark = float(np.median(image[seen])) if seen.any() else 0.0
    light = np.where(seen, image, dark).astype(np.float64)
    sigma = max(width_px * _FWHM_TO_SIGMA, 0.7)
    ridge = sato(light, sigmas=[sigma], black_ridges=False, mode="nearest")  # type: ignore[no-untyped-call]
    clear = float(np.percentile(ridge, _CLEAR))
    share = np.minimum(ridge / clear, 1.0) if clear > 0 else np.zeros_like(ridge)
    return np.asarray((1.0 + _DARK) / (share + _DARK))


def _smoothed(path: NDArray[np.float64], *, sd_px: float) -> NDArray[np.float64]:
    """Smooth a path along its length, its ends fixed, and give a point about every pixel."""
    from scipy.ndimage import gaussian_filter1d

    along = np.concatenate([[0.0], np.cumsum(np.hypot(*np.diff(path, axis=0).T))])
    even = np.linspace(0.0, along[-1], max(round(along[-1]) + 1, 2))
    step = even[1]
    points = np.column_stack([np.interp(even, along, values) for values in path.T])
    # Mirrored through its own ends, a path keeps them.
    reach = min(len(points) - 1, int(np.ceil(4 * sd_px / step)))
    before = 2 * points[0] - points[1 : reach + 1][::-1]
    after = 2 * points[-1] - points[-reach - 1 : -1][::-1]
    smooth = gaussian_filter1d(np.vstack([before, points, after]), sd_px / step, axis=0, mode="nearest")
    inner = smooth[reach : reach + len(points)]
    inner[0], inner[-1] = points[0], points[-1]
    return np.asarray(inner)
