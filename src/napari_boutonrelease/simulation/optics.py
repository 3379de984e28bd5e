"""Light of point sources, discs and a thin line through a Gaussian point spread, integrated over square pixels."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    from numpy.typing import ArrayLike, NDArray

# A disc as seven points: the centre with 1/4, six on the ring sqrt(2/3) R with 1/8 each; exact up to degree 5
# (Stroud 1971, formula S2 5-1).
_RING = np.arange(6) * np.pi / 3
_DISC_Y = np.concatenate([[0.0], np.sqrt(2 / 3) * np.sin(_RING)])
_DISC_X = np.concatenate([[0.0], np.sqrt(2 / 3) * np.cos(_RING)])
_DISC_WEIGHT = np.array([1 / 4, *[1 / 8] * 6])


def line_share(first_px: NDArray[np.int64], n_px: int, centre_px: ArrayLike, sigma_px: float) -> NDArray[np.float64]:
    """Share of the light of point sources that falls on each of `n_px` pixels in a row.

    Parameters
    ----------
    first_px : (...) ndarray of int
        First pixel of each row.
    n_px : int
        Pixels in the row.
    centre_px : (...) array_like
        Position of each source; broadcasts with `first_px`.
    sigma_px : float
        SD of the point spread.

    Returns
    -------
    (..., n_px) ndarray
    """
    from scipy.special import ndtr

    edges = first_px[..., None] + np.arange(n_px + 1) - 0.5
    return np.diff(ndtr((edges - np.asarray(centre_px)[..., None]) / sigma_px), axis=-1)


class Spot:
    """Image of a disc of light, scaled to 1 in the peak pixel when it lies on a pixel's centre.

    Parameters
    ----------
    sigma_px, radius_px : float
        SD of the point spread and radius of the disc.
    """

    def __init__(self, *, sigma_px: float, radius_px: float) -> None:
        self.sigma_px, self.radius_px = sigma_px, radius_px
        self.reach_px = int(np.ceil(4.5 * sigma_px + radius_px))
        self.width_px = 2 * self.reach_px + 1
        self._peak = 1.0
        self._peak = float(self.patches(np.zeros(1), np.zeros(1))[2].max())

    def patches(
        self, y_px: NDArray[np.float64], x_px: NDArray[np.float64]
    ) -> tuple[NDArray[np.int64], NDArray[np.int64], NDArray[np.float64]]:
        """Render the spot at each position.

        Returns
        -------
        y0, x0 : (n,) ndarray of int
            Corner of each patch.
        patches : (n, width, width) ndarray
        """
        y0 = np.rint(y_px).astype(np.int64) - self.reach_px
        x0 = np.rint(x_px).astype(np.int64) - self.reach_px
        share_y = line_share(y0[:, None], self.width_px, y_px[:, None] + self.radius_px * _DISC_Y, self.sigma_px)
        share_x = line_share(x0[:, None], self.width_px, x_px[:, None] + self.radius_px * _DISC_X, self.sigma_px)
        weighted = share_y * (_DISC_WEIGHT / self._peak)[:, None]
        return y0, x0, np.matmul(weighted.transpose(0, 2, 1), share_x)


class Lattice:
    """A dim, extended object as point sources on whole pixels, which can be imaged at any sub-pixel displacement.

    With a point spread of a pixel or more the lattice cannot be seen in the image: no resampling, hence no smoothing.

    Parameters
    ----------
    shape : tuple of int
        Image height and width, in pixels.
    margin_px : int
        How far the object is known outside the image.
    sigma_px : float
        SD of the point spread.
    """

    def __init__(self, *, shape: tuple[int, int], margin_px: int, sigma_px: float) -> None:
        self.shape, self.margin_px, self.sigma_px = shape, margin_px, sigma_px
        self.sources = np.zeros((shape[0] + 2 * margin_px, shape[1] + 2 * margin_px))

    def add_points(self, y_px: NDArray[np.float64], x_px: NDArray[np.float64], light: NDArray[np.float64]) -> None:
        """Add light at any positions, shared between the four nearest nodes; what lies outside is left out."""
        y, x = y_px + self.margin_px, x_px + self.margin_px
        inside = (y >= 0) & (x >= 0) & (y < self.sources.shape[0] - 1) & (x < self.sources.shape[1] - 1)
        y, x, light = y[inside], x[inside], light[inside]
        row, column = y.astype(np.int64), x.astype(np.int64)
        down, right = y - row, x - column
        for i, share_y in ((0, 1 - down), (1, down)):
            for j, share_x in ((0, 1 - right), (1, right)):
                np.add.at(self.sources, (row + i, column + j), light * share_y * share_x)

    def images(self, dy_px: NDArray[np.float64], dx_px: NDArray[np.float64]) -> NDArray[np.float64]:
        """Image the object at each displacement, (n, height, width)."""
        by_row, by_column = (
            self._shares(n_px, n_nodes, shift)
            for n_px, n_nodes, shift in zip(self.shape, self.sources.shape, (dy_px, dx_px), strict=True)
        )
        images: NDArray[np.float64] = np.matmul(np.matmul(by_row.transpose(0, 2, 1), self.sources), by_column)
        return images

    def _shares(self, n_px: int, n_nodes: int, shift_px: NDArray[np.float64]) -> NDArray[np.float64]:
        """Share of every node's light in every pixel, (n, n_nodes, n_px): one row of shares, slid from node to node."""
        first = np.full(shift_px.size, self.margin_px - (n_nodes - 1))
        shares = line_share(first, n_px + n_nodes - 1, shift_px, self.sigma_px)
        return np.lib.stride_tricks.sliding_window_view(shares, n_px, axis=1)[:, ::-1]
