"""Changes to single boutons by hand, named by their ids as a person sees them."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import TYPE_CHECKING

import numpy as np

from ..errors import InputError
from .hand_edits import mean_place

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from .hand_edits import HandEdits, Place
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
    sites, edits = _now(model)
    _check_inside(sites, place)
    other = _bouton_at(model, sites, place, besides=())
    if other is not None:
        raise InputError(f"Bouton {other} is here already: move, redraw or delete it instead.")
    model.edit(edits.add(*place, bouton=sites.next_bouton))
    return sites.next_bouton


def move_boutons(model: AnalysisModel, places: Mapping[int, Place]) -> None:
    """Move boutons, id to new (y, x), as one change.

    Raises
    ------
    InputError
        If a new place is outside the image or on another bouton, or there is no such bouton.
    """
    sites, edits = _now(model)
    for bouton, place in places.items():
        _check_inside(sites, place)
        other = _bouton_at(model, sites, place, besides=tuple(places))
        if other is not None:
            raise InputError(f"Bouton {other} is here already: to make one of the two, merge them.")
        edits = edits.move(_place(sites, bouton), place, bouton=bouton)
    model.edit(edits)


def delete_boutons(model: AnalysisModel, boutons: Sequence[int]) -> None:
    """Take boutons away, as one change.

    Raises
    ------
    InputError
        If there is no such bouton.
    """
    sites, edits = _now(model)
    for bouton in boutons:
        edits = edits.delete(_place(sites, bouton))
    model.edit(edits)


def merge_boutons(model: AnalysisModel, boutons: Sequence[int]) -> int:
    """Replace boutons by one between them, which keeps the first one's id; return it.

    Raises
    ------
    InputError
        If fewer than two are given, there is no such bouton, or another one lies where the merged one would be.
    """
    first, *others = sorted(set(boutons)) or [0]
    if not others:
        raise InputError(f"Merging takes at least two boutons (given {len(boutons)}): select those that are one.")
    sites, edits = _now(model)
    places = tuple(_place(sites, bouton) for bouton in (first, *others))
    other = _bouton_at(model, sites, mean_place(places), besides=(first, *others))
    if other is not None:
        listed = f"{', '.join(map(str, (first, *others[:-1])))} and {others[-1]}"
        raise InputError(
            f"Boutons {listed} would merge on top of bouton {other}: select it too, or move it away first."
        )
    model.edit(edits.merge(places, bouton=first))
    return first


def redraw_bouton(model: AnalysisModel, bouton: int, pixels: NDArray[np.integer]) -> int:
    """Give a bouton a drawn footprint, (k, 2) pixels (y, x); return its id.

    Raises
    ------
    InputError
        If no pixel is given, there is no such bouton, or another one lies at the footprint's centre.
    """
    if not len(pixels):
        raise InputError(f"Bouton {bouton} has no pixel left: paint at least one, or delete the bouton.")
    sites, edits = _now(model)
    drawn = tuple((int(y), int(x)) for y, x in pixels)
    place = _place(sites, bouton)
    other = _bouton_at(model, sites, mean_place(drawn), besides=(bouton,))
    if other is not None:
        raise InputError(
            f"The footprint of bouton {bouton} would be centred on bouton {other}: paint it beside that one."
        )
    model.edit(edits.redraw(place, drawn, bouton=bouton))
    return bouton


def _now(model: AnalysisModel) -> tuple[Sites, HandEdits]:
    """Where boutons are now, and the edits that led there, with the ids of all that were placed."""
    sites = model.sites()
    if sites is None:
        raise InputError("Boutons were not looked for yet: find them first, then change them by hand.")
    places = zip(sites.y_px.tolist(), sites.x_px.tolist(), strict=True)
    return sites, model.edits.numbered(dict(zip(places, sites.bouton.tolist(), strict=True)))


def _place(sites: Sites, bouton: int) -> Place:
    at = np.flatnonzero(sites.bouton == bouton)
    if not at.size:
        raise InputError(f"There is no bouton {bouton}; ids are {', '.join(map(str, sites.bouton)) or 'none'}.")
    return float(sites.y_px[at[0]]), float(sites.x_px[at[0]])


def _check_inside(sites: Sites, place: Place) -> None:
    height, width = sites.evidence.shape
    y, x = place
    if not (-0.5 <= y <= height - 0.5 and -0.5 <= x <= width - 0.5):
        raise InputError(f"The place y = {y:.1f}, x = {x:.1f} px lies outside the image of {height} x {width} pixels.")


def _bouton_at(model: AnalysisModel, sites: Sites, place: Place, *, besides: Sequence[int]) -> int | None:
    """Id of the bouton that lies too near a place for another one, besides some; None where there is room."""
    others = ~np.isin(sites.bouton, besides)
    distance = np.where(others, np.hypot(sites.y_px - place[0], sites.x_px - place[1]), np.inf)
    spacing_px = model.settings.detection.spacing_um / _pixel_um(model)
    near = distance.size > 0 and distance.min() < _APART * spacing_px
    return int(sites.bouton[np.argmin(distance)]) if near else None


def _pixel_um(model: AnalysisModel) -> float:
    recording = None if model.pipeline is None else model.pipeline.recording
    return 1.0 if recording is None else recording.pixel_um
