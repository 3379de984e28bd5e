"""The bare axon under a bouton: two rays of light that meet at its centre, told apart from the bouton itself."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from .spots import Patch

if TYPE_CHECKING:
    from numpy.typing import NDArray

_N_ANGLES = 48


def shaft_rays(
    image: Patch,
    *,
    y_px: float,
    x_px: float,
    precision: NDArray[np.float64],
    other_columns: NDArray[np.float64],
    sigma_px: float,
) -> NDArray[np.float64]:
    """Find the two rays that explain most of what the spots and the background leave in the image.

    A ray is half a line of light that starts at the bouton's centre, seen through a Gaussian point spread:
    exp(-across² / 2 sigma²) * Phi(along / sigma). All pairs of directions are tried by linear least squares; a ray
    that would be dark is left out. Two rays instead of a line, because an axon bends and ends.

    Parameters
    ----------
    image : Patch
        Mean image around the bouton (counts).
    y_px, x_px : float
        Centre of the bouton (px).
    precision : (h, w) ndarray
        Weight of each pixel; 0 leaves it out.
    other_columns : (k, h * w) ndarray
        What else the image is made of: the bouton's own profile, background, neighbours.
    sigma_px : float
        Gaussian sigma of the shaft's cross-section (px).

    Returns
    -------
    (n, h * w) ndarray
        0, 1 or 2 rays of brightness 1 on their middle line.
    """
    rays = _rays(image, y_px=y_px, x_px=x_px, sigma_px=sigma_px)
    weight = precision.ravel()
    target = image.values.ravel()
    columns = np.vstack([rays, other_columns])
    normal = (columns * weight) @ columns.T
    right = (columns * weight) @ target
    others = np.arange(_N_ANGLES, len(columns))
    first, second = np.triu_indices(_N_ANGLES, k=_N_ANGLES // 8)  # rays closer than 45 degrees are one
    choices = np.column_stack([first, second, np.broadcast_to(others, (len(first), len(others)))])
    heights, gain = _solve(normal, right, choices)
    gain[(heights[:, :2] <= 0).any(axis=1)] = -np.inf
    single = np.column_stack([np.arange(_N_ANGLES), np.broadcast_to(others, (_N_ANGLES, len(others)))])
    single_heights, single_gain = _solve(normal, right, single)
    single_gain[single_heights[:, 0] <= 0] = -np.inf
    best, best_single = int(np.argmax(gain)), int(np.argmax(single_gain))
    if gain[best] > single_gain[best_single]:
        return rays[[first[best], second[best]]]
    return rays[[best_single]] if np.isfinite(single_gain[best_single]) else rays[:0]


def _rays(image: Patch, *, y_px: float, x_px: float, sigma_px: float) -> NDArray[np.float64]:
    from scipy.special import ndtr

    height, width = image.values.shape
    dy = (np.arange(height) + image.y0 - y_px)[:, None]
    dx = (np.arange(width) + image.x0 - x_px)[None, :]
    angles = 2 * np.pi * np.arange(_N_ANGLES) / _N_ANGLES
    along = dy * np.sin(angles)[:, None, None] + dx * np.cos(angles)[:, None, None]
    across = dy * np.cos(angles)[:, None, None] - dx * np.sin(angles)[:, None, None]
    return np.asarray(np.exp(-0.5 * (across / sigma_px) ** 2) * ndtr(along / sigma_px)).reshape(_N_ANGLES, -1)


def _solve(
    normal: NDArray[np.float64], right: NDArray[np.float64], choices: NDArray[np.intp]
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Least squares on each choice of columns: heights (n, k) and the sum of squares explained (n,)."""
    matrices = normal[choices[:, :, None], choices[:, None, :]]
    # A breath of ridge keeps a ray that lies in masked pixels from making the matrix singular.
    diagonal = np.einsum("nii->ni", matrices)
    diagonal += 1e-9 * diagonal + 1e-12 * np.max(np.diag(normal))
    targets = right[choices]
    heights = np.linalg.solve(matrices, targets[..., None])[..., 0]
    return np.asarray(heights, dtype=np.float64), np.asarray(np.sum(heights * targets, axis=1), dtype=np.float64)
