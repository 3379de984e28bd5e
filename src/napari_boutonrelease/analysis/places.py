"""Boutons with their footprints, ready to be read."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import numpy as np

from ..boutons import Footprints, build_footprints

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from ..boutons import QuietPlaces
    from .recording_step import Recording
    from .settings import Settings
    from .sites import Sites

_BACKGROUND_IN_SIGMAS = 8.0


@dataclass(frozen=True, slots=True, kw_only=True)
class Places:
    """The boutons of one recording.

    Attributes
    ----------
    bouton : (n,) ndarray of int
        Ids, ascending.
    found_by : tuple of str
        `responses`, `shape`, `both`, `hand` or `file`.
    axon_um, axon_offset_um : (n,) ndarray
        Distance along the axon's path and from it; NaN without a path or where the pixel size is unknown.
    footprints : Footprints
        Weights of each, in the same order; the label image holds the ids.
    evidence : (y, x) ndarray
        Evidence of release at every pixel (nats).
    evidence_cut : float
        Evidence that a maximum needed; NaN where positions were given.
    expected_false : float
        False ones expected among those found by responses; NaN where positions were given.
    spot_sigma_px : float
        Gaussian sigma of a bouton's image (px).
    quiet : QuietPlaces or None
        Places without a bouton found by its responses; None where there was no evidence to judge.
    """

    bouton: NDArray[np.int64]
    found_by: tuple[str, ...]
    axon_um: NDArray[np.float64]
    axon_offset_um: NDArray[np.float64]
    footprints: Footprints
    evidence: NDArray[np.float64]
    evidence_cut: float
    expected_false: float
    spot_sigma_px: float
    quiet: QuietPlaces | None


def lay_footprints(sites: Sites, recording: Recording, *, settings: Settings) -> Places:
    """Compute the extraction weights of every bouton."""
    footprints = build_footprints(
        y_px=sites.y_px,
        x_px=sites.x_px,
        optics=recording.optics,
        spot_sigma_px=sites.spot_sigma_px,
        background_radius_px=max(
            settings.responses.background_um / recording.pixel_um, _BACKGROUND_IN_SIGMAS * sites.spot_sigma_px
        ),
        mode=settings.detection.footprint,
        response_image=None,
        response_variance=None,
        drawn={i: pixels for i, pixels in enumerate(sites.drawn) if pixels is not None},
    )
    ids = np.concatenate([[0], sites.bouton]).astype(np.int32)
    scale = recording.timing.pixel_size_um or np.nan
    return Places(
        bouton=sites.bouton.astype(np.int64),
        found_by=sites.found_by,
        axon_um=sites.axon_px * scale,
        axon_offset_um=sites.axon_offset_px * scale,
        footprints=replace(footprints, label=ids[footprints.label]),
        evidence=sites.evidence,
        evidence_cut=sites.evidence_cut,
        expected_false=sites.expected_false,
        spot_sigma_px=sites.spot_sigma_px,
        quiet=sites.quiet,
    )


def take_footprints(footprints: Footprints, index: NDArray[np.intp]) -> Footprints:
    """Keep some of the boutons; the label image stays whole."""
    return replace(
        footprints,
        y_px=footprints.y_px[index],
        x_px=footprints.x_px[index],
        y0=footprints.y0[index],
        x0=footprints.x0[index],
        weights=tuple(footprints.weights[i] for i in index),
        naive_weights=tuple(footprints.naive_weights[i] for i in index),
        profiles=tuple(footprints.profiles[i] for i in index),
        footprint_px=footprints.footprint_px[index],
        shaft_counts=footprints.shaft_counts[index],
        flags=tuple(footprints.flags[i] for i in index),
    )
