"""Where things lie: the axon's path, its boutons, and bright spots that never release."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from ..errors import InputError

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from .recipe import Recipe

_STEP_PX = 0.25  # spacing of the points that make up a path


@dataclass(frozen=True, slots=True, kw_only=True)
class Scene:
    """Positions at mean drift, in pixels.

    Attributes
    ----------
    path_px : (n_points, 2) ndarray
        (y, x) along the axon, a quarter of a pixel apart, reaching beyond the image on both sides.
    bouton_px : (n_boutons, 2) ndarray
        (y, x) of the boutons in order along the axon.
    bouton_along_px : (n_boutons,) ndarray
        Their distance along the path from where it enters the image.
    on_axon_px, off_axon_px : (n, 2) ndarray
        (y, x) of the specks.
    """

    path_px: NDArray[np.float64]
    bouton_px: NDArray[np.float64]
    bouton_along_px: NDArray[np.float64]
    on_axon_px: NDArray[np.float64]
    off_axon_px: NDArray[np.float64]


def draw_scene(recipe: Recipe, rng: np.random.Generator) -> Scene:
    """Draw an axon that crosses the image, its boutons and the specks.

    Raises
    ------
    InputError
        If the image has no room for them.
    """
    path = _given_path(recipe) if recipe.boutons else _drawn_path(recipe, rng)
    along = np.concatenate([[0.0], np.cumsum(np.hypot(*np.diff(path, axis=0).T))])
    axis = _long_axis(recipe)
    along -= np.interp(0.0, path[:, axis], along)
    if recipe.boutons:
        boutons = np.array([(b.y_px, b.x_px) for b in recipe.boutons])
        bouton_along = np.array([along[np.argmin(np.hypot(*(path - bouton).T))] for bouton in boutons])
    else:
        bouton_along = _draw_along(recipe, path, along, rng)
        boutons = _at(bouton_along, path, along)
    on_axon = _draw_on_axon(recipe, path, along, bouton_along, rng)
    off_axon = _draw_off_axon(recipe, path, rng)
    return Scene(
        path_px=path, bouton_px=boutons, bouton_along_px=bouton_along, on_axon_px=on_axon, off_axon_px=off_axon
    )


def margin_px(recipe: Recipe) -> float:
    """Distance from the image border inside which no bouton is drawn: a spot and some drift."""
    return 2.5 * math.hypot(recipe.psf_sigma_um, recipe.bouton_radius_um / 2) / recipe.pixel_size_um + 2.0


def _long_axis(recipe: Recipe) -> int:
    return 1 if recipe.width_px >= recipe.height_px else 0


def _drawn_path(recipe: Recipe, rng: np.random.Generator) -> NDArray[np.float64]:
    """Draw a smooth curve along the longer side: a sum of a few slow swings."""
    axis = _long_axis(recipe)
    size = (recipe.height_px, recipe.width_px)
    length, breadth = size[axis], size[1 - axis]
    forward = np.arange(-0.5 * length, 1.5 * length, _STEP_PX / 2)
    aside = np.zeros(forward.size)
    for waves in (0.5, 1.0, 1.7):
        aside += rng.normal() / waves * np.sin(2 * np.pi * (waves * forward / length + rng.random()))
    inside = (forward >= 0) & (forward < length)
    aside -= 0.5 * (aside[inside].max() + aside[inside].min())
    room = max(0.5 * (breadth - 1) - margin_px(recipe), 0.0)
    swing = min(recipe.wander_um / recipe.pixel_size_um, room)
    aside *= swing / np.abs(aside[inside]).max()
    path = np.empty((forward.size, 2))
    path[:, axis], path[:, 1 - axis] = forward, 0.5 * (breadth - 1) + aside
    return _evenly_spaced(path)


def _given_path(recipe: Recipe) -> NDArray[np.float64]:
    """Run a smooth curve through the given boutons and straight on out of the image."""
    from scipy.interpolate import PchipInterpolator

    axis = _long_axis(recipe)
    places = np.array(sorted(((b.y_px, b.x_px) for b in recipe.boutons), key=lambda place: place[axis]))
    forward, aside = places[:, axis], places[:, 1 - axis]
    first = np.concatenate([[True], np.diff(forward) > 0])
    forward, aside = forward[first], aside[first]
    length = (recipe.height_px, recipe.width_px)[axis]
    knots = np.concatenate([[forward[0] - length], forward, [forward[-1] + length]])
    values = np.concatenate([[aside[0]], aside, [aside[-1]]])
    dense = np.arange(knots[0], knots[-1], _STEP_PX / 2)
    path = np.empty((dense.size, 2))
    path[:, axis], path[:, 1 - axis] = dense, PchipInterpolator(knots, values)(dense)
    return _evenly_spaced(path)


def _evenly_spaced(path: NDArray[np.float64]) -> NDArray[np.float64]:
    along = np.concatenate([[0.0], np.cumsum(np.hypot(*np.diff(path, axis=0).T))])
    return _at(np.arange(0.0, along[-1], _STEP_PX), path, along)


def _at(where: NDArray[np.float64], path: NDArray[np.float64], along: NDArray[np.float64]) -> NDArray[np.float64]:
    return np.column_stack([np.interp(where, along, path[:, 0]), np.interp(where, along, path[:, 1])])


def _inside(recipe: Recipe, points: NDArray[np.float64]) -> NDArray[np.bool_]:
    margin = margin_px(recipe)
    far = np.array([recipe.height_px - 1 - margin, recipe.width_px - 1 - margin])
    inside: NDArray[np.bool_] = np.all((points >= margin) & (points <= far), axis=1)
    return inside


def _draw_along(
    recipe: Recipe, path: NDArray[np.float64], along: NDArray[np.float64], rng: np.random.Generator
) -> NDArray[np.float64]:
    """Draw the boutons' places along the path: normal distances, the chain centred in the image."""
    if recipe.n_boutons == 0:
        return np.zeros(0)
    visible = along[_inside(recipe, path)]
    room_um = float(np.ptp(visible)) * recipe.pixel_size_um if visible.size else 0.0
    needed_um = (recipe.n_boutons - 1) * recipe.spacing_um
    if needed_um > room_um or not visible.size:
        raise InputError(
            f"n_boutons = {recipe.n_boutons} at spacing_um = {recipe.spacing_um:g} need {needed_um:.1f} um of axon, "
            f"but the image shows {room_um:.1f} um of it; use fewer boutons, a smaller spacing or a larger image."
        )
    mean_px = recipe.spacing_um / recipe.pixel_size_um
    gaps = rng.normal(mean_px, recipe.spacing_sd_um / recipe.pixel_size_um, recipe.n_boutons - 1)
    chain = np.concatenate([[0.0], np.cumsum(np.clip(gaps, 0.5 * mean_px, 2.0 * mean_px))])
    slack = float(np.ptp(visible)) - chain[-1]
    if slack < 0:  # an unusually long chain is pressed into the image
        chain *= float(np.ptp(visible)) / chain[-1]
        slack = 0.0
    first = float(visible.min()) + slack * rng.uniform(0.4, 0.6)
    places: NDArray[np.float64] = first + chain
    return places


def _draw_on_axon(
    recipe: Recipe,
    path: NDArray[np.float64],
    along: NDArray[np.float64],
    bouton_along: NDArray[np.float64],
    rng: np.random.Generator,
) -> NDArray[np.float64]:
    apart = 1.2 / recipe.pixel_size_um
    visible = along[_inside(recipe, path)]
    taken = bouton_along
    for _ in range(recipe.specks_on_axon):
        free = visible[np.all(np.abs(visible[:, None] - taken[None, :]) > apart, axis=1)]
        if not free.size:
            raise InputError(
                f"specks_on_axon = {recipe.specks_on_axon} do not fit between the boutons; use fewer of them or a "
                "wider spacing_um."
            )
        taken = np.append(taken, rng.choice(free))
    return _at(taken[bouton_along.size :], path, along)


def _draw_off_axon(recipe: Recipe, path: NDArray[np.float64], rng: np.random.Generator) -> NDArray[np.float64]:
    from scipy.spatial import cKDTree

    apart = 1.5 / recipe.pixel_size_um
    wanted = recipe.specks_off_axon + recipe.saturated_specks
    rows, columns = np.mgrid[0 : recipe.height_px, 0 : recipe.width_px]
    places = np.column_stack([rows.ravel(), columns.ravel()]).astype(np.float64)
    places = places[_inside(recipe, places)]
    taken = path
    for _ in range(wanted):
        places = places[cKDTree(taken).query(places)[0] > apart]
        if not places.size:
            raise InputError(
                f"{wanted} specks off the axon do not fit into {recipe.height_px} x {recipe.width_px} px; use fewer, "
                "or a larger image."
            )
        chosen = rng.choice(places) + rng.uniform(-0.5, 0.5, 2)
        taken = chosen[None, :] if taken is path else np.vstack([taken, chosen])
    return taken if wanted else np.zeros((0, 2))
