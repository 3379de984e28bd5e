"""Spots of the mean image, whether they release or not."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from .false_discovery import local_maxima

if TYPE_CHECKING:
    from numpy.typing import NDArray

_SCALE = 0.8  # of the spot's sigma: two spots 3 sigmas apart stay two
_MIN_CONTRAST = 6.0  # curvature across the weaker direction, in SD of the image's own texture
_MIN_ROUNDNESS = 0.3  # weaker over stronger curvature; a shaft without a bouton has 0


@dataclass(frozen=True, slots=True, kw_only=True)
class ShapeCandidates:
    """Round bright spots.

    Attributes
    ----------
    y_px, x_px : (n,) ndarray
        Centres (px).
    contrast : (n,) ndarray
        Curvature in the weaker direction, in SD of the curvature of the image's background.
    """

    y_px: NDArray[np.float64]
    x_px: NDArray[np.float64]
    contrast: NDArray[np.float64]


def find_shape_candidates(
    mean_image: NDArray[np.floating], *, spot_sigma_px: float, spacing_px: float, exclude: NDArray[np.bool_]
) -> ShapeCandidates:
    """Maxima of the negative Laplacian of a Gaussian that are curved in every direction.

    The Laplacian (Marr & Hildreth 1980) finds them; the weaker of the two curvatures (Lindeberg 1998) tells a spot from
    the shaft it sits on, and is measured against the same curvature of the image's background.

    Parameters
    ----------
    mean_image : (y, x) ndarray
        Mean of the movement-corrected frames (counts).
    spot_sigma_px : float
        Gaussian sigma of a bouton's image (px).
    spacing_px : float
        Smallest distance of two boutons (px).
    exclude : (y, x) ndarray of bool
        Pixels without information.

    Returns
    -------
    ShapeCandidates
    """
    from scipy.ndimage import distance_transform_edt, gaussian_filter

    if exclude.all():
        return ShapeCandidates(y_px=np.empty(0), x_px=np.empty(0), contrast=np.empty(0))
    # The nearest usable pixel stands in for an unusable one: an axon that leaves the image goes on instead of ending in
    # what would look like half a spot.
    nearest = distance_transform_edt(exclude, return_distances=False, return_indices=True)
    image = mean_image.astype(np.float64)[tuple(nearest)]
    scale = _SCALE * spot_sigma_px
    d_yy, d_xx, d_yx = (
        gaussian_filter(image, scale, order=order, mode="nearest") for order in ((2, 0), (0, 2), (1, 1))
    )
    middle, spread = -(d_yy + d_xx) / 2, np.hypot((d_yy - d_xx) / 2, d_yx)
    weaker, stronger = middle - spread, middle + spread
    pooled = np.concatenate([d_yy[~exclude], d_xx[~exclude]])
    noise = 1.482602 * float(np.median(np.abs(pooled - np.median(pooled))))
    y, x = local_maxima(np.where(exclude, 0.0, middle), spacing_px=spacing_px, above=0.0)
    round_enough = weaker[y, x] >= np.maximum(_MIN_CONTRAST * noise, _MIN_ROUNDNESS * stronger[y, x])
    inner = (y > 0) & (x > 0) & (y < image.shape[0] - 1) & (x < image.shape[1] - 1)
    y, x = y[round_enough & inner], x[round_enough & inner]
    contrast = weaker[y, x] / noise if noise > 0 else np.full(len(y), np.inf)
    return ShapeCandidates(
        y_px=y + _vertex(middle[y - 1, x], middle[y, x], middle[y + 1, x]),
        x_px=x + _vertex(middle[y, x - 1], middle[y, x], middle[y, x + 1]),
        contrast=contrast,
    )


def _vertex(before: NDArray[np.float64], at: NDArray[np.float64], after: NDArray[np.float64]) -> NDArray[np.float64]:
    """Place of the top of the parabola through three neighbours, from -0.5 to 0.5."""
    bend = before - 2 * at + after
    return np.clip(np.where(bend < 0, 0.5 * (before - after) / np.where(bend < 0, bend, -1.0), 0.0), -0.5, 0.5)
