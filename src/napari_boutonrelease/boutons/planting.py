"""How often boutons of known release probability are found in a recording: simulated ones are planted in its noise.

The projection of a movie on the response shape is linear, and so is the matched filter: responses that are planted in
the movie appear in the standardised responses as what the filter makes of their spot, times their heights. So boutons
are planted there, at places that keep their own noise, one at a time.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from .evidence import box_half_px, matched_filter, mixture_evidence
from .quiet_places import NEAR
from .spots import PROFILE_REACH_SIGMA, Patch, gaussian_patch, window

if TYPE_CHECKING:
    from numpy.typing import ArrayLike, NDArray

    from .quiet_places import QuietPlaces

_AT_ONCE = 4_000_000  # values of standardised responses


@dataclass(frozen=True, slots=True, kw_only=True)
class PlantedBoutons:
    """What is planted.

    Attributes
    ----------
    n_sites : (n,) ndarray of int
        Release sites.
    q : (n,) ndarray
        Mean response to one vesicle (dF/F).
    f0_counts : (n,) ndarray
        Brightness at rest at the peak of a bouton's image (counts).
    q_cv : float
        Variation of a vesicle's size (gamma distributed).
    pulse_ratio : (n_pulses,) ndarray
        Release probability of each pulse over that of the first.
    brightness : (n_evoked,) ndarray
        F0 at each map over its mean: bleaching.
    shown : callable
        What the reporter shows of a linear dF/F.
    gain : float
        What the projection on the maps' time course makes of a response of 1.
    spot_sigma_px : float
        Gaussian sigma of a bouton's image (px).
    variance_per_count : float
        Noise variance of one frame's pixel that a count of light adds (counts).
    light_share : float
        Light of a response that a map's noise sees, over its peak.
    spot_share : float
        Share of the boutons that the mean image shows as a spot.
    """

    n_sites: NDArray[np.int64]
    q: NDArray[np.float64]
    f0_counts: NDArray[np.float64]
    q_cv: float
    pulse_ratio: NDArray[np.float64]
    brightness: NDArray[np.float64]
    shown: Callable[[NDArray[np.float64]], NDArray[np.float64]]
    gain: float
    spot_sigma_px: float
    variance_per_count: float
    light_share: float
    spot_share: float


def plant_boutons(
    places: QuietPlaces,
    boutons: PlantedBoutons,
    *,
    p_release: ArrayLike,
    n_planted: int,
    rng: np.random.Generator,
) -> NDArray[np.int64]:
    """Count how many planted boutons exceed the cut that the detection used.

    A bouton takes brightness, vesicle and number of sites from one of `boutons`, and a place from `places`. Its light
    at rest adds photon noise, unless the place is a spot that has it already; so does the light of its responses. As in
    the detection, both the maximum of the evidence map and the evidence of a spot fitted there must exceed the cut.
    Neighbours are not separated: the count is for boutons that stand alone.

    Parameters
    ----------
    places : QuietPlaces
        Where, with the recording's own noise; at least one.
    boutons : PlantedBoutons
        What; at least one.
    p_release : (n_p,) array_like
        Probabilities that pulse 1 releases at least one vesicle.
    n_planted : int
        Boutons planted at each of them.
    rng : Generator

    Returns
    -------
    (n_p,) ndarray of int
        How many were found.
    """
    n_places = len(places.y_px)
    at = np.concatenate([rng.permutation(n_places) for _ in range(-(-n_planted // n_places))])[:n_planted]
    kind = rng.integers(len(boutons.q), size=n_planted)
    needs_less = rng.random(n_planted) < boutons.spot_share
    needed = np.where(needs_less, min(places.cut_at_shape, places.cut), places.cut) + places.by_itself[at]
    seen = [
        _seen(places, boutons, place=int(place), f0=float(boutons.f0_counts[one]), rng=rng)
        for place, one in zip(at, kind, strict=True)
    ]
    steps, noise = np.array([one[0] for one in seen]), np.array([one[1] for one in seen])
    found = np.zeros(np.size(p_release), dtype=np.int64)
    group = max(1, _AT_ONCE // (steps.shape[1] * places.z.shape[2]))
    for index, p in enumerate(np.ravel(p_release)):
        for first in range(0, n_planted, group):
            some = slice(first, first + group)
            heights = _heights(places, boutons, kind=kind[some], p_release=float(p), rng=rng)
            shot = np.sqrt(noise[some, None] * np.maximum(heights, 0.0)) * rng.standard_normal(heights.shape)
            planted = (heights / places.evoked_factor)[:, None, :] * steps[some, :, None] + shot[:, None, :]
            own = np.concatenate([places.z[at[some]], places.fitted[at[some], None]], axis=1)
            z = own + planted.astype(np.float32)
            evidence = mixture_evidence(np.ascontiguousarray(z.reshape(-1, z.shape[2]).T)).reshape(z.shape[:2])
            at_last = np.minimum(evidence[:, :-1].max(axis=1), evidence[:, -1])
            found[index] += int(np.count_nonzero(at_last > needed[some]))
    return found


def _heights(
    places: QuietPlaces,
    boutons: PlantedBoutons,
    *,
    kind: NDArray[np.intp],
    p_release: float,
    rng: np.random.Generator,
) -> NDArray[np.float64]:
    """Height of every response in the maps (counts): (n_planted, n_evoked)."""
    of_pulse = np.clip(p_release * boutons.pulse_ratio, 0.0, 1.0)[places.evoked_pulse]
    sites = boutons.n_sites[kind][:, None]
    with np.errstate(divide="ignore"):
        p_site = -np.expm1(np.log1p(-of_pulse)[None, :] / sites)
    vesicles = rng.binomial(sites, p_site)
    spread = max(boutons.q_cv, 1e-3) ** 2
    sizes = np.where(vesicles > 0, rng.standard_gamma(np.maximum(vesicles, 1) / spread) * spread, 0.0)
    dff = boutons.shown(boutons.q[kind][:, None] * sizes)
    return np.asarray(boutons.gain * dff * boutons.f0_counts[kind][:, None] * boutons.brightness)


def _seen(
    places: QuietPlaces, boutons: PlantedBoutons, *, place: int, f0: float, rng: np.random.Generator
) -> tuple[NDArray[np.float64], float]:
    """Standardised response to a spot of height 1, and the variance that a count of its light adds to it.

    The response is (n_near + 1,): in the map around the place, and where a spot is fitted.
    """
    y, x = int(places.y_px[place]), int(places.x_px[place])
    height, width = places.scale.shape
    reach = PROFILE_REACH_SIGMA * (boutons.spot_sigma_px + places.spot_sigma_px) + box_half_px(places.spot_sigma_px)
    y0, y1, x0, x1 = window(y, x, radius_px=reach, shape=(height, width))
    wide = (slice(y0, y1), slice(x0, x1))
    offset = rng.uniform(-0.5, 0.5, 2)
    whole = Patch(y0=y0, x0=x0, values=np.zeros((y1 - y0, x1 - x0)))
    spot = gaussian_patch(y + offset[0], x + offset[1], sigma_px=boutons.spot_sigma_px, shape=(height, width))
    image = spot.onto(whole)
    light = 0.0 if places.at_spot[place] else f0
    variance = places.pixel_variance[wide] + boutons.variance_per_count * light * image
    inverse = np.where(np.isfinite(variance), 1.0 / variance, 0.0)
    filtered = matched_filter(
        image[None].astype(np.float32), inverse_variance=inverse, spot_sigma_px=places.spot_sigma_px
    )[0]
    rows = np.clip([y + dy for dy, _ in NEAR], 0, height - 1)
    columns = np.clip([x + dx for _, dx in NEAR], 0, width - 1)
    scale = places.scale[rows, columns]
    seen = filtered[rows - y0, columns - x0] * scale
    energy = float(np.sum(image**2 * inverse))
    dark = np.where(np.isfinite(variance), 1.0 / places.pixel_variance[wide], 0.0)
    dimmed = np.sqrt(energy / max(float(np.sum(image**2 * dark)), 1e-30))
    fitted = float(places.fitted_per_count[place]) * dimmed
    noise = float(np.sum(image**3 * inverse**2)) / energy if energy > 0 else 0.0
    per_count = boutons.variance_per_count * boutons.light_share
    return np.append(seen, fitted), per_count * noise * float(scale[len(NEAR) // 2]) ** 2
