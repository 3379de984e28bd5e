"""What a person changed by hand: places added, moved, deleted or redrawn, and trials left out.

Edits name places, so that they hold when boutons are looked for again; with each placed bouton goes its id, so that it
stays the same whatever becomes of the others. Every change makes a new `HandEdits`; undo goes back to an older one.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

Place = tuple[float, float]


@dataclass(frozen=True, slots=True, kw_only=True)
class PlacedByHand:
    """A bouton that a person placed.

    Attributes
    ----------
    y_px, x_px : float
        Where.
    pixels : tuple of (int, int)
        Its footprint, where that was drawn; empty for a spot of the usual shape.
    origin : (float, float) or None
        Where the found bouton was that it was moved from or redrawn: it keeps that one's id.
    bouton : int or None
        Its own id, which counts where no found one is at `origin`; None for the next free one after those found.
    """

    y_px: float
    x_px: float
    pixels: tuple[tuple[int, int], ...] = ()
    origin: Place | None = None
    bouton: int | None = None

    @property
    def place(self) -> Place:
        """Where, as (y, x)."""
        return self.y_px, self.x_px


@dataclass(frozen=True, slots=True, kw_only=True)
class HandEdits:
    """All changes by hand, in a state that can be saved and compared.

    Attributes
    ----------
    placed : tuple of PlacedByHand
        Boutons added, moved to, or redrawn.
    cleared : tuple of (float, float)
        Places at which a found bouton does not count: deleted, or moved away from, or redrawn.
    excluded : tuple of (int, str)
        Trials left out, from 1, and why; in ascending order.
    given : tuple of int
        Ids that boutons added by hand have or had, ascending: no other bouton gets one of them. Undo keeps them, so
        they do not make two states differ.
    """

    placed: tuple[PlacedByHand, ...] = ()
    cleared: tuple[Place, ...] = ()
    excluded: tuple[tuple[int, str], ...] = ()
    given: tuple[int, ...] = field(default=(), compare=False)

    def add(
        self, y_px: float, x_px: float, pixels: tuple[tuple[int, int], ...] = (), *, bouton: int | None = None
    ) -> HandEdits:
        """Place a bouton, with a drawn footprint where `pixels` are given, and an id of its own where that is known."""
        added = self._place(PlacedByHand(y_px=y_px, x_px=x_px, pixels=pixels, bouton=bouton))
        return added if bouton is None else added._give((bouton,))

    def _place(self, one: PlacedByHand) -> HandEdits:
        return replace(self, placed=(*self.placed, one))

    def _give(self, ids: tuple[int, ...]) -> HandEdits:
        return replace(self, given=tuple(sorted({*self.given, *ids})))

    def _origin(self, place: Place) -> Place | None:
        return next((one.origin for one in self.placed if one.place == place), place)

    def delete(self, place: Place) -> HandEdits:
        """Take away the bouton at a place, found or placed."""
        kept = tuple(one for one in self.placed if one.place != place)
        cleared = self.cleared if len(kept) < len(self.placed) else (*self.cleared, place)
        return replace(self, placed=kept, cleared=cleared)

    def move(self, place: Place, to: Place, *, bouton: int | None = None) -> HandEdits:
        """Move the bouton at a place, with its id where that is known; a drawn footprint moves by whole pixels."""
        drawn = next((one.pixels for one in self.placed if one.place == place), ())
        if not drawn:
            moved = PlacedByHand(y_px=to[0], x_px=to[1], origin=self._origin(place), bouton=bouton)
            return self.delete(place)._place(moved)
        dy, dx = round(to[0] - place[0]), round(to[1] - place[1])
        return self.redraw(place, tuple((y + dy, x + dx) for y, x in drawn), bouton=bouton)

    def redraw(self, place: Place, pixels: tuple[tuple[int, int], ...], *, bouton: int | None = None) -> HandEdits:
        """Give the bouton at a place, with its id where known, a drawn footprint; its place becomes the centre."""
        y, x = mean_place(pixels)
        redrawn = PlacedByHand(y_px=y, x_px=x, pixels=pixels, origin=self._origin(place), bouton=bouton)
        return self.delete(place)._place(redrawn)

    def merge(self, places: tuple[Place, ...], *, bouton: int | None = None) -> HandEdits:
        """Replace several boutons by one at their mean, which keeps the id of the first."""
        edits = self
        for place in places:
            edits = edits.delete(place)
        y, x = mean_place(places)
        return edits._place(PlacedByHand(y_px=y, x_px=x, origin=self._origin(places[0]), bouton=bouton))

    def numbered(self, ids: Mapping[Place, int]) -> HandEdits:
        """Let boutons that have no id of their own yet keep the one that they have at their place now."""
        placed = tuple(replace(one, bouton=ids.get(one.place)) if one.bouton is None else one for one in self.placed)
        added = tuple(one.bouton for one in placed if one.origin is None and one.bouton is not None)
        return replace(self, placed=placed)._give(added)

    def following(self, before: HandEdits) -> HandEdits:
        """Keep in mind which ids another state has given to boutons added by hand."""
        return self._give(before.given)

    def exclude(self, trial: int, reason: str) -> HandEdits:
        """Leave a trial out of every estimate."""
        others = tuple(one for one in self.excluded if one[0] != trial)
        return replace(self, excluded=tuple(sorted((*others, (trial, reason)))))

    def include(self, trial: int) -> HandEdits:
        """Let a trial count again."""
        return replace(self, excluded=tuple(one for one in self.excluded if one[0] != trial))

    def spared(self, y_px: NDArray[np.float64], x_px: NDArray[np.float64], *, reach_px: float) -> NDArray[np.bool_]:
        """Tell which found boutons still count: those that no cleared and no placed place lies within `reach_px` of."""
        kept = np.ones(len(y_px), dtype=np.bool_)
        for y, x in (*self.cleared, *(one.place for one in self.placed)):
            distance = np.hypot(y_px - y, x_px - x)
            if kept.any():
                nearest = int(np.argmin(np.where(kept, distance, np.inf)))
                kept[nearest] &= distance[nearest] > reach_px
        return kept

    def as_dict(self) -> dict[str, Any]:
        """Return the edits JSON-ready."""
        return {
            "placed": [
                {
                    "y_px": one.y_px,
                    "x_px": one.x_px,
                    "pixels": [list(pixel) for pixel in one.pixels],
                    "origin": None if one.origin is None else list(one.origin),
                    "bouton": one.bouton,
                }
                for one in self.placed
            ],
            "cleared": [list(place) for place in self.cleared],
            "excluded": [{"trial": trial, "reason": reason} for trial, reason in self.excluded],
            "given": list(self.given),
        }


def mean_place(places: Sequence[tuple[float, float]]) -> Place:
    """Return the mean of some places."""
    y, x = np.mean(np.asarray(places, dtype=np.float64), axis=0)
    return float(y), float(x)


def edits_from_dict(content: dict[str, Any]) -> HandEdits:
    """Rebuild edits from `HandEdits.as_dict`; what was saved before ids were is read as well.

    Raises
    ------
    KeyError, TypeError, ValueError
        If a key is missing or has the wrong type.
    """
    return HandEdits(
        placed=tuple(
            PlacedByHand(
                y_px=float(one["y_px"]),
                x_px=float(one["x_px"]),
                pixels=tuple((int(y), int(x)) for y, x in one["pixels"]),
                origin=None if one.get("origin") is None else (float(one["origin"][0]), float(one["origin"][1])),
                bouton=None if one.get("bouton") is None else int(one["bouton"]),
            )
            for one in content["placed"]
        ),
        cleared=tuple((float(y), float(x)) for y, x in content["cleared"]),
        excluded=tuple((int(one["trial"]), str(one["reason"])) for one in content["excluded"]),
        given=tuple(int(bouton) for bouton in content.get("given", ())),
    )
