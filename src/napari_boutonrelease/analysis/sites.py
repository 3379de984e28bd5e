"""Where boutons are before their footprints are laid: found in the recording, given by a file, corrected by hand."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import numpy as np

from ..boutons import (
    detect_boutons,
    detect_by_shape,
    distance_along,
    drawn_pixels,
    estimate_spot_sigma,
    read_axon,
    read_positions,
)

if TYPE_CHECKING:
    from pathlib import Path

    from numpy.typing import NDArray

    from ..boutons import Maxima, QuietPlaces, ResponseStack
    from .hand_edits import HandEdits, Place
    from .recording_step import Recording
    from .settings import DetectionSettings

_FWHM_TO_SIGMA = 1.0 / 2.354820
_EDIT_REACH = 0.5  # of the spacing: an edit this near a found bouton speaks of it


@dataclass(frozen=True, slots=True, kw_only=True)
class Sites:
    """Boutons of one recording, in order of their ids.

    Attributes
    ----------
    bouton : (n,) ndarray of int
        Ids: as in a given file, else from 1 along the axon, or top to bottom; those added by hand follow.
    y_px, x_px : (n,) ndarray
        Centres in reference coordinates (px).
    found_by : tuple of str
        `responses`, `shape`, `both`, `hand` or `file`.
    axon_px, axon_offset_px : (n,) ndarray
        Distance along the axon's path and from it (px); NaN without a path.
    drawn : tuple of ((k, 2) ndarray of int or None)
        Pixels of drawn footprints.
    next_bouton : int
        Id for the next one that is added by hand: no bouton has or had it.
    spot_sigma_px : float
        Gaussian sigma of a bouton's image (px).
    evidence : (y, x) ndarray
        Evidence of release at every pixel (nats); 0 where boutons were given.
    evidence_cut, expected_false : float
        Evidence that a maximum needed, and false ones expected among those found by responses; NaN where given.
    maxima : Maxima or None
        Maxima of the evidence, for a preview of other cuts; None where there was no evidence to judge.
    quiet : QuietPlaces or None
        Places without a bouton found by its responses; None where there was no evidence to judge.
    """

    bouton: NDArray[np.int64]
    y_px: NDArray[np.float64]
    x_px: NDArray[np.float64]
    found_by: tuple[str, ...]
    axon_px: NDArray[np.float64]
    axon_offset_px: NDArray[np.float64]
    drawn: tuple[NDArray[np.intp] | None, ...]
    next_bouton: int
    spot_sigma_px: float
    evidence: NDArray[np.float64]
    evidence_cut: float
    expected_false: float
    maxima: Maxima | None
    quiet: QuietPlaces | None = None

    def take(self, order: NDArray[np.intp] | NDArray[np.bool_]) -> Sites:
        """Keep or reorder boutons."""
        index = np.arange(len(self.bouton))[order]
        return replace(
            self,
            bouton=self.bouton[index],
            y_px=self.y_px[index],
            x_px=self.x_px[index],
            found_by=tuple(self.found_by[i] for i in index),
            axon_px=self.axon_px[index],
            axon_offset_px=self.axon_offset_px[index],
            drawn=tuple(self.drawn[i] for i in index),
        )


def spot_sigma_px(settings: DetectionSettings, *, pixel_um: float) -> float:
    """Return the Gaussian sigma of a bouton's image that the settings expect, in px."""
    return settings.bouton_um * _FWHM_TO_SIGMA / pixel_um


def find_sites(
    recording: Recording, stack: ResponseStack | None, *, settings: DetectionSettings, rng: np.random.Generator
) -> Sites:
    """Find boutons by response and by shape; by shape alone where there is no stack of responses."""
    sigma = spot_sigma_px(settings, pixel_um=recording.pixel_um)
    spacing = settings.spacing_um / recording.pixel_um
    # A pixel that clips bright responses still tells where they are, though not how large.
    optics = recording.optics
    exclude = ~(optics.always_inside() & ~optics.on_sample(optics.dead))
    if stack is None:
        found = detect_by_shape(optics.mean_image, spot_sigma_px=sigma, spacing_px=spacing, exclude=exclude)
    else:
        found = detect_boutons(
            stack,
            spot_sigma_px=sigma,
            spacing_px=spacing,
            false_discovery=settings.false_discovery,
            shape_candidates=settings.shape_candidates,
            exclude=exclude,
            rng=rng,
            progress=None,
        )
    if found.spot_sigma_px == sigma:  # no response was clear enough to measure it
        sigma = estimate_spot_sigma(
            optics.mean_image, y_px=found.y_px, x_px=found.x_px, start_sigma_px=sigma, usable=optics.usable()
        )
    else:
        sigma = found.spot_sigma_px
    n = len(found.y_px)
    return Sites(
        bouton=np.arange(1, n + 1),
        y_px=found.y_px,
        x_px=found.x_px,
        found_by=found.found_by,
        axon_px=np.full(n, np.nan),
        axon_offset_px=np.full(n, np.nan),
        drawn=(None,) * n,
        next_bouton=n + 1,
        spot_sigma_px=sigma,
        evidence=found.evidence.astype(np.float64),
        evidence_cut=found.cut,
        expected_false=found.expected_false,
        maxima=found.maxima,
        quiet=found.quiet,
    )


def given_sites(path: str | Path, recording: Recording, *, settings: DetectionSettings) -> Sites:
    """Take boutons from a table of positions or a label image."""
    optics = recording.optics
    height, width = optics.mean_image.shape
    given = read_positions(path, pixel_size_um=recording.timing.pixel_size_um, image_shape=(height, width))
    sigma = spot_sigma_px(settings, pixel_um=recording.pixel_um)
    drawn: tuple[NDArray[np.intp] | None, ...] = (None,) * len(given.bouton)
    if given.label is not None:
        pixels = drawn_pixels(given.label)
        drawn = tuple(pixels[int(name)] for name in given.bouton)
    else:
        sigma = estimate_spot_sigma(
            optics.mean_image, y_px=given.y_px, x_px=given.x_px, start_sigma_px=sigma, usable=optics.usable()
        )
    n = len(given.bouton)
    sites = Sites(
        bouton=given.bouton,
        y_px=given.y_px,
        x_px=given.x_px,
        found_by=("file",) * n,
        axon_px=np.full(n, np.nan),
        axon_offset_px=np.full(n, np.nan),
        drawn=drawn,
        next_bouton=int(given.bouton.max(initial=0)) + 1,
        spot_sigma_px=sigma,
        evidence=np.zeros((height, width)),
        evidence_cut=float("nan"),
        expected_false=float("nan"),
        maxima=None,
    )
    return sites.take(np.argsort(given.bouton, kind="stable"))


def put_in_order(sites: Sites, *, axon: NDArray[np.float64] | None) -> Sites:
    """Give distances along the axon; number found boutons along it, or top to bottom without it."""
    if axon is not None:
        along, aside = distance_along(axon, y_px=sites.y_px, x_px=sites.x_px)
        sites = replace(sites, axon_px=along, axon_offset_px=aside)
    if "file" in sites.found_by:
        return sites
    order = np.lexsort((sites.x_px, sites.y_px)) if axon is None else np.argsort(sites.axon_px, kind="stable")
    return replace(sites.take(order), bouton=np.arange(1, len(order) + 1))


def read_axon_px(path: str | Path | None, *, recording: Recording) -> NDArray[np.float64] | None:
    """Read the axon's path, (k, 2) in px; None where there is none."""
    return None if path is None else read_axon(path, pixel_size_um=recording.timing.pixel_size_um)


def correct_by_hand(sites: Sites, edits: HandEdits, *, axon: NDArray[np.float64] | None, spacing_px: float) -> Sites:
    """Apply edits by hand. Ids stay, whatever else is added, moved, redrawn or deleted.

    A bouton that was moved or redrawn has the id of the found one that it was. One that was added has its own, which
    those found pass over: they are numbered in order with what is left.
    """
    if not (edits.placed or edits.cleared or edits.given):
        return sites
    reach_px = _EDIT_REACH * spacing_px
    came_from = [_nearest(sites, one.origin, reach_px=reach_px) for one in edits.placed]
    own = {one.bouton or 0 for one, found in zip(edits.placed, came_from, strict=True) if found is None}
    sites = _number_without(sites, own | set(edits.given))
    kept = sites.take(edits.spared(sites.y_px, sites.x_px, reach_px=reach_px))
    ids = _ids_by_hand(sites, edits, came_from, taken=set(kept.bouton.tolist()))
    ys = np.array([one.y_px for one in edits.placed])
    xs = np.array([one.x_px for one in edits.placed])
    along, aside = np.full(len(ys), np.nan), np.full(len(ys), np.nan)
    if axon is not None and len(ys):
        along, aside = distance_along(axon, y_px=ys, x_px=xs)
    corrected = replace(
        kept,
        bouton=np.concatenate([kept.bouton, np.array(ids, dtype=np.int64)]),
        y_px=np.concatenate([kept.y_px, ys]),
        x_px=np.concatenate([kept.x_px, xs]),
        found_by=(*kept.found_by, *("hand",) * len(ys)),
        axon_px=np.concatenate([kept.axon_px, along]),
        axon_offset_px=np.concatenate([kept.axon_offset_px, aside]),
        drawn=(*kept.drawn, *(_inside(one.pixels, sites.evidence.shape) for one in edits.placed)),
        next_bouton=max([*sites.bouton.tolist(), *ids, *edits.given], default=0) + 1,
    )
    return corrected.take(np.argsort(corrected.bouton, kind="stable"))


def _nearest(sites: Sites, place: Place | None, *, reach_px: float) -> int | None:
    """Index of the found bouton at a place; None where there is none."""
    if place is None or not len(sites.bouton):
        return None
    distance = np.hypot(sites.y_px - place[0], sites.x_px - place[1])
    nearest = int(np.argmin(distance))
    return nearest if distance[nearest] <= reach_px else None


def _number_without(sites: Sites, ids: set[int]) -> Sites:
    """Give found boutons ids in order, but none of these; those of a file keep theirs."""
    if "file" in sites.found_by:
        return sites
    free = np.setdiff1d(np.arange(1, len(sites.bouton) + len(ids) + 1), list(ids))
    return replace(sites, bouton=free[: len(sites.bouton)])


def _ids_by_hand(sites: Sites, edits: HandEdits, came_from: list[int | None], *, taken: set[int]) -> list[int]:
    """Id of each bouton placed by hand: of the found one that it was, else its own, else the next free one."""
    own = {one.bouton for one in edits.placed}
    following = int(sites.bouton.max(initial=0)) + 1
    ids: list[int] = []
    for one, found in zip(edits.placed, came_from, strict=True):
        name = one.bouton if found is None else int(sites.bouton[found])
        if name is None or name in taken:
            while following in taken | own:
                following += 1
            name = following
        taken = taken | {name}
        ids.append(name)
    return ids


def _inside(pixels: tuple[tuple[int, int], ...], shape: tuple[int, ...]) -> NDArray[np.intp] | None:
    """Pixels of a drawn footprint that lie in the image; None where there are none."""
    drawn = np.array(pixels, dtype=np.intp).reshape(-1, 2)
    drawn = drawn[np.all((drawn >= 0) & (drawn < np.array(shape)), axis=1)]
    return drawn if len(drawn) else None
