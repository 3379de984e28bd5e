"""Changes to single boutons by hand, named by their ids as a person sees them."""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING

import numpy as np

from ..errors import InputError

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from .hand_edits import Place
    from .model import AnalysisModel
    from .sites import Sites

_APART = 0.5  # of the spacing: nearer than that it would be one bouton


def add_bouton(model: AnalysisModel, place: Place) -> int:
    """Add a bouton and return its id.

    Raises
    ------
    InputError
        If boutons were not looked for yet, or the place is outside the image or on another bouton.
    """
    sites = _sites(model)
    _check_free(model, sites, place)
    model.edit(model.edits.add(*place))
    return _id_at(model, place)


def move_boutons(model: AnalysisModel, places: dict[int, Place]) -> None:
    """Move boutons, id to new (y, x), as one change.

    Raises
    ------
    InputError
        If a new place is outside the image or on another bouton, or there is no such bouton.
    """
    sites = _sites(model)
    edits = model.edits
    for bouton, place in places.items():
        _check_free(model, sites, place, moving=set(places))
        edits = edits.move(_place(sites, bouton), place)
    model.edit(edits)


def delete_boutons(model: AnalysisModel, boutons: Sequence[int]) -> None:
    """Take boutons away, as one change.

    Raises
    ------
    InputError
        If there is no such bouton.
    """
    sites = _sites(model)
    edits = model.edits
    for bouton in boutons:
        edits = edits.delete(_place(sites, bouton))
    model.edit(edits)


def merge_boutons(model: AnalysisModel, boutons: Sequence[int]) -> int:
    """Replace boutons by one between them, which keeps the first one's id; return it.

    Raises
    ------
    InputError
        If fewer than two are given, or there is no such bouton.
    """
    if len(boutons) < 2:
        raise InputError(f"Merging takes at least two boutons (given {len(boutons)}): select those that are one.")
    sites = _sites(model)
    edits = model.edits.merge(tuple(_place(sites, bouton) for bouton in sorted(boutons)))
    model.edit(edits)
    return _id_at(model, edits.placed[-1].place)


def redraw_bouton(model: AnalysisModel, bouton: int, pixels: NDArray[np.integer]) -> int:
    """Give a bouton a drawn footprint, (k, 2) pixels (y, x); return its id.

    Raises
    ------
    InputError
        If no pixel is given, or there is no such bouton.
    """
    if not len(pixels):
        raise InputError(f"Bouton {bouton} has no pixel left: paint at least one, or delete the bouton.")
    edits = model.edits.redraw(_place(_sites(model), bouton), tuple((int(y), int(x)) for y, x in pixels))
    model.edit(edits)
    return _id_at(model, edits.placed[-1].place)


def _sites(model: AnalysisModel) -> Sites:
    sites = model.sites()
    if sites is None:
        raise InputError("Boutons were not looked for yet: find them first, then change them by hand.")
    return sites


def _place(sites: Sites, bouton: int) -> Place:
    at = np.flatnonzero(sites.bouton == bouton)
    if not at.size:
        raise InputError(f"There is no bouton {bouton}; ids are {', '.join(map(str, sites.bouton)) or 'none'}.")
    return float(sites.y_px[at[0]]), float(sites.x_px[at[0]])


def _check_free(model: AnalysisModel, sites: Sites, place: Place, *, moving: set[int] | None = None) -> None:
    height, width = sites.evidence.shape
    y, x = place
    if not (-0.5 <= y <= height - 0.5 and -0.5 <= x <= width - 0.5):
        raise InputError(f"The place y = {y:.1f}, x = {x:.1f} px lies outside the image of {height} x {width} pixels.")
    spacing_px = model.settings.detection.spacing_um / _pixel_um(model)
    others = ~np.isin(sites.bouton, list(moving or ()))
    distance = np.where(others, np.hypot(sites.y_px - y, sites.x_px - x), np.inf)
    if distance.size and distance.min() < _APART * spacing_px:
        other = int(sites.bouton[np.argmin(distance)])
        raise InputError(f"Bouton {other} is here already: move, redraw or delete it instead.")


def _pixel_um(model: AnalysisModel) -> float:
    recording = None if model.pipeline is None else model.pipeline.recording
    return 1.0 if recording is None else recording.pixel_um


def _id_at(model: AnalysisModel, place: Place) -> int:
    sites: Sites = _sites(model)
    return int(sites.bouton[np.argmin(np.hypot(sites.y_px - place[0], sites.x_px - place[1]))])
