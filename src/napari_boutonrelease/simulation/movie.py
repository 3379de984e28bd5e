"""From the truth to frames: light photon by photon, then the camera."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from ..recording.protocol import Protocol, RegularStimuli, StimulusTable
from .kinetics import Reporter, activity
from .plan import plan_recording, shaft_of, spot_of

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from .recipe import Recipe
    from .truth import Truth

_BLOCK_FRAMES, _BLOCK_PIXELS = 256, 2**20  # largest block that is worked on at once


@dataclass(frozen=True, slots=True, kw_only=True)
class Simulation:
    """A simulated recording in memory.

    Attributes
    ----------
    frames : (n_frames, height, width) ndarray
        The movie, in counts; of several files one after the other.
    truth : Truth
        What it shows.
    protocol : Protocol
        What its experimenter would state: all but the response shape.
    """

    frames: NDArray[Any]
    truth: Truth
    protocol: Protocol


def simulate_recording(
    recipe: Recipe, *, rng: np.random.Generator, progress: Callable[[int, int], None] | None = None
) -> Simulation:
    """Simulate a recording in memory.

    Parameters
    ----------
    recipe : Recipe
        What to simulate.
    rng : numpy.random.Generator
        Source of all chance: the same recipe and seed give the same movie.
    progress : callable or None
        Called with (frames done, frames in all).

    Raises
    ------
    InputError
        If the image has no room for the scene.

    Examples
    --------
    >>> from napari_boutonrelease.simulation import Recipe
    >>> recipe = Recipe(trials=2, n_boutons=3, height_px=32, width_px=64)
    >>> simulation = simulate_recording(recipe, rng=np.random.default_rng(1))
    >>> simulation.frames.shape, str(simulation.frames.dtype)
    ((210, 32, 64), 'uint16')
    """
    truth = plan_recording(recipe, rng=rng)
    frames = np.empty((recipe.n_frames, recipe.height_px, recipe.width_px), dtype=recipe.dtype)
    done = 0
    for block in frame_blocks(truth, rng=rng):
        frames[done : done + len(block)] = block
        done += len(block)
        if progress is not None:
            progress(done, recipe.n_frames)
    return Simulation(frames=frames, truth=truth, protocol=protocol_of(recipe))


def protocol_of(recipe: Recipe) -> Protocol:
    """State the protocol of a recipe as an experimenter would; the response shape is left to the analysis."""
    stimuli: RegularStimuli | StimulusTable
    if recipe.pulse_table_s is None:
        stimuli = RegularStimuli(
            first_s=recipe.first_s,
            trials=recipe.trials,
            trial_interval_s=recipe.trial_interval_s,
            pulses=recipe.pulses,
            pulse_interval_s=recipe.pulse_interval_s,
        )
    else:
        rows = [
            (trial, pulse, time_s)
            for trial, times in enumerate(recipe.pulse_table_s, start=1)
            for pulse, time_s in enumerate(times, start=1)
        ]
        trial, pulse, time_s = (np.array(column) for column in zip(*rows, strict=True))
        stimuli = StimulusTable(trial=trial, pulse=pulse, time_s=time_s, source="simulation")
    return Protocol(
        frame_interval_s=recipe.frame_interval_s,
        exposure_s=recipe.exposure,
        row_time_s=recipe.row_time_s,
        pixel_size_um=recipe.pixel_size_um,
        camera_offset=recipe.offset_counts,
        stimuli=stimuli,
    )


def frame_blocks(truth: Truth, *, rng: np.random.Generator) -> Iterator[NDArray[Any]]:
    """Yield the movie of a truth, some frames at a time, (frames, height, width) in counts."""
    rng_light, rng_camera = rng.spawn(2)
    dead_y, dead_x = truth.dead_px.T
    for photons in photon_blocks(truth, rng=rng_light):
        counts = _camera(rng_camera.poisson(photons), truth.recipe, rng_camera)
        counts[:, dead_y, dead_x] = truth.recipe.offset_counts
        yield counts


def photon_blocks(truth: Truth, *, rng: np.random.Generator) -> Iterator[NDArray[np.float64]]:
    """Yield the photons to be expected in every pixel, some frames at a time; chance is in the diffuse light only."""
    recipe = truth.recipe
    reporter = Reporter(recipe)
    spot = spot_of(recipe)
    shaft = shaft_of(recipe, truth.axon_path_px)
    haze = _Haze(recipe, rng)
    flash = np.zeros(recipe.n_frames)
    flash[[frame for frame in recipe.flash_frames if frame < recipe.n_frames]] = recipe.flash_photons
    step = max(1, min(_BLOCK_FRAMES, _BLOCK_PIXELS // (recipe.height_px * recipe.width_px)))
    for start in range(0, recipe.n_frames, step):
        stop = min(start + step, recipe.n_frames)
        canvas = _Canvas(shaft.images(truth.dy_px[start:stop], truth.dx_px[start:stop]), spot.reach_px)
        for index in range(len(truth.kind)):
            y0, x0, patch = spot.patches(
                truth.y_px[index] + truth.dy_px[start:stop], truth.x_px[index] + truth.dx_px[start:stop]
            )
            patch *= truth.f0_photons[index]
            mine = truth.vesicle_spot == index
            if mine.any():
                rows = y0[:, None] + np.arange(spot.width_px if recipe.row_time_s else 1)
                rise = activity(
                    reporter=reporter,
                    release_s=truth.vesicle_s[mine],
                    size_dff=truth.vesicle_dff[mine],
                    start_s=truth.frame_clock_s[start:stop, None] + recipe.row_time_s * rows,
                    exposure_s=recipe.exposure,
                    saturation_dff=recipe.saturation_dff,
                )
                patch *= 1.0 + rise[:, :, None]
            canvas.add(y0, x0, patch)
        lit = (canvas.image() + haze.next(stop - start)) * truth.light[start:stop, None, None]
        yield lit + flash[start:stop, None, None]


class _Canvas:
    """A block of images with a border wide enough for patches that hang over the edge."""

    def __init__(self, images: NDArray[np.float64], border_px: int) -> None:
        self.border = border_px + 1
        around = (self.border, self.border)
        self.pixels = np.pad(images, ((0, 0), around, around))

    def add(self, y0: NDArray[np.int64], x0: NDArray[np.int64], patches: NDArray[np.float64]) -> None:
        """Add one patch to each image; one that has drifted off altogether is left out."""
        _, height, width = self.pixels.shape
        side = patches.shape[1]
        row, column = y0 + self.border, x0 + self.border
        seen = (row >= 0) & (column >= 0) & (row + side <= height) & (column + side <= width)
        frame = np.flatnonzero(seen)[:, None, None]
        rows = row[seen, None, None] + np.arange(side)[:, None]
        columns = column[seen, None, None] + np.arange(side)
        self.pixels[frame, rows, columns] += patches[seen]

    def image(self) -> NDArray[np.float64]:
        return self.pixels[:, self.border : -self.border, self.border : -self.border]


class _Haze:
    """Diffuse light that swells and fades smoothly over the image and over time."""

    def __init__(self, recipe: Recipe, rng: np.random.Generator) -> None:
        self._recipe, self._rng = recipe, rng
        length = recipe.background_um / recipe.pixel_size_um
        self._over_y, self._over_x = (_bumps(size, length) for size in (recipe.height_px, recipe.width_px))
        self._state = rng.standard_normal((self._over_y.shape[1], self._over_x.shape[1]))
        self._kept = float(np.exp(-recipe.frame_interval_s / recipe.background_s))

    def next(self, n_frames: int) -> NDArray[np.float64]:
        """Photons a pixel in the next frames, (n_frames, height, width) or broadcastable."""
        if self._recipe.background_cv == 0 or self._recipe.background_photons == 0:
            return np.full((n_frames, 1, 1), self._recipe.background_photons)
        states = np.empty((n_frames, *self._state.shape))
        fresh = np.sqrt(1.0 - self._kept**2) * self._rng.standard_normal(states.shape)
        for frame in range(n_frames):
            self._state = self._kept * self._state + fresh[frame]
            states[frame] = self._state
        field = np.matmul(np.matmul(self._over_y, states), self._over_x.T)
        light: NDArray[np.float64] = np.maximum(1.0 + self._recipe.background_cv * field, 0.0)
        return self._recipe.background_photons * light


def _bumps(size_px: int, length_px: float) -> NDArray[np.float64]:
    """Smooth weights (size, n_bumps) that turn independent numbers of variance 1 into a field of variance 1."""
    centres = np.arange(-length_px, size_px + 2 * length_px, length_px)
    weights = np.exp(-0.5 * ((np.arange(size_px)[:, None] - centres) / length_px) ** 2)
    normed: NDArray[np.float64] = weights / np.sqrt(np.sum(weights**2, axis=1, keepdims=True))
    return normed


def _camera(electrons: NDArray[np.int64], recipe: Recipe, rng: np.random.Generator) -> NDArray[Any]:
    """Turn photoelectrons into counts: multiplication, read-out noise, offset, rounding and the detector's ceiling."""
    signal = rng.standard_gamma(electrons) if recipe.electron_multiplying else electrons.astype(np.float64)
    if recipe.read_noise_e > 0:
        signal += recipe.read_noise_e * rng.standard_normal(signal.shape)
    signal *= recipe.gain
    signal += recipe.offset_counts
    np.minimum(signal, 2.0**recipe.bit_depth - 1, out=signal)
    if recipe.dtype != "float32":
        np.rint(signal, out=signal)
        np.maximum(signal, 0, out=signal)
    return signal.astype(recipe.dtype)
