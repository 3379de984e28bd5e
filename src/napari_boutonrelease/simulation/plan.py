"""Draw everything about a recording but its photons: the scene, what is released when, light and movement."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np

from .optics import Lattice, Spot, line_share
from .release import Vesicles, draw_evoked, draw_spontaneous, release_chances
from .scene import Scene, draw_scene
from .truth import Truth

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from .recipe import Recipe

_DIM = 0.25  # light of a dim bouton relative to a usual one
_OUTSIDE_PX = 24  # how far the axon is known outside the image


def spot_of(recipe: Recipe) -> Spot:
    """Image of one bouton: its disc through the point spread."""
    return Spot(
        sigma_px=recipe.psf_sigma_um / recipe.pixel_size_um, radius_px=recipe.bouton_radius_um / recipe.pixel_size_um
    )


def shaft_of(recipe: Recipe, path_px: NDArray[np.float64]) -> Lattice:
    """Light of the bare axon along its path, on a lattice that can be displaced."""
    sigma_px = recipe.psf_sigma_um / recipe.pixel_size_um
    lattice = Lattice(shape=(recipe.height_px, recipe.width_px), margin_px=_OUTSIDE_PX, sigma_px=sigma_px)
    # A long line of 1 photon per px of length shows this much in the pixels that it runs through the middle of.
    ridge = float(line_share(np.zeros(1, dtype=np.int64), 1, np.zeros(1), sigma_px)[0, 0])
    step = np.hypot(*np.gradient(path_px, axis=0).T)
    lattice.add_points(path_px[:, 0], path_px[:, 1], step * recipe.shaft_fraction * recipe.photons / ridge)
    return lattice


def plan_recording(recipe: Recipe, *, rng: np.random.Generator) -> Truth:
    """Draw the truth of a recording.

    Parameters
    ----------
    recipe : Recipe
        What to simulate.
    rng : numpy.random.Generator
        Source of all chance.

    Raises
    ------
    InputError
        If the image has no room for the scene.
    """
    rng_scene, rng_boutons, rng_release, rng_movement, rng_camera = rng.spawn(5)
    scene = draw_scene(recipe, rng_scene)
    n_sites, p_site, q_dff, f0 = _draw_boutons(recipe, rng_boutons)
    start_s, clock_s, segment = frame_times(recipe)
    stimulus_s, stimulus_clock_s = _stimulus_times(recipe)
    failed = np.isfinite(stimulus_s) & (rng_release.random(stimulus_s.shape) < recipe.failed_stimuli)
    evoked = draw_evoked(
        n_sites=n_sites,
        p_site=p_site,
        q_dff=q_dff,
        stimulus_s=stimulus_clock_s,
        arrived=~failed,
        recipe=recipe,
        rng=rng_release,
    )
    lost = draw_spontaneous(
        releases=p_site > 0,
        q_dff=q_dff,
        duration_s=recipe.n_frames * recipe.frame_interval_s,
        recipe=recipe,
        rng=rng_release,
    )
    lost_frame = np.minimum((lost.time_s / recipe.frame_interval_s).astype(np.int64), recipe.n_frames - 1)
    lost_clock_s = lost.time_s + (clock_s - start_s)[lost_frame]
    dy_px, dx_px = _draw_movement(recipe, clock_s, rng_movement)
    spots = _join_specks(recipe, scene, n_sites, p_site, q_dff, f0, rng_boutons)
    chances = release_chances(
        n_sites=spots["n_sites"], p_site=spots["p_site"], stimulus_s=stimulus_clock_s, recipe=recipe
    )
    mean = chances.mean_vesicles
    ppr = np.full(mean.shape[0], np.nan)
    if mean.shape[1] > 1:
        np.divide(mean[:, 1], mean[:, 0], out=ppr, where=mean[:, 0] > 0)
    vesicles, amplitude = _per_stimulus(evoked, len(spots["kind"]), stimulus_s)
    at_rest = np.zeros(1)
    pixels = rng_camera.permutation(recipe.height_px * recipe.width_px)[: recipe.dead_pixels]
    return Truth(
        recipe=recipe,
        y_um=spots["y_px"] * recipe.pixel_size_um,
        x_um=spots["x_px"] * recipe.pixel_size_um,
        q_cv=np.full(len(spots["kind"]), recipe.q_cv),
        p_release=chances.p_release[:, 0],
        p_release_by_pulse=chances.p_release,
        vesicles_by_pulse=mean,
        ppr=ppr,
        p2_given_release=chances.p2_given_release,
        p2_given_failure=chances.p2_given_failure,
        stimulus_s=stimulus_s,
        stimulus_failed=failed,
        vesicles=vesicles,
        amplitude_dff=amplitude,
        vesicle_spot=np.concatenate([evoked.bouton, lost.bouton]),
        vesicle_trial=np.concatenate([evoked.trial, lost.trial]),
        vesicle_pulse=np.concatenate([evoked.pulse, lost.pulse]),
        vesicle_s=np.concatenate([evoked.time_s, lost_clock_s]),
        vesicle_dff=np.concatenate([evoked.size_dff, lost.size_dff]),
        frame_start_s=start_s,
        frame_clock_s=clock_s,
        segment=segment,
        light=_light(recipe),
        dy_px=dy_px,
        dx_px=dx_px,
        axon_path_px=scene.path_px,
        shaft_photons=shaft_of(recipe, scene.path_px).images(at_rest, at_rest)[0],
        dead_px=np.column_stack(np.unravel_index(pixels, (recipe.height_px, recipe.width_px))),
        **spots,
    )


def frame_times(recipe: Recipe) -> tuple[NDArray[np.float64], NDArray[np.float64], NDArray[np.int64]]:
    """Start of each frame on the recording's and on the laboratory's clock (s), and the file it belongs to."""
    start_s = np.arange(recipe.n_frames, dtype=np.float64) * recipe.frame_interval_s
    segment: NDArray[np.int64] = np.repeat(np.arange(len(recipe.file_frames)), recipe.file_frames)
    if recipe.file_s is None:
        return start_s, start_s.copy(), segment
    first = np.concatenate([[0], np.cumsum(recipe.file_frames)[:-1]])
    within_s: NDArray[np.float64] = (np.arange(recipe.n_frames) - first[segment]) * recipe.frame_interval_s
    return start_s, segment * recipe.trial_interval_s + within_s, segment


def _stimulus_times(recipe: Recipe) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Stimulus times (s) on the recording's and the laboratory's clock, (n_trials, n_pulses); NaN for no such pulse."""
    table = recipe.stimulus_table_s
    within_s = np.full((len(table), max(len(times) for times in table)), np.nan)
    for trial, times in enumerate(table):
        within_s[trial, : len(times)] = times
    if recipe.file_s is None:
        return within_s, within_s.copy()
    number = np.arange(len(table))[:, None]
    return within_s + number * recipe.file_frames[
        0
    ] * recipe.frame_interval_s, within_s + number * recipe.trial_interval_s


def _draw_boutons(
    recipe: Recipe, rng: np.random.Generator
) -> tuple[NDArray[np.int64], NDArray[np.float64], NDArray[np.float64], NDArray[np.float64]]:
    """Sites, release probability of a site, response to a vesicle and light of each bouton."""
    n = recipe.n_drawn
    if recipe.boutons:
        n_sites = np.array([b.n_sites for b in recipe.boutons], dtype=np.int64)
        p_site = np.array([b.p_site for b in recipe.boutons], dtype=np.float64)
        q_dff = np.array([b.q_dff for b in recipe.boutons], dtype=np.float64)
        f0 = np.array([b.f0_photons for b in recipe.boutons], dtype=np.float64)
    else:
        low, high = recipe.p_release
        p_release = low + (high - low) * (rng.permutation(n) + rng.random(n)) / max(n, 1)
        n_sites = rng.integers(recipe.n_sites[0], recipe.n_sites[1], n, endpoint=True)
        p_site = 1.0 - (1.0 - p_release) ** (1.0 / n_sites)
        spread = recipe.q_spread
        q_dff = recipe.q_dff * (rng.gamma(1 / spread**2, spread**2, n) if spread > 0 else np.ones(n))
        f0 = recipe.photons * np.exp(recipe.photons_cv * rng.standard_normal(n))
    p_site[rng.permutation(n)[: recipe.silent_boutons]] = 0.0
    f0[rng.permutation(n)[: recipe.dim_boutons]] *= _DIM
    return n_sites, p_site, q_dff, f0


def _join_specks(
    recipe: Recipe,
    scene: Scene,
    n_sites: NDArray[np.int64],
    p_site: NDArray[np.float64],
    q_dff: NDArray[np.float64],
    f0: NDArray[np.float64],
    rng: np.random.Generator,
) -> dict[str, Any]:
    specks = np.vstack([scene.on_axon_px, scene.off_axon_px])
    none = np.zeros(len(specks))
    light = recipe.photons * np.exp(recipe.photons_cv * rng.standard_normal(len(specks)))
    ceiling = (2.0**recipe.bit_depth - 1 - recipe.offset_counts) / recipe.gain
    if recipe.saturated_specks:
        light[-recipe.saturated_specks :] = 3.0 * ceiling
    places = np.vstack([scene.bouton_px.reshape(-1, 2), specks])
    return {
        "kind": tuple("releasing" if p > 0 else "silent" for p in p_site) + ("speck",) * len(specks),
        "y_px": places[:, 0].copy(),
        "x_px": places[:, 1].copy(),
        "axon_um": np.concatenate([scene.bouton_along_px * recipe.pixel_size_um, none + np.nan]),
        "f0_photons": np.concatenate([f0, light]),
        "n_sites": np.concatenate([n_sites, none.astype(np.int64)]),
        "p_site": np.concatenate([p_site, none]),
        "q_dff": np.concatenate([q_dff, none + np.nan]),
    }


def _per_stimulus(
    evoked: Vesicles, n_spots: int, stimulus_s: NDArray[np.float64]
) -> tuple[NDArray[np.int64], NDArray[np.float64]]:
    vesicles = np.zeros((n_spots, *stimulus_s.shape), dtype=np.int64)
    amplitude = np.zeros(vesicles.shape)
    where = (evoked.bouton, evoked.trial, evoked.pulse)
    np.add.at(vesicles, where, 1)
    np.add.at(amplitude, where, evoked.size_dff)
    amplitude[:, ~np.isfinite(stimulus_s)] = np.nan
    return vesicles, amplitude


def _light(recipe: Recipe) -> NDArray[np.float64]:
    """Light of each frame: bleaching goes on only while the light is on."""
    lit = np.ones(recipe.n_frames)
    lit[[frame for frame in recipe.dark_frames if frame < recipe.n_frames]] = 0.0
    exposed = np.cumsum(lit) - 1.0
    light: NDArray[np.float64] = lit * (1.0 - recipe.bleached) ** (exposed / max(lit.sum() - 1.0, 1.0))
    return light


def _draw_movement(
    recipe: Recipe, clock_s: NDArray[np.float64], rng: np.random.Generator
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Random walk, slow swing and jumps in y and x, each with mean 0."""
    frames_passed = np.diff(clock_s, prepend=clock_s[0]) / recipe.frame_interval_s
    jump_at = rng.integers(1, max(recipe.n_frames, 2), recipe.drift_jumps)
    shifts = []
    for _ in range(2):
        steps = recipe.drift_walk_px * np.sqrt(np.maximum(frames_passed, 0.0)) * rng.standard_normal(clock_s.size)
        np.add.at(
            steps,
            jump_at[jump_at < clock_s.size],
            rng.normal(0, recipe.drift_jump_px, int((jump_at < clock_s.size).sum())),
        )
        swing = recipe.drift_wave_px * np.sin(2 * np.pi * (clock_s / recipe.drift_wave_s + rng.random()))
        shift = np.cumsum(steps) + swing
        shifts.append(shift - shift.mean())
    return shifts[0], shifts[1]
