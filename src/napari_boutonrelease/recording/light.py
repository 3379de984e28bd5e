"""How much light, how much noise: the photon-transfer line, bleaching, and the pixels and frames not to trust.

One pass over the movie. The noise of a pixel is taken from the *falling* half of its frame-to-frame differences: a
release makes a pixel rise at once and fall slowly, so that responses hardly touch the falling half, and with noise
alone both halves are alike whatever the light level.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from ..errors import InputError
from .bad_frames import LOOK_AHEAD_FRAMES, FrameLevels
from .photon_transfer import above_median, photon_transfer_line, telling_pixels

if TYPE_CHECKING:
    from collections.abc import Callable

    from numpy.typing import ArrayLike, NDArray

    from .movie import Movie

    FloatArray = NDArray[np.float64]

__all__ = ["Light", "measure_light"]

_STRETCHES = 15  # stretches of the recording whose median noise counts, so that one jump of the sample does not
_PAIR_PIXELS, _LEAST_PAIRS = 12_000_000, 40  # pixels of a stretch's pairs of frames that its noise is taken from


@dataclass(frozen=True, slots=True, kw_only=True)
class Light:
    """Light and noise of a recording.

    Attributes
    ----------
    gain, gain_lo, gain_hi : float
        Counts per electron with its 95 % interval; NaN where the pixels' brightness is too alike to tell. A camera
        that multiplies electrons before reading them doubles the variance, and with it this number: counts divided by
        it are then the photons that would give the same noise on a camera without that excess.
    read_variance : float
        Variance (counts²) where the photon-transfer line meets 0 raw counts. Negative where the camera's offset
        is large.
    offset_counts : float
        Counts at no light; 0 where unknown.
    offset_known : bool
        Whether the offset was given.
    saturated, dead : (y, x) ndarray of bool
        Pixels at the detector's ceiling in more than 1 of 1,000 frames; pixels that never change or hold no number.
    bad_frame : (n_frames,) ndarray of bool
        Frames to leave out of everything.
    bad_reason : tuple of str
        For each frame "light off", "blank", "not finite", "flash" (a stimulation artefact over the whole field), or
        "" for a good one.
    mean_image : (y, x) ndarray of float
        Mean of the good frames, counts; NaN where there is none.
    frame_mean : (n_frames,) ndarray of float
        Mean of each frame, counts.
    bleaching : float
        Share of the light above the offset that is lost between the first and the last twentieth of the good frames.
    typical_variance, least_variance : float
        Median variance over the pixels, counts²; the smallest that `variance_at` returns.
    """

    gain: float
    gain_lo: float
    gain_hi: float
    read_variance: float
    offset_counts: float
    offset_known: bool
    saturated: NDArray[np.bool_]
    dead: NDArray[np.bool_]
    bad_frame: NDArray[np.bool_]
    bad_reason: tuple[str, ...]
    mean_image: FloatArray
    frame_mean: FloatArray
    bleaching: float
    typical_variance: float
    least_variance: float

    def variance_at(self, mean_counts: ArrayLike) -> FloatArray:
        """Variance (counts²) of a pixel whose mean is `mean_counts` (raw counts, any shape); always above 0."""
        mean = np.asarray(mean_counts, dtype=np.float64)
        if not np.isfinite(self.gain):
            return np.full(mean.shape, np.fmax(self.typical_variance, self.least_variance))
        return np.maximum(self.gain * mean + self.read_variance, self.least_variance)

    @property
    def read_noise_counts(self) -> float:
        """SD of a pixel in darkness, counts; NaN where the offset or the gain is unknown."""
        in_darkness = self.gain * self.offset_counts + self.read_variance
        return float(np.sqrt(max(in_darkness, 0.0))) if self.offset_known and np.isfinite(self.gain) else float("nan")


def measure_light(
    movie: Movie,
    *,
    camera_offset: float | None,
    block_frames: int,
    progress: Callable[[int, int], None] | None = None,
) -> Light:
    """Measure light and noise of a movie in one pass.

    The photon-transfer line is the variance of half the difference of successive good frames against the mean,
    pixel by pixel (EMVA 1288, release 4.0, 2021), as a robust line through bins of pixels of like brightness.

    Parameters
    ----------
    movie : Movie
        The recording.
    camera_offset : float or None
        Counts at no light, or None where unknown.
    block_frames : int
        Frames held in memory at a time, at least 2.
    progress : callable, optional
        Called with (frames done, frames in all).

    Returns
    -------
    Light
        Gain and its interval are NaN where they cannot be measured; nothing raises for bad data.

    Raises
    ------
    InputError
        If `block_frames` is less than 2.
    """
    if block_frames < 2:
        raise InputError(f"block_frames must be 2 or more (given {block_frames}).")
    n_frames, n_y, n_x = movie.shape
    levels = FrameLevels(n_frames=n_frames, n_y=n_y, n_x=n_x)
    n_blocks = -(-n_frames // block_frames)
    stretches = [_Stretch.empty(n_y, n_x) for _ in range(min(_STRETCHES, n_blocks))]
    extremes = _Extremes.empty(n_y, n_x)
    missing = np.zeros((n_y, n_x), dtype=np.intp)
    reasons: list[str] = []
    n_pairs = max(_LEAST_PAIRS, _PAIR_PIXELS // (n_y * n_x)) * len(stretches) // n_blocks + 1  # of each block
    for block, start in enumerate(range(0, n_frames, block_frames)):
        stop = min(start + block_frames, n_frames)
        raw = movie.read(start, min(stop + LOOK_AHEAD_FRAMES, n_frames))
        missing_here = levels.add(raw, start)
        missing += missing_here
        here = levels.bad_reasons(start, stop, camera_offset)
        reasons += here
        good = np.array([not reason for reason in here], dtype=np.bool_)
        frames = raw[: stop - start]
        stretch = stretches[block * len(stretches) // n_blocks]
        stretch.add_pairs(frames, good, n_pairs)
        if not good.all():
            frames = frames[good]
        stretch.add(frames)
        extremes.add(frames)
        if progress is not None:
            progress(stop, n_frames)
    bad = np.array([bool(reason) for reason in reasons], dtype=np.bool_)
    n_good = int(np.sum(~bad))
    dead = (extremes.low >= extremes.high) | (missing > 0) if n_good > 1 else missing > 0
    saturated = extremes.saturated(n_good, movie.full_scale) & ~dead
    mean_image = sum((part.total for part in stretches), np.zeros((n_y, n_x))) / (n_good or np.nan)
    alike, spread = telling_pixels(mean_image, ~(saturated | dead))
    mean, variance = _medians(stretches, spread)
    known = np.isfinite(mean) & np.isfinite(variance)
    gain, gain_se, read_variance = photon_transfer_line(mean[known], variance[known], n_frames=n_good)
    step = 1e-9 if movie.full_scale is None else 1.0 / 12.0  # rounding to integers is noise, too
    variance = variance[known & np.isin(spread, alike)]
    return Light(
        gain=gain,
        gain_lo=gain - 1.96 * gain_se,
        gain_hi=gain + 1.96 * gain_se,
        read_variance=read_variance,
        offset_counts=0.0 if camera_offset is None else float(camera_offset),
        offset_known=camera_offset is not None,
        saturated=saturated,
        dead=dead,
        bad_frame=bad,
        bad_reason=tuple(reasons),
        mean_image=mean_image,
        frame_mean=levels.mean,
        bleaching=_bleaching(levels.mean[~bad], camera_offset or 0.0),
        typical_variance=float(np.median(variance)) if variance.size else float("nan"),
        least_variance=max(0.5 * float(np.percentile(variance, 1)), step) if variance.size else step,
    )


@dataclass(slots=True)
class _Stretch:
    """Sums over the good frames of one stretch of the recording."""

    total: FloatArray
    falling: FloatArray
    n_frames: int = 0
    n_pairs: int = 0
    n_linked: int = 0  # pairs whose second frame begins the next pair

    @classmethod
    def empty(cls, n_y: int, n_x: int) -> _Stretch:
        return cls(total=np.zeros((n_y, n_x)), falling=np.zeros((n_y, n_x)))

    def add(self, good_frames: NDArray[np.generic]) -> None:
        """Take in good frames."""
        exact = np.uint32 if good_frames.dtype in (np.uint8, np.uint16) else np.float64
        self.total += good_frames.sum(axis=0, dtype=exact)
        self.n_frames += len(good_frames)

    def add_pairs(self, frames: NDArray[np.generic], good: NDArray[np.bool_], n_pairs: int) -> None:
        """Take in how much pixels fall within pairs of successive good frames, evenly chosen."""
        firsts = np.flatnonzero(good[:-1] & good[1:])
        if len(firsts) > n_pairs:
            firsts = firsts[np.linspace(0, len(firsts) - 1, n_pairs).round().astype(np.intp)]
        for k in firsts:
            change = np.subtract(frames[k + 1], frames[k], dtype=np.float32)
            np.minimum(change, 0.0, out=change)
            change *= change
            self.falling += change
        self.n_pairs += len(firsts)
        self.n_linked += int(np.sum(np.diff(firsts) == 1))


def _medians(stretches: list[_Stretch], pixels: NDArray[np.intp]) -> tuple[FloatArray, FloatArray]:
    """Mean and variance of pixels, the medians over stretches that have frames.

    Half of E[d²] is the variance, and falls are half of E[d²]. Medians follow.
    """
    filled = [part for part in stretches if part.n_pairs]
    if not filled:
        return np.full(pixels.size, np.nan), np.full(pixels.size, np.nan)
    means = [part.total.flat[pixels] / part.n_frames for part in filled]
    variances = [
        part.falling.flat[pixels] / part.n_pairs * above_median(part.n_pairs, n_linked=part.n_linked) for part in filled
    ]
    return np.median(means, axis=0), np.median(variances, axis=0)


@dataclass(slots=True)
class _Extremes:
    """Lowest and highest value of each pixel, and how often it sat at the highest value of the movie."""

    low: NDArray[np.float64]
    high: NDArray[np.float64]
    at_top: NDArray[np.intp]
    top: float = -np.inf

    @classmethod
    def empty(cls, n_y: int, n_x: int) -> _Extremes:
        shape = (n_y, n_x)
        return cls(low=np.full(shape, np.inf), high=np.full(shape, -np.inf), at_top=np.zeros(shape, dtype=np.intp))

    def add(self, frames: NDArray[np.generic]) -> None:
        if not len(frames):
            return
        high = frames.max(axis=0)
        self.low = np.minimum(self.low, frames.min(axis=0))
        self.high = np.maximum(self.high, high)
        top = float(np.nanmax(high))
        if top > self.top:
            self.top = top
            self.at_top[:] = 0
        if top == self.top:
            touched = high == top
            self.at_top[touched] += np.sum(frames[:, touched] == top, axis=0)

    def saturated(self, n_frames: int, full_scale: float | None) -> NDArray[np.bool_]:
        """Pixels at a ceiling: the end of the type's range, or a value many pixels stop at (a 12-bit camera's 4095)."""
        integer = full_scale is not None
        full = full_scale is not None and self.top >= full_scale
        often = self.at_top > max(0.001 * n_frames, 0 if full else 4)
        # counts of a few photons share their largest value by chance: a ceiling lies well above the darkest value
        piled_up = self.at_top.sum() >= 20 and self.top - float(np.min(self.low)) >= 16
        return often if full or (integer and piled_up) else np.zeros_like(often)


def _bleaching(frame_mean: FloatArray, offset: float) -> float:
    light = frame_mean[np.isfinite(frame_mean)] - offset
    if light.size < 2:
        return float("nan")
    edge = max(1, light.size // 20)
    first = float(np.median(light[:edge]))
    return 1.0 - float(np.median(light[-edge:])) / first if first > 0 else float("nan")
