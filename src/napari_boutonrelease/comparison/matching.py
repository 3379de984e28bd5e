"""Which bouton of one recording is which of another: mean images laid on one another, then nearest pairs.

The shift between two mean images is where their cross-correlation peaks: of the images as they are in space, not
normalised in phase, which fails on noisy images (Guizar-Sicairos et al. 2008 for the sub-pixel step). Boutons are then
paired so that the sum of their distances is smallest, and pairs further apart than allowed are taken as unmatched.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from ..errors import InputError

if TYPE_CHECKING:
    from collections.abc import Sequence

    from numpy.typing import NDArray

    from .recording import ComparedRecording

    Floats = NDArray[np.float64]

_STEPS_PER_PX = 20
_SMOOTH_PX, _BACKGROUND_PX = 0.7, 6.0  # what is finer is noise, what is coarser is diffuse light
_ALIKE = 0.5  # correlation below which images are not taken for the same field: of two axons with few boutons it is 0.4
_ASSUMED_PIXEL_UM = 0.16


@dataclass(frozen=True, slots=True, kw_only=True)
class Matches:
    """Where each bouton of the first recording is in all of them.

    Attributes
    ----------
    row : (n_boutons, n_recordings) ndarray of int
        Row of the bouton in each recording's table; -1 where it was not found. The first column counts up.
    distance_px : (n_boutons, n_recordings) ndarray
        How far the two positions lie apart once the images lie on one another; NaN where there is none.
    shift_px : (n_recordings, 2) ndarray
        What lies at (y, x) in the first recording lies at (y, x) + shift in this one; NaN where pairs were given.
    likeness : (n_recordings,) ndarray
        Correlation of the two mean images where they overlap, 1 for the first; NaN where pairs were given.
    """

    row: NDArray[np.int64]
    distance_px: Floats
    shift_px: Floats
    likeness: Floats

    def unmatched(self, recording: int, n_boutons: int) -> NDArray[np.int64]:
        """Return the rows of a recording's table that are no bouton of the first."""
        return np.setdiff1d(np.arange(n_boutons), self.row[:, recording])


def match_boutons(recordings: Sequence[ComparedRecording], *, match_um: float) -> Matches:
    """Find the boutons of the first recording in the others.

    Parameters
    ----------
    recordings : sequence of ComparedRecording
        Two or more.
    match_um : float
        How far apart the two positions of one bouton may lie, µm.

    Returns
    -------
    Matches

    Raises
    ------
    InputError
        If the pixel sizes differ or the mean images do not show the same field.
    """
    first = recordings[0]
    n_boutons, n_recordings = len(first.bouton), len(recordings)
    row = np.full((n_boutons, n_recordings), -1, dtype=np.int64)
    distance, shift, likeness = np.full(row.shape, np.nan), np.zeros((n_recordings, 2)), np.ones(n_recordings)
    row[:, 0], distance[:, 0] = np.arange(n_boutons), 0.0
    reach_px = match_um / (first.pixel_size_um or _ASSUMED_PIXEL_UM)
    for k, other in enumerate(recordings[1:], start=1):
        _check_pixels(first, other)
        shift[k], likeness[k] = measure_shift(first.mean_image, other.mean_image)
        if not likeness[k] >= _ALIKE:
            raise InputError(
                f"The mean images of {first.name} and {other.name} do not match (correlation {likeness[k]:.2f}, but "
                f"{_ALIKE} is needed): compare recordings of one field, or give the pairs of boutons in a table."
            )
        row[:, k], distance[:, k] = _pair(first.position_px + shift[k], other.position_px, reach_px=reach_px)
    return Matches(row=row, distance_px=distance, shift_px=shift, likeness=likeness)


def measure_shift(reference: Floats, image: Floats) -> tuple[Floats, float]:
    """Find the shift of one mean image against another.

    Parameters
    ----------
    reference, image : (height, width) ndarray
        Mean images, counts; their sizes may differ.

    Returns
    -------
    shift_px : (2,) ndarray
        What lies at (y, x) in `reference` lies at (y, x) + shift in `image`.
    likeness : float
        Correlation of the two where they overlap, -1 to 1; 0 where there is nothing to compare.
    """
    from scipy.ndimage import shift as moved
    from skimage.registration import phase_cross_correlation

    size = tuple(np.maximum(reference.shape, image.shape))
    (one, inside_one), (other, inside_other) = (_structure(picture, size) for picture in (reference, image))
    if not (one.any() and other.any()):
        return np.zeros(2), 0.0
    back, *_ = phase_cross_correlation(  # type: ignore[no-untyped-call]
        one, other, upsample_factor=_STEPS_PER_PX, normalization=None
    )
    laid_on = moved(other, back, order=1)
    common = inside_one & (moved(inside_other.astype(np.float64), back, order=1) > 0.99)
    a, b = one[common], laid_on[common]
    spread = float(np.sqrt(np.sum((a - a.mean()) ** 2) * np.sum((b - b.mean()) ** 2))) if common.any() else 0.0
    likeness = float(np.sum((a - a.mean()) * (b - b.mean())) / spread) if spread > 0 else 0.0
    return -np.asarray(back, dtype=np.float64), likeness


def matches_from_ids(recordings: Sequence[ComparedRecording], ids: NDArray[np.int64]) -> Matches:
    """Take pairs that were made by eye.

    Parameters
    ----------
    recordings : sequence of ComparedRecording
        Two or more.
    ids : (n, n_recordings) ndarray of int
        A row a bouton: its id in each recording, 0 where it is not there. Boutons of the first recording that are left
        out are unmatched.

    Returns
    -------
    Matches

    Raises
    ------
    InputError
        If an id is not in its recording or comes twice.
    """
    n_boutons = len(recordings[0].bouton)
    row = np.full((n_boutons, len(recordings)), -1, dtype=np.int64)
    row[:, 0] = np.arange(n_boutons)
    row_of = [{int(bouton): at for at, bouton in enumerate(recording.bouton)} for recording in recordings]
    for k, recording in enumerate(recordings):
        given = ids[ids[:, k] > 0, k]
        unknown = [int(one) for one in given if int(one) not in row_of[k]]
        if unknown:
            raise InputError(f"{recording.name} has no bouton {unknown[0]}; its ids are in {recording.source}.")
        if len(np.unique(given)) < len(given):
            twice = next(int(one) for one in given if np.sum(given == one) > 1)
            raise InputError(f"Bouton {twice} of {recording.name} comes twice in the table of pairs.")
    for pair in ids[ids[:, 0] > 0]:
        row[row_of[0][int(pair[0])], 1:] = [
            -1 if one <= 0 else row_of[k][int(one)] for k, one in enumerate(pair[1:], start=1)
        ]
    unknown_px = np.full(row.shape, np.nan)
    return Matches(
        row=row,
        distance_px=unknown_px,
        shift_px=np.full((len(recordings), 2), np.nan),
        likeness=np.full(len(recordings), np.nan),
    )


def _check_pixels(first: ComparedRecording, other: ComparedRecording) -> None:
    one, two = first.pixel_size_um, other.pixel_size_um
    if one and two and abs(one / two - 1.0) > 0.01:
        raise InputError(
            f"A pixel is {one:g} µm in {first.name} but {two:g} µm in {other.name}: their images cannot be laid on one "
            "another; correct the pixel size, or give the pairs of boutons in a table."
        )


def _structure(picture: Floats, size: tuple[int, ...]) -> tuple[Floats, NDArray[np.bool_]]:
    """Keep what is as large as boutons and axons; tell which part of the common frame the picture covers."""
    from scipy.ndimage import gaussian_filter

    known = np.isfinite(picture)
    filled = np.where(known, picture, np.median(picture[known]) if known.any() else 0.0)
    fine = gaussian_filter(filled, _SMOOTH_PX) - gaussian_filter(filled, _BACKGROUND_PX)
    frame, inside = np.zeros(size), np.zeros(size, dtype=np.bool_)
    frame[: picture.shape[0], : picture.shape[1]] = np.where(known, fine, 0.0)
    inside[: picture.shape[0], : picture.shape[1]] = known
    return frame, inside


def _pair(expected: Floats, found: Floats, *, reach_px: float) -> tuple[NDArray[np.int64], Floats]:
    """Pair each expected position with at most one that was found."""
    from scipy.optimize import linear_sum_assignment
    from scipy.spatial.distance import cdist

    row, distance = np.full(len(expected), -1, dtype=np.int64), np.full(len(expected), np.nan)
    if not len(expected) or not len(found):
        return row, distance
    apart = cdist(expected, found)
    # Whatever is too far costs the same: a far pair must not pull a near one apart.
    one, other = linear_sum_assignment(np.minimum(apart, reach_px) ** 2)
    near = apart[one, other] <= reach_px
    row[one[near]] = other[near]
    distance[one[near]] = apart[one, other][near]
    return row, distance
