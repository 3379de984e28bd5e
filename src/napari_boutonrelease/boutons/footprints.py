"""Footprints: the linear weights with which a bouton's brightness is read from any frame.

Weights come from a least-squares fit of the bouton's profile, its neighbours' profiles and a constant background, each
pixel weighted by the inverse of its photon noise. One sum of products per frame then gives the height of the profile's
peak in counts, with the background subtracted and the neighbours separated.

At rest the bare axon shines under the bouton, too. It does not respond, so that it does not bias a response, but it
would be read as part of the baseline. `shaft_counts` is what the weights see of it in the mean image, found by a second
fit with two rays of axon; subtracted from the baseline, it leaves the brightness of the bouton itself.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Literal

import numpy as np

from ..errors import InputError
from .optics import Optics
from .shaft import shaft_rays
from .spots import Patch, gaussian_patch, separated_weights

if TYPE_CHECKING:
    from numpy.typing import ArrayLike, NDArray

FootprintMode = Literal["weighted", "disc", "adaptive"]

_MOST_SHAFT_OF_MEDIAN = 2.0
_ENOUGH_SHAFTS = 3
_CORE = 0.5  # of the peak: pixels that the label image and `footprint_px` count
_SEEN = 0.25  # of the peak: a saturated or dead pixel in here matters
_CLEARLY = 5.0  # SD of the texture of the surroundings
_CUT_SHARE = 0.02  # of the profile's energy: more than that beyond the border is an edge
_ADAPTIVE_REACH = 2.5  # sigmas
_RIM_SIGMAS = 1.5  # light of a drawn mask spills so far and must not count as background


@dataclass(frozen=True, slots=True, kw_only=True)
class Footprints:
    """How each bouton is read.

    Attributes
    ----------
    y_px, x_px : (n,) ndarray
        Centres in reference coordinates (px).
    y0, x0 : (n,) ndarray of int
        First row and column of each patch of weights.
    weights : tuple of n (h, w) ndarray
        The sum of weights times frame is the height of the profile's peak above background (counts). NaN where nothing
        of the bouton can be seen.
    naive_weights : tuple of n (h, w) ndarray
        The same patches without separation from neighbours.
    profiles : tuple of n (h, w) ndarray
        Brightness of each bouton on the pixels of its own patch, peak 1.
    label : (y, x) ndarray of int32
        Core pixels; bouton i is i + 1, 0 is background.
    footprint_px : (n,) ndarray of int
        Number of core pixels.
    shaft_counts : (n,) ndarray
        What the weights read of the bare axon in the mean image (counts).
    spot_sigma_px : float
        Gaussian sigma of the profiles (px).
    flags : tuple of n frozenset of str
        `edge`, `saturated`, `dead_pixels`.
    """

    y_px: NDArray[np.float64]
    x_px: NDArray[np.float64]
    y0: NDArray[np.intp]
    x0: NDArray[np.intp]
    weights: tuple[NDArray[np.float64], ...]
    naive_weights: tuple[NDArray[np.float64], ...]
    profiles: tuple[NDArray[np.float64], ...]
    label: NDArray[np.int32]
    footprint_px: NDArray[np.intp]
    shaft_counts: NDArray[np.float64]
    spot_sigma_px: float
    flags: tuple[frozenset[str], ...]


def build_footprints(
    *,
    y_px: ArrayLike,
    x_px: ArrayLike,
    optics: Optics,
    spot_sigma_px: float,
    background_radius_px: float,
    mode: FootprintMode,
    response_image: NDArray[np.floating] | None,
    response_variance: NDArray[np.floating] | None,
    drawn: Mapping[int, NDArray[np.intp]] | None = None,
) -> Footprints:
    """Compute the extraction weights of boutons at given places.

    Parameters
    ----------
    y_px, x_px : (n,) array_like of float
        Centres in reference coordinates (px).
    optics : Optics
        Mean image, noise, unusable pixels and range of movement.
    spot_sigma_px : float
        Gaussian sigma of a bouton's image (px).
    background_radius_px : float
        Radius within which the background is constant (px). A small one makes the background, and with it the trace,
        noisy: at 10 sigmas it costs 4 % of the variance, at 5 sigmas 19 %.
    mode : {"weighted", "disc", "adaptive"}
        Gaussian profile with photon-noise weights; plain disc of half-maximum diameter with equal weights; or the
        profile seen in `response_image`, shrunk towards the Gaussian by as much as it is noise.
    response_image, response_variance : (y, x) ndarray or None
        Mean response and its variance, for `adaptive`.
    drawn : mapping of int to (k, 2) ndarray of int, optional
        Pixels (y, x) of boutons whose footprint was drawn: their plain mean is read instead. Keys are indices.

    Returns
    -------
    Footprints

    Raises
    ------
    InputError
        If `adaptive` is asked for without a response image.
    """
    ys, xs = (np.array(values, dtype=np.float64, ndmin=1) for values in (y_px, x_px))
    shape = (optics.mean_image.shape[0], optics.mean_image.shape[1])
    profiles = [gaussian_patch(y, x, sigma_px=spot_sigma_px, shape=shape) for y, x in zip(ys, xs, strict=True)]
    precision = np.where(optics.usable(), 1.0 / optics.variance_image, 0.0)
    if mode == "disc":
        profiles = [_disc(profile) for profile in profiles]
        precision = np.where(precision > 0, 1.0, 0.0)
    elif mode == "adaptive":
        if response_image is None or response_variance is None:
            raise InputError(
                "Adaptive footprints need the mean response image and its variance; give both, or use weighted."
            )
        profiles = [
            _adapted(profile, y, x, image=response_image, variance=response_variance, sigma_px=spot_sigma_px)
            for profile, y, x in zip(profiles, ys, xs, strict=True)
        ]
    drawn = drawn or {}
    for index, pixels in drawn.items():
        profiles[index] = _mask(pixels)
        ys[index], xs[index] = pixels.mean(axis=0)
    label = _core_labels(profiles, shape)
    if drawn:
        precision = np.where(_rim(drawn, shape, reach_px=_RIM_SIGMAS * spot_sigma_px), 0.0, precision)
    widest = max((max(profiles[index].values.shape) for index in drawn), default=0)
    return _assemble(
        ys,
        xs,
        profiles,
        optics=optics,
        precision=precision,
        spot_sigma_px=spot_sigma_px,
        radius_px=background_radius_px + widest / 2,
        label=label,
    )


def footprints_from_labels(
    label: NDArray[np.integer], *, optics: Optics, spot_sigma_px: float, background_radius_px: float
) -> Footprints:
    """Compute the extraction weights of drawn masks: their mean, background and neighbouring masks separated.

    Parameters
    ----------
    label : (y, x) ndarray of int
        0 is background; every other value is a bouton, in ascending order.
    optics : Optics
        Mean image, noise, unusable pixels and range of movement.
    spot_sigma_px : float
        Gaussian sigma of a bouton's image (px); 1.5 sigmas around the masks do not count as background.
    background_radius_px : float
        Radius within which the background is constant (px).

    Returns
    -------
    Footprints
    """
    pixels = list(drawn_pixels(label).values())
    nowhere = np.zeros(len(pixels))
    return build_footprints(
        y_px=nowhere,
        x_px=nowhere,
        optics=optics,
        spot_sigma_px=spot_sigma_px,
        background_radius_px=background_radius_px,
        mode="weighted",
        response_image=None,
        response_variance=None,
        drawn=dict(enumerate(pixels)),
    )


def drawn_pixels(label: NDArray[np.integer]) -> dict[int, NDArray[np.intp]]:
    """Pixels of every value of a label image above 0, by value in ascending order."""
    rows, columns = np.nonzero(label)
    values = label[rows, columns]
    pixels = np.column_stack([rows, columns])
    return {int(value): pixels[values == value] for value in np.unique(values)}


def _mask(pixels: NDArray[np.intp]) -> Patch:
    y0, x0 = pixels.min(axis=0)
    values = np.zeros(tuple(np.ptp(pixels, axis=0) + 1))
    values[pixels[:, 0] - y0, pixels[:, 1] - x0] = 1.0
    return Patch(y0=int(y0), x0=int(x0), values=values)


def _rim(drawn: Mapping[int, NDArray[np.intp]], shape: tuple[int, int], *, reach_px: float) -> NDArray[np.bool_]:
    """Pixels just outside drawn masks: light of the bouton falls there, so that they are no background."""
    from scipy.ndimage import distance_transform_edt

    outside = np.ones(shape, dtype=np.bool_)
    for pixels in drawn.values():
        outside[pixels[:, 0], pixels[:, 1]] = False
    return np.asarray(outside & (distance_transform_edt(outside) <= reach_px))


def _assemble(
    ys: NDArray[np.float64],
    xs: NDArray[np.float64],
    profiles: Sequence[Patch],
    *,
    optics: Optics,
    precision: NDArray[np.float64],
    spot_sigma_px: float,
    radius_px: float,
    label: NDArray[np.int32],
) -> Footprints:
    weights, naive = (
        separated_weights(
            y_px=ys, x_px=xs, profiles=profiles, inverse_variance=precision, radius_px=radius_px, separate=separate
        )
        for separate in (True, False)
    )
    shaft = [
        _shaft_counts(
            i,
            ys,
            xs,
            profiles,
            weights[i],
            optics=optics,
            precision=precision,
            sigma_px=spot_sigma_px,
            radius_px=radius_px,
        )
        for i in range(len(ys))
    ]
    return Footprints(
        y_px=ys,
        x_px=xs,
        y0=np.array([patch.y0 for patch in weights], dtype=np.intp),
        x0=np.array([patch.x0 for patch in weights], dtype=np.intp),
        weights=tuple(patch.values for patch in weights),
        naive_weights=tuple(patch.values for patch in naive),
        profiles=tuple(profile.onto(patch) for profile, patch in zip(profiles, weights, strict=True)),
        label=label,
        footprint_px=np.bincount(label.ravel(), minlength=len(ys) + 1)[1 : len(ys) + 1],
        shaft_counts=_like_the_others(np.array(shaft, dtype=np.float64)),
        spot_sigma_px=spot_sigma_px,
        flags=_flags(ys, xs, profiles, optics),
    )


def _disc(profile: Patch) -> Patch:
    return Patch(y0=profile.y0, x0=profile.x0, values=(profile.values >= 0.5).astype(np.float64))


def _adapted(
    profile: Patch,
    y: float,
    x: float,
    *,
    image: NDArray[np.floating],
    variance: NDArray[np.floating],
    sigma_px: float,
) -> Patch:
    """Move the profile seen in an image towards the Gaussian by the share of the difference that noise explains."""
    seen = image[profile.slices].astype(np.float64)
    noise = np.maximum(variance[profile.slices].astype(np.float64), 1e-30)
    energy = np.sum(profile.values**2 / noise)
    height = np.sum(profile.values * seen / noise) / energy
    rows, columns = np.mgrid[profile.slices]
    near = np.hypot(rows - y, columns - x) <= _ADAPTIVE_REACH * sigma_px
    if height <= 0 or not np.any(near):
        return profile
    rest = np.where(near, seen / height - profile.values, 0.0)
    excess = np.sum(np.where(near, rest**2 * height**2 / noise, 0.0))
    # What noise alone would reach in 98 of 100 spots: the sum of as many squares as there are pixels.
    n_near = np.count_nonzero(near)
    trust = max(0.0, 1.0 - (n_near + 2 * np.sqrt(2 * n_near)) / max(float(excess), 1e-30))
    return Patch(y0=profile.y0, x0=profile.x0, values=np.maximum(profile.values + trust * rest, 0.0))


def _core_labels(profiles: Sequence[Patch], shape: tuple[int, ...]) -> NDArray[np.int32]:
    """Pixels above half of a profile's peak, each with the profile that is brightest there."""
    label = np.zeros(shape, dtype=np.int32)
    best = np.zeros(shape)
    for index, profile in enumerate(profiles, start=1):
        wins = (profile.values >= _CORE) & (profile.values > best[profile.slices])
        label[profile.slices][wins] = index
        best[profile.slices][wins] = profile.values[wins]
    return label


def _like_the_others(shaft: NDArray[np.float64]) -> NDArray[np.float64]:
    """Limit what is read of the axon: it is about as bright at one bouton as at the next, so much more is no axon."""
    seen = shaft[shaft > 0]
    return np.minimum(shaft, _MOST_SHAFT_OF_MEDIAN * np.median(seen)) if seen.size >= _ENOUGH_SHAFTS else shaft


def _shaft_counts(
    index: int,
    ys: NDArray[np.float64],
    xs: NDArray[np.float64],
    profiles: Sequence[Patch],
    weights: Patch,
    *,
    optics: Optics,
    precision: NDArray[np.float64],
    sigma_px: float,
    radius_px: float,
) -> float:
    """Compare the weights' reading of the mean image with the height fitted beside two rays of axon."""
    if not np.all(np.isfinite(weights.values)):
        return float("nan")
    near = np.flatnonzero(np.hypot(ys - ys[index], xs - xs[index]) < radius_px + 4 * sigma_px)
    image = Patch(y0=weights.y0, x0=weights.x0, values=np.asarray(optics.mean_image[weights.slices], dtype=np.float64))
    reading = float(np.sum(weights.values * image.values))
    own = profiles[index].onto(weights)
    # Equal weights: the axon's course is a matter of light, not of noise.
    used = np.where(precision[weights.slices] > 0, 1.0, 0.0)
    used[_brighter(image.values, than=reading, usable=used > 0, sigma_px=sigma_px) & (own < _SEEN)] = 0.0
    columns = [own.ravel(), np.ones(image.values.size)]
    columns += [profiles[j].onto(weights).ravel() for j in near.tolist() if j != index]
    columns = [column for column in columns if np.sum(used.ravel() * column**2) > 1e-6]
    others = np.stack(columns)
    rays = shaft_rays(image, y_px=ys[index], x_px=xs[index], precision=used, other_columns=others, sigma_px=sigma_px)
    design = np.vstack([others, rays]) * used.ravel()
    height = float(np.linalg.lstsq(design.T, image.values.ravel() * used.ravel(), rcond=1e-8)[0][0])
    return reading - height


def _brighter(
    image: NDArray[np.float64], *, than: float, usable: NDArray[np.bool_], sigma_px: float
) -> NDArray[np.bool_]:
    """Pixels that shine more than a bouton does, and what these spill around: not its axon, but something else."""
    from scipy.ndimage import binary_dilation

    floor = float(np.median(image[usable])) if usable.any() else 0.0
    texture = 1.482602 * float(np.median(np.abs(image[usable] - floor))) if usable.any() else 0.0
    bright = image > floor + max(than, _CLEARLY * texture)
    return np.asarray(binary_dilation(bright, iterations=int(np.ceil(sigma_px))) if bright.any() else bright)


def _flags(
    ys: NDArray[np.float64], xs: NDArray[np.float64], profiles: Sequence[Patch], optics: Optics
) -> tuple[frozenset[str], ...]:
    saturated, dead = optics.on_sample(optics.saturated), optics.on_sample(optics.dead)
    always_inside = optics.always_inside()
    height, width = optics.mean_image.shape
    flags = []
    for y, x, profile in zip(ys, xs, profiles, strict=True):
        found = set()
        seen = profile.values >= _SEEN
        if np.any(saturated[profile.slices] & seen):
            found.add("saturated")
        if np.any(dead[profile.slices] & seen):
            found.add("dead_pixels")
        energy = profile.values**2
        reach = 0.5 * min(profile.values.shape)
        beyond = min(y + 0.5, x + 0.5, height - 0.5 - y, width - 0.5 - x) < min(reach, 2.0)
        if beyond or np.sum(energy * ~always_inside[profile.slices]) > _CUT_SHARE * np.sum(energy):
            found.add("edge")
        flags.append(frozenset(found))
    return tuple(flags)


def crosstalk_matrix(footprints: Footprints) -> NDArray[np.float64]:
    """How much of each bouton's light the others' unseparated weights would read.

    Returns
    -------
    (n, n) ndarray
        Element (i, j): reading of bouton i, with its own profile and a background alone, of a neighbour j of height 1.
        The diagonal is 1.
    """
    n = len(footprints.y_px)
    matrix = np.eye(n)
    patches = [
        Patch(y0=int(y0), x0=int(x0), values=values)
        for y0, x0, values in zip(footprints.y0, footprints.x0, footprints.profiles, strict=True)
    ]
    corner = np.stack([footprints.y0, footprints.x0], axis=1) if n else np.empty((0, 2))
    size = np.array([patch.values.shape for patch in patches]).reshape(n, 2)
    apart = corner[:, None] - corner[None]
    meet = np.all((apart < size[None]) & (-apart < size[:, None]), axis=2)  # most boutons are far from each other
    for i, j in np.argwhere(meet):
        if i != j:
            frame = Patch(y0=patches[i].y0, x0=patches[i].x0, values=footprints.naive_weights[i])
            matrix[i, j] = float(np.sum(frame.values * patches[j].onto(frame)))
    return matrix
