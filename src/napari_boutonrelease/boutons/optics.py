"""What is known of the pixels around the boutons: light, noise, and which of them can be used."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    from numpy.typing import NDArray


@dataclass(frozen=True, slots=True, kw_only=True)
class Optics:
    """What the pixels around the boutons look like.

    Attributes
    ----------
    mean_image : (y, x) ndarray
        Mean of the movement-corrected frames (counts).
    variance_image : (y, x) ndarray
        Noise variance of one frame's pixel (counts²), greater than 0.
    saturated, dead : (y, x) ndarray of bool
        Pixels that cannot be used.
    dy_range_px, dx_range_px : (float, float)
        Smallest and largest drift over the used frames (px).
    """

    mean_image: NDArray[np.float64]
    variance_image: NDArray[np.float64]
    saturated: NDArray[np.bool_]
    dead: NDArray[np.bool_]
    dy_range_px: tuple[float, float]
    dx_range_px: tuple[float, float]

    def always_inside(self) -> NDArray[np.bool_]:
        """Return the reference pixels that every frame shows, with the pixels beside them that interpolation needs."""
        height, width = self.mean_image.shape
        rows = _inside(height, *self.dy_range_px)
        columns = _inside(width, *self.dx_range_px)
        return rows[:, None] & columns[None, :]

    def usable(self) -> NDArray[np.bool_]:
        """Return the pixels that carry information in every frame."""
        return self.always_inside() & ~self.on_sample(self.saturated) & ~self.on_sample(self.dead)

    def on_sample(self, mask: NDArray[np.bool_]) -> NDArray[np.bool_]:
        """Move a mask of the detector to reference coordinates, at mid drift."""
        shift = tuple(-round((low + high) / 2) for low, high in (self.dy_range_px, self.dx_range_px))
        moved = np.zeros_like(mask)
        height, width = mask.shape
        rows, columns = np.nonzero(mask)
        rows, columns = rows + shift[0], columns + shift[1]
        inside = (rows >= 0) & (rows < height) & (columns >= 0) & (columns < width)
        moved[rows[inside], columns[inside]] = True
        return moved


def _inside(size: int, low: float, high: float) -> NDArray[np.bool_]:
    index = np.arange(size)
    if low == high == 0:
        return np.ones(size, dtype=np.bool_)
    return (index + low >= 1) & (index + high <= size - 2)
