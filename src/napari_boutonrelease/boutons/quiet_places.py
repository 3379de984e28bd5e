"""Places of a recording where no bouton was found by its responses, with what detection saw of them."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from .evidence import MAX_NATS_PER_TRIAL, mixture_evidence

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from ..response_shape import ResponseShape
    from .deflation import SpotModel
    from .evidence import MatchedMaps
    from .maps import ResponseStack

N_PLACES = 240
NEAR = tuple((dy, dx) for dy in (-1, 0, 1) for dx in (-1, 0, 1))
"""Pixels around a place in which the maximum of the evidence of a bouton there may lie."""

_NULL_CHANCE = 4.0  # nats that noise reaches at one of many places
_REACHES_SPACINGS = (3.0, 1.5)  # a found bouton hides or feigns what is nearer; less is kept free where that is all
_ENOUGH = 50
_BRIGHT_SHARE = 1 / 3  # of the places that are free: the axon and what is bright beside it
_SPOT_SHARE = 0.5  # of the places chosen, at most, are spots of the mean image


@dataclass(frozen=True, slots=True, kw_only=True)
class QuietPlaces:
    """Places without a bouton that was found by its responses, and the noise that detection saw there.

    Attributes
    ----------
    y_px, x_px : (n,) ndarray of int
        Pixels, on the bright parts of the image.
    at_spot : (n,) ndarray of bool
        Whether the mean image shows a spot there, which holds a bouton's light already.
    z : (n, n_near, n_evoked) ndarray of float32
        Standardised response of the place and the pixels around it (`NEAR`), found boutons taken out.
    fitted : (n, n_evoked) ndarray of float32
        Standardised height of a spot fitted there, as detection fits a candidate.
    fitted_per_count : (n,) ndarray
        What a spot of height 1 (counts) adds to it, in a map with noise factor 1.
    by_itself : (n,) ndarray
        Evidence that a place shows without any stimulus, which a bouton there would have to exceed (nats).
    pixel_variance, scale : (y, x) ndarray
        As of `MatchedMaps`.
    evoked_trial, evoked_pulse : (n_evoked,) ndarray of int
        Trial and pulse of each map, from 0.
    evoked_factor : (n_evoked,) ndarray
        SD of a map's pixel in units of the SD of one frame's pixel.
    shape : ResponseShape
        Time course the maps were projected on.
    spot_sigma_px : float
        Gaussian sigma of the matched filter (px).
    cut, cut_at_shape : float
        Evidence that a bouton needed anywhere, and where the mean image shows a spot (nats).
    """

    y_px: NDArray[np.intp]
    x_px: NDArray[np.intp]
    at_spot: NDArray[np.bool_]
    z: NDArray[np.float32]
    fitted: NDArray[np.float32]
    fitted_per_count: NDArray[np.float64]
    by_itself: NDArray[np.float64]
    pixel_variance: NDArray[np.float32]
    scale: NDArray[np.float32]
    evoked_trial: NDArray[np.intp]
    evoked_pulse: NDArray[np.intp]
    evoked_factor: NDArray[np.float64]
    shape: ResponseShape
    spot_sigma_px: float
    cut: float
    cut_at_shape: float


def evidence_by_itself(null_evidence: NDArray[np.floating], *, evoked_per_null: float) -> NDArray[np.float64]:
    """Return the evidence that places would show without any stimulus, with three SD of its chance on top.

    Spontaneous releases and whatever flickers or wobbles are as frequent at the pseudo-stimuli. A release counts up to
    `MAX_NATS_PER_TRIAL`, and numbers of releases scatter as Poisson numbers do, here and there.
    """
    expected = evoked_per_null * np.maximum(null_evidence - _NULL_CHANCE, 0.0)
    return np.asarray(expected + 3 * np.sqrt(2 * MAX_NATS_PER_TRIAL * expected))


def choose_quiet_places(
    stack: ResponseStack,
    matched: MatchedMaps,
    *,
    model: SpotModel,
    spots: NDArray[np.bool_],
    blind: NDArray[np.bool_],
    spacing_px: float,
    spot_sigma_px: float,
    cut: float,
    cut_at_shape: float,
    rng: np.random.Generator,
) -> QuietPlaces:
    """Choose places away from found boutons, spots of the mean image and the axon's bright pixels first.

    Parameters
    ----------
    stack : ResponseStack
        Response and null maps.
    matched : MatchedMaps
        The same through the matched filter, found boutons taken out of the evoked ones.
    model : SpotModel
        Boutons found by their responses.
    spots : (y, x) ndarray of bool
        Middles of spots of the mean image.
    blind : (y, x) ndarray of bool
        Pixels where no bouton is looked for.
    spacing_px : float
        Smallest distance of two boutons (px).
    spot_sigma_px : float
        Gaussian sigma of the matched filter (px).
    cut, cut_at_shape : float
        Evidence that a bouton needed (nats).
    rng : Generator
        Draws places.

    Returns
    -------
    QuietPlaces
        Up to `N_PLACES` of them; none where boutons leave no room.
    """
    height, width = blind.shape
    free = _free(blind, model.y_px, model.x_px, spacing_px=spacing_px)
    on_spot = np.flatnonzero(spots & free)
    on_spot = rng.permutation(on_spot)[: int(_SPOT_SHARE * N_PLACES)]
    others = np.flatnonzero(free & ~spots)
    brightness = stack.mean_image.ravel()[others]
    bright = others[np.argsort(-brightness, kind="stable")][: max(int(_BRIGHT_SHARE * len(others)), N_PLACES)]
    chosen = np.concatenate([on_spot, rng.permutation(bright)[: N_PLACES - len(on_spot)]])
    y, x = np.divmod(chosen, width)
    around = [(np.clip(y + dy, 0, height - 1), np.clip(x + dx, 0, width - 1)) for dy, dx in NEAR]
    z = np.stack([matched.evoked[:, rows, columns].T for rows, columns in around], axis=1)
    null_evidence = (
        mixture_evidence(matched.null[:, y, x])
        if stack.null_from == "gaps" and len(matched.null)
        else np.zeros(len(y), dtype=np.float32)
    )
    fitted, fitted_per_count = model.read_one_more(y, x)
    return QuietPlaces(
        y_px=y.astype(np.intp),
        x_px=x.astype(np.intp),
        at_spot=np.arange(len(chosen)) < len(on_spot),
        z=z,
        fitted=fitted.astype(np.float32),
        fitted_per_count=fitted_per_count,
        by_itself=evidence_by_itself(null_evidence, evoked_per_null=len(matched.evoked) / max(len(matched.null), 1)),
        pixel_variance=matched.pixel_variance.astype(np.float32),
        scale=matched.scale.astype(np.float32),
        evoked_trial=stack.evoked_trial,
        evoked_pulse=stack.evoked_pulse,
        evoked_factor=stack.evoked_factor,
        shape=stack.shape,
        spot_sigma_px=spot_sigma_px,
        cut=cut,
        cut_at_shape=cut_at_shape,
    )


def _free(
    blind: NDArray[np.bool_], y_px: NDArray[np.float64], x_px: NDArray[np.float64], *, spacing_px: float
) -> NDArray[np.bool_]:
    """Pixels that found boutons do not reach, and whose neighbours can be seen."""
    from scipy.ndimage import binary_erosion

    seen = binary_erosion(~blind, np.ones((3, 3), dtype=np.bool_), border_value=0)
    rows, columns = np.mgrid[: blind.shape[0], : blind.shape[1]]
    distance = np.full(blind.shape, np.inf)
    for y, x in zip(y_px, x_px, strict=True):
        np.minimum(distance, np.hypot(rows - y, columns - x), out=distance)
    free = seen
    for reach in _REACHES_SPACINGS:
        free = seen & (distance > reach * spacing_px)
        if np.count_nonzero(free) >= _ENOUGH:
            break
    return np.asarray(free)
