"""The recording as an analysis sees it: when frames were taken, how much light and noise, how the sample moved."""

from __future__ import annotations

import warnings
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from ..boutons import Optics
from ..errors import AnalysisWarning
from ..recording import (
    Drift,
    Light,
    Movie,
    Timing,
    fill_dead,
    light_at_rest,
    measure_drift,
    measure_light,
    no_drift,
    resolve_timing,
)

if TYPE_CHECKING:
    from ..recording import Protocol
    from .progress import StepProgress
    from .settings import RecordingSettings

BLOCK_FRAMES = 64
UNKNOWN_PIXEL_UM = 0.16  # a common sampling; used for sizes of search only where the pixel size is unknown


@dataclass(frozen=True, slots=True, kw_only=True)
class Recording:
    """A movie with its timing, light and movement.

    Attributes
    ----------
    movie : Movie
        Frames, dead pixels filled.
    timing : Timing
        Frames and stimuli on one clock.
    light : Light
        Gain, noise, pixels and frames not to trust.
    drift : Drift
        Movement of every frame.
    optics : Optics
        Mean image and noise in the coordinates of the reference.
    """

    movie: Movie
    timing: Timing
    light: Light
    drift: Drift
    optics: Optics

    @property
    def pixel_um(self) -> float:
        """Pixel size, or a stated guess where it is unknown, in µm."""
        return self.timing.pixel_size_um or UNKNOWN_PIXEL_UM


def look_at_recording(
    movie: Movie, protocol: Protocol, *, settings: RecordingSettings, steps: StepProgress
) -> Recording:
    """Resolve the times, and measure light, noise and movement."""
    timing = resolve_timing(movie, protocol)
    light = measure_light(
        movie, camera_offset=timing.camera_offset, block_frames=BLOCK_FRAMES, progress=steps.step("light")
    )
    movie = fill_dead(movie, dead=light.dead)
    if settings.correct_motion:
        drift = measure_drift(
            movie,
            light=light,
            max_shift_px=settings.max_shift_px,
            block_frames=BLOCK_FRAMES,
            progress=steps.step("drift"),
        )
    else:
        drift = no_drift(light=light)
    light = light_at_rest(movie, light=light, drift=drift)
    return Recording(movie=movie, timing=timing, light=light, drift=drift, optics=_optics(light, drift))


def _optics(light: Light, drift: Drift) -> Optics:
    used = drift.used
    if not used.any():
        warnings.warn(
            "No frame of the movie can be used: check the light and the focus.", AnalysisWarning, stacklevel=3
        )
        used = np.ones_like(used)
    mean = np.nan_to_num(drift.reference)
    return Optics(
        mean_image=mean,
        variance_image=light.variance_at(mean),
        saturated=light.saturated,
        dead=light.dead,
        dy_range_px=(float(drift.dy_px[used].min()), float(drift.dy_px[used].max())),
        dx_range_px=(float(drift.dx_px[used].min()), float(drift.dx_px[used].max())),
    )
