"""Spots that overlap, and the linear weights that read each of them alone."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    from numpy.typing import ArrayLike, NDArray

PROFILE_REACH_SIGMA = 4.0  # a Gaussian has fallen to 3e-4 of its peak there


@dataclass(frozen=True, slots=True, kw_only=True)
class Patch:
    """A small image and the place of its first pixel in the whole image.

    Attributes
    ----------
    y0, x0 : int
        Row and column of the patch's first pixel.
    values : (h, w) ndarray
    """

    y0: int
    x0: int
    values: NDArray[np.float64]

    @property
    def slices(self) -> tuple[slice, slice]:
        """Where the patch lies in the whole image."""
        height, width = self.values.shape
        return slice(self.y0, self.y0 + height), slice(self.x0, self.x0 + width)

    def onto(self, other: Patch) -> NDArray[np.float64]:
        """Values of this patch on the pixels of another one, 0 where they do not overlap."""
        values = np.zeros(other.values.shape)
        top, left = max(self.y0, other.y0), max(self.x0, other.x0)
        bottom = min(self.y0 + self.values.shape[0], other.y0 + other.values.shape[0])
        right = min(self.x0 + self.values.shape[1], other.x0 + other.values.shape[1])
        if bottom > top and right > left:
            part = self.values[top - self.y0 : bottom - self.y0, left - self.x0 : right - self.x0]
            values[top - other.y0 : bottom - other.y0, left - other.x0 : right - other.x0] = part
        return values


def window(y_px: float, x_px: float, *, radius_px: float, shape: tuple[int, int]) -> tuple[int, int, int, int]:
    """First and past-last row and column of a square around a place, cut at the image: y0, y1, x0, x1."""
    reach = int(np.ceil(radius_px))
    row, column = round(y_px), round(x_px)
    y0, y1 = max(row - reach, 0), min(row + reach + 1, shape[0])
    x0, x1 = max(column - reach, 0), min(column + reach + 1, shape[1])
    return y0, max(y1, y0), x0, max(x1, x0)


def gaussian_patch(
    y_px: float, x_px: float, *, sigma_px: float, shape: tuple[int, int], radius_px: float | None = None
) -> Patch:
    """Draw a Gaussian spot of peak 1 at a sub-pixel place.

    Parameters
    ----------
    y_px, x_px : float
        Centre (px).
    sigma_px : float
        Gaussian sigma (px).
    shape : (int, int)
        Size of the whole image.
    radius_px : float or None
        Half width of the patch (px); None for `PROFILE_REACH_SIGMA` sigmas.
    """
    reach = PROFILE_REACH_SIGMA * sigma_px if radius_px is None else radius_px
    y0, y1, x0, x1 = window(y_px, x_px, radius_px=reach, shape=shape)
    along_y = np.exp(-0.5 * ((np.arange(y0, y1) - y_px) / sigma_px) ** 2)
    along_x = np.exp(-0.5 * ((np.arange(x0, x1) - x_px) / sigma_px) ** 2)
    return Patch(y0=y0, x0=x0, values=np.outer(along_y, along_x))


def separated_weights(
    *,
    y_px: ArrayLike,
    x_px: ArrayLike,
    profiles: Sequence[Patch],
    inverse_variance: NDArray[np.float64],
    radius_px: float,
    separate: bool,
) -> list[Patch]:
    """Weights whose product with an image is the height of one profile, its neighbours and the background taken out.

    Around each place a weighted least-squares fit of its own profile, the profiles of all neighbours that reach into
    the window, and a constant background; the weights are the row of the solution that belongs to its own profile.
    With `inverse_variance` the true noise this is the best linear unbiased reading (Aitken 1936).

    Parameters
    ----------
    y_px, x_px : (n,) array_like of float
        Places (px).
    profiles : sequence of n Patch
        Brightness of each spot, peak 1.
    inverse_variance : (y, x) ndarray
        Weight of each pixel; 0 leaves it out.
    radius_px : float
        Radius of the round window within which the background is taken as constant (px).
    separate : bool
        False fits the own profile and the background alone.

    Returns
    -------
    list of n Patch
        Weights; all NaN where no usable pixel shows the profile.
    """
    ys, xs = np.asarray(y_px, dtype=np.float64), np.asarray(x_px, dtype=np.float64)
    shape = (inverse_variance.shape[0], inverse_variance.shape[1])
    weights = []
    for index in range(len(ys)):
        y0, y1, x0, x1 = window(ys[index], xs[index], radius_px=radius_px, shape=shape)
        rows, columns = np.mgrid[y0:y1, x0:x1]
        inside = (rows - ys[index]) ** 2 + (columns - xs[index]) ** 2 <= radius_px**2
        frame = Patch(y0=y0, x0=x0, values=np.where(inside, inverse_variance[y0:y1, x0:x1], 0.0))
        weights.append(_own_row(index, frame, profiles, separate=separate))
    return weights


def _own_row(index: int, frame: Patch, profiles: Sequence[Patch], *, separate: bool) -> Patch:
    """Weights of profile `index` within a window whose values are inverse variances."""
    precision = frame.values.ravel()
    own = profiles[index].onto(frame).ravel()
    energy = float(np.sum(precision * own**2))
    if energy <= 0:
        return Patch(y0=frame.y0, x0=frame.x0, values=np.full(frame.values.shape, np.nan))
    design = [own, np.ones_like(own)]
    for other, profile in enumerate(profiles):
        if separate and other != index and _touch(profile, frame):
            column = profile.onto(frame).ravel()
            if np.sum(precision * column**2) > 1e-4 * energy:
                design.append(column)
    columns = np.stack(design)
    # The pseudo-inverse keeps two profiles at the same place from blowing up: they share what they cannot divide.
    normal = (columns * precision) @ columns.T
    scale = 1.0 / np.sqrt(np.diag(normal))
    solution = np.linalg.pinv(normal * np.outer(scale, scale), rcond=1e-6, hermitian=True) * np.outer(scale, scale)
    return Patch(y0=frame.y0, x0=frame.x0, values=(solution[0] @ (columns * precision)).reshape(frame.values.shape))


def _touch(profile: Patch, frame: Patch) -> bool:
    (height, width), (frame_height, frame_width) = profile.values.shape, frame.values.shape
    return bool(
        profile.y0 < frame.y0 + frame_height
        and frame.y0 < profile.y0 + height
        and profile.x0 < frame.x0 + frame_width
        and frame.x0 < profile.x0 + width
    )


def read_maps(maps: NDArray[np.floating], weights: Sequence[Patch]) -> NDArray[np.float64]:
    """Height of each spot in each map: (n_spots, n_maps)."""
    heights = np.empty((len(weights), maps.shape[0]))
    for index, patch in enumerate(weights):
        rows, columns = patch.slices
        heights[index] = maps[:, rows, columns].reshape(maps.shape[0], -1) @ patch.values.ravel().astype(maps.dtype)
    return heights


def fit_spot(
    image: NDArray[np.float64],
    *,
    inverse_variance: NDArray[np.float64],
    y: float,
    x: float,
    sigma: float,
    free_sigma: bool,
) -> tuple[float, float, float, float]:
    """Least-squares centre, width and height of one Gaussian spot on a constant background.

    Gauss-Newton steps on the centre (and the width), each limited to half a sigma.

    Parameters
    ----------
    image, inverse_variance : (h, w) ndarray
        A small image around the spot and the weight of its pixels.
    y, x, sigma : float
        Start, in pixels of that image.
    free_sigma : bool
        Fit the width, too.

    Returns
    -------
    y, x, sigma, height : float
        Where the spot ended; the start if the fit ran away by more than two sigmas.
    """
    rows, columns = np.mgrid[: image.shape[0], : image.shape[1]]
    start = (y, x, sigma)
    height = 0.0
    root = np.sqrt(inverse_variance).ravel()
    for _ in range(25):
        dy, dx = rows - y, columns - x
        spot = np.exp(-0.5 * (dy**2 + dx**2) / sigma**2)
        design = [spot, np.ones_like(spot)]
        linear = np.stack([column.ravel() * root for column in design], axis=1)
        height, offset = np.linalg.lstsq(linear, image.ravel() * root, rcond=None)[0]
        if height <= 0:
            break
        design += [height * spot * dy / sigma**2, height * spot * dx / sigma**2]
        if free_sigma:
            design.append(height * spot * (dy**2 + dx**2) / sigma**3)
        full = np.stack([column.ravel() * root for column in design], axis=1)
        rest = (image - height * spot - offset).ravel() * root
        step = np.clip(np.linalg.lstsq(full, rest, rcond=None)[0][2:], -0.5 * sigma, 0.5 * sigma)
        y, x = y + float(step[0]), x + float(step[1])
        sigma = float(np.clip(sigma + (step[2] if free_sigma else 0.0), 0.4 * start[2], 2.5 * start[2]))
        if np.max(np.abs(step)) < 1e-3:
            break
    if height <= 0 or np.hypot(y - start[0], x - start[1]) > 2 * start[2]:
        return (*start, float(height))
    return y, x, sigma, float(height)


def estimate_spot_sigma(
    image: NDArray[np.floating], *, y_px: ArrayLike, x_px: ArrayLike, start_sigma_px: float, usable: NDArray[np.bool_]
) -> float:
    """Measure the median Gaussian sigma of the spots that stand alone in an image.

    Each is fitted over 2.5 sigmas with a free width. In a mean image the shaft widens a spot a little; widths from
    responses, where a detection has them, are to be preferred.

    Parameters
    ----------
    image : (y, x) ndarray
        Mean image or mean response (counts).
    y_px, x_px : (n,) array_like of float
        Places (px).
    start_sigma_px : float
        First guess (px), returned where no spot stands alone.
    usable : (y, x) ndarray of bool
        Pixels to fit.

    Returns
    -------
    float
        Sigma (px), between 0.6 and 1.7 times the first guess.
    """
    ys, xs = np.asarray(y_px, dtype=np.float64), np.asarray(x_px, dtype=np.float64)
    shape = (image.shape[0], image.shape[1])
    sigmas = []
    for y, x in zip(ys, xs, strict=True):
        if np.sum(np.hypot(ys - y, xs - x) < 5 * start_sigma_px) > 1:
            continue
        y0, y1, x0, x1 = window(y, x, radius_px=2.5 * start_sigma_px, shape=shape)
        weight = usable[y0:y1, x0:x1].astype(np.float64)
        if np.mean(weight) < 0.9:
            continue
        _, _, sigma, height = fit_spot(
            image[y0:y1, x0:x1].astype(np.float64),
            inverse_variance=weight,
            y=y - y0,
            x=x - x0,
            sigma=start_sigma_px,
            free_sigma=True,
        )
        if height > 0:
            sigmas.append(sigma)
    if not sigmas:
        return start_sigma_px
    return float(np.clip(np.median(sigmas), 0.6 * start_sigma_px, 1.7 * start_sigma_px))
