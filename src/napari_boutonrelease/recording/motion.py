"""Movement of the sample: one rigid sub-pixel shift per frame, against a reference built from the recording itself.

First a sample of frames, spread over the recording, is aligned and averaged, coarsely and then finely; then every
frame is located on that average (`registration`). What noise adds to a slow drift is taken out again by following
the drift through time (`random_walk`). No frame is resampled but for the reference image.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import numpy as np

from ..checks import check_positive
from ..errors import InputError
from .cubic_convolution import DisplacedPixels, shift_frame_block
from .photon_transfer import photon_transfer_line, telling_pixels
from .random_walk import smooth_random_walk
from .registration import Fit, Reference
from .telling_directions import telling_directions
from .wiener import without_noise

if TYPE_CHECKING:
    from collections.abc import Callable

    from numpy.typing import NDArray

    from .light import Light
    from .movie import Movie

    FloatArray = NDArray[np.float64]

__all__ = ["Drift", "measure_drift", "no_drift"]

_MATCH = 0.5  # a frame that holds less than half of the structure it should does not show this reference
_SAMPLE_PIXELS = 25_000_000  # pixels of all frames that the reference is built from
_FEW_SAMPLES = 40  # frames of the sample that its first, coarse alignment takes
_ANCHOR_FRAMES = 8  # one frame in so many is looked for all over; the others near where their neighbours are


@dataclass(frozen=True, slots=True, kw_only=True)
class Drift:
    """Rigid movement of every frame. What lies at (y, x) in the reference lies at (y + dy, x + dx) in the frame.

    Attributes
    ----------
    dy_px, dx_px : (n_frames,) ndarray of float
        Drift, px; its median over the used frames is 0. Frames not used hold what their neighbours suggest.
    match : (n_frames,) ndarray of float
        How much of the reference's structure the frame shows: 1 as much as its light and noise let expect, 0 none.
    used : (n_frames,) ndarray of bool
        Frames that are good and match. The others must be left out of every fit.
    reference : (y, x) ndarray of float
        Mean of aligned frames, counts, in the coordinates that drift refers to.
    noise_px : float
        Typical standard error of one frame's shift along one direction before following the drift through time, px.
    corrected : bool
        False where nothing was corrected: not asked for, or nothing in the image to hold on to.
    """

    dy_px: FloatArray
    dx_px: FloatArray
    match: FloatArray
    used: NDArray[np.bool_]
    reference: FloatArray
    noise_px: float
    corrected: bool


def no_drift(*, light: Light) -> Drift:
    """Drift of 0 in every frame: no correction. Frames that `light` calls bad are not used."""
    n_frames = len(light.bad_frame)
    return Drift(
        dy_px=np.zeros(n_frames),
        dx_px=np.zeros(n_frames),
        match=np.where(light.bad_frame, 0.0, 1.0),
        used=~light.bad_frame,
        reference=light.mean_image,
        noise_px=float("nan"),
        corrected=False,
    )


def measure_drift(
    movie: Movie,
    *,
    light: Light,
    max_shift_px: float,
    block_frames: int,
    progress: Callable[[int, int], None] | None = None,
) -> Drift:
    """Measure the rigid movement of every frame.

    Movement along a direction that the image does not tell, or leaves in doubt by more than a pixel in one frame, is
    taken to be 0, because a correction would do harm: both directions of a blank image (the result is then that of
    `no_drift`), and the length of a straight axon without boutons.

    Parameters
    ----------
    movie : Movie
        The recording.
    light : Light
        Its noise, and the pixels and frames not to trust.
    max_shift_px : float
        Largest movement expected from the middle position along each axis, px, greater than 0.
    block_frames : int
        Frames held in memory at a time, at least 1.
    progress : callable, optional
        Called with (frames done, frames in all).

    Returns
    -------
    Drift

    Raises
    ------
    InputError
        If a setting is out of range.
    """
    check_positive("max_shift_px", max_shift_px, unit="px")
    if block_frames < 1:
        raise InputError(f"block_frames must be 1 or more (given {block_frames}).")
    n_frames, n_y, n_x = movie.shape
    max_shift_px = min(max_shift_px, n_y / 3, n_x / 3)
    sample = _sample_frames(light, n_y * n_x)
    if len(sample) < 4 or min(n_y, n_x) < 8:
        return no_drift(light=light)
    frames = np.concatenate([_numbers(movie.read(int(k), int(k) + 1)) for k in sample])
    _fill_dead(frames, light.dead)
    directions = telling_directions(frames, sample, light)
    if not directions.any():
        return no_drift(light=light)
    reference = _build_reference(frames, light, directions, max_shift_px)

    fits: list[Fit] = []
    good = np.flatnonzero(~light.bad_frame)
    for start in range(0, n_frames, block_frames):
        stop = min(start + block_frames, n_frames)
        here = ~light.bad_frame[start:stop]
        if here.any():
            block = _numbers(movie.read(start, stop))
            fits.append(_locate(reference, block if here.all() else block[here], max_shift_px))
        if progress is not None:
            progress(stop, n_frames)
    fit = Fit(**{name: np.concatenate([getattr(part, name) for part in fits]) for name in Fit.__slots__})

    match, matched = _judge(fit)
    inside = np.maximum(np.abs(fit.dy_px), np.abs(fit.dx_px)) < max_shift_px
    used = np.zeros(n_frames, dtype=np.bool_)
    used[good] = matched & inside
    whole_match, drift = np.zeros(n_frames), []
    whole_match[good] = match
    for measured, sd in ((fit.dy_px, fit.dy_sd_px), (fit.dx_px, fit.dx_sd_px)):
        raw, raw_sd = np.zeros(n_frames), np.ones(n_frames)
        raw[good], raw_sd[good] = measured, sd
        smooth = smooth_random_walk(raw, raw_sd, known=used)
        drift.append(smooth - np.median(smooth[used]) if used.any() else smooth)
    shown = np.flatnonzero(used[sample])
    if not shown.size:
        return no_drift(light=light)
    image, _ = _aligned_mean(frames, shown, drift[0][sample][shown], drift[1][sample][shown])
    return Drift(
        dy_px=drift[0],
        dx_px=drift[1],
        match=whole_match,
        used=used,
        reference=image,
        noise_px=float(np.median(np.hypot(fit.dy_sd_px, fit.dx_sd_px)) / np.sqrt(np.trace(directions))),
        corrected=True,
    )


def _sample_frames(light: Light, n_pixels: int) -> NDArray[np.intp]:
    """Frames for the reference: pairs of successive good frames, spread evenly over the recording."""
    good = ~light.bad_frame
    firsts = np.flatnonzero(good[:-1] & good[1:])
    n_pairs = int(np.clip(_SAMPLE_PIXELS // n_pixels, 60, 1000)) // 2
    if len(firsts) > n_pairs:
        firsts = firsts[np.linspace(0, len(firsts) - 1, n_pairs).round().astype(int)]
    return np.union1d(firsts, firsts + 1)


def _numbers(frames: NDArray[np.generic]) -> NDArray[np.generic]:
    """Return frames without NaN or infinity; pixels that hold them are dead and have no weight."""
    if np.issubdtype(frames.dtype, np.floating):
        return np.where(np.isfinite(frames), frames, 0)
    return frames


def _fill_dead(frames: NDArray[np.generic], dead: NDArray[np.bool_]) -> None:
    """Give dead pixels the value of their nearest neighbour, so that the mean image has no holes."""
    from scipy.ndimage import distance_transform_edt

    if dead.any() and not dead.all():
        y, x = distance_transform_edt(dead, return_distances=False, return_indices=True)
        frames[:, dead] = frames[:, y[dead], x[dead]]


def _build_reference(
    frames: NDArray[np.generic], light: Light, directions: FloatArray, max_shift_px: float
) -> Reference:
    """Align the sampled frames with each other, in three rounds, and average them."""
    middle = len(frames) // 2
    seed = frames[max(0, middle - 4) : middle + 4]
    image, n_seen = _aligned_mean(seed, np.arange(len(seed)), np.zeros(len(seed)), np.zeros(len(seed)))
    variance_at: Callable[[FloatArray], FloatArray] = light.variance_at
    reach = 2.0 * max_shift_px  # the middle frame may itself lie at one end of the drift
    few = frames[:: max(1, len(frames) // _FEW_SAMPLES)]
    for finely, chosen in ((False, few), (True, few), (True, frames)):
        reference = _reference(image, n_seen, light, directions, variance_at)
        dy, dx = reference.find(chosen, max_shift_px=reach)
        factor = np.ones(len(chosen))
        if finely:
            fit = reference.locate(chosen, dy=dy, dx=dx, max_shift_px=reach)
            dy, dx, factor = fit.dy_px, fit.dx_px, np.clip(fit.brightness, 0.25, 4.0)
        dy, dx = dy - np.median(dy), dx - np.median(dx)
        near = np.flatnonzero(np.maximum(np.abs(dy), np.abs(dx)) <= max_shift_px)
        dy, dx, factor = dy[near], dx[near], factor[near] / np.mean(factor[near])
        image, n_seen = _aligned_mean(chosen, near, dy, dx, factor=factor, offset=light.offset_counts)
        if finely and variance_at == light.variance_at:
            variance_at = _noise_at_rest(chosen, near, dy, dx, factor, image, light)
    return _reference(image, n_seen, light, directions, variance_at)


def _noise_at_rest(
    frames: NDArray[np.generic],
    chosen: NDArray[np.intp],
    dy: FloatArray,
    dx: FloatArray,
    factor: FloatArray,
    image: FloatArray,
    light: Light,
) -> Callable[[FloatArray], FloatArray]:
    """Noise of a pixel with the movement taken out: a sample that trembles looks noisier than its light is."""
    inside = np.zeros(image.shape, dtype=np.bool_)
    margin_y, margin_x = (int(np.ceil(np.abs(shift).max())) + 1 for shift in (dy, dx))
    inside[margin_y:-margin_y, margin_x:-margin_x] = True
    _, pixels = telling_pixels(image, inside & ~(light.dead | light.saturated))
    few = np.linspace(0, len(chosen) - 1, min(len(chosen), 20)).round().astype(int)
    image_at = DisplacedPixels(image - light.offset_counts, pixels)
    expected = np.array([factor[k] * image_at.read(dy=-dy[k], dx=-dx[k]) for k in few]) + light.offset_counts
    error = np.array([frames[chosen[k]].flat[pixels] for k in few]) - expected
    gain, _, intercept = photon_transfer_line(expected.mean(axis=0), np.mean(error**2, axis=0), n_frames=len(few))
    if not gain < light.gain:
        return light.variance_at
    return replace(light, gain=gain, read_variance=intercept).variance_at


def _reference(
    image: FloatArray,
    n_seen: FloatArray,
    light: Light,
    directions: FloatArray,
    variance_at: Callable[[FloatArray], FloatArray],
) -> Reference:
    from scipy.ndimage import binary_dilation

    variance = variance_at(image)
    return Reference(
        image=without_noise(image, noise_variance=float(np.mean(variance / np.maximum(n_seen, 1.0)))),
        variance=variance,
        known=n_seen > 0.2 * n_seen.max(),
        usable=~(binary_dilation(light.saturated) | light.dead),
        directions=directions,
    )


def _aligned_mean(
    frames: NDArray[np.generic],
    chosen: NDArray[np.intp],
    dy: FloatArray,
    dx: FloatArray,
    *,
    factor: FloatArray | None = None,
    offset: float = 0.0,
) -> tuple[FloatArray, FloatArray]:
    """Mean of frames in reference coordinates at their mean brightness, and how many of them saw each pixel."""
    n, (n_y, n_x) = len(chosen), frames.shape[1:]
    factor = np.ones(n) if factor is None else factor
    total, seen, filled = np.zeros((n_y, n_x)), np.zeros((n_y, n_x)), np.zeros((n_y, n_x))
    for k in range(n):
        image = shift_frame_block(frames[chosen[k]][None], dy=dy[k : k + 1], dx=dx[k : k + 1])[0]
        image *= np.float32(1.0 / factor[k])
        image += np.float32(offset * (1.0 - 1.0 / factor[k]))
        inside = tuple(
            slice(max(0, int(np.ceil(-shift))), max(0, min(size, int(np.floor(size - shift)))))
            for size, shift in ((n_y, dy[k]), (n_x, dx[k]))
        )
        total[inside] += image[inside]
        seen[inside] += 1.0
        filled += image
    return np.where(seen > 0, total / np.maximum(seen, 1.0), filled / n), seen


def _locate(reference: Reference, frames: NDArray[np.generic], max_shift_px: float) -> Fit:
    """Find and locate frames: some of them all over, the others from where these are.

    Frames that hold less of the reference's structure than the others do, because the sample jumped, are looked for all
    over, too; and those that lie apart from their neighbours are tried from there.
    """
    from scipy.ndimage import median_filter

    everywhere = np.arange(len(frames))
    anchors = everywhere[_ANCHOR_FRAMES // 2 :: _ANCHOR_FRAMES] if len(frames) > _ANCHOR_FRAMES else everywhere
    found = reference.find(frames[anchors], max_shift_px=max_shift_px)
    dy, dx = (np.interp(everywhere, anchors, shift) for shift in found)
    fit = reference.locate(frames, dy=dy, dx=dx, max_shift_px=max_shift_px)

    def try_again(which: NDArray[np.intp], dy: FloatArray, dx: FloatArray) -> None:
        again = reference.locate(frames[which], dy=dy, dx=dx, max_shift_px=max_shift_px)
        better = again.misfit < fit.misfit[which]
        for name in Fit.__slots__:
            getattr(fit, name)[which[better]] = getattr(again, name)[better]

    noise = np.sqrt(fit.misfit / np.maximum(fit.signal, 1e-300))
    lost = np.flatnonzero(fit.brightness < 0.97 * np.median(fit.brightness) - 1.5 * noise)
    lost = lost[~np.isin(lost, anchors)]
    if lost.size:
        try_again(lost, *reference.find(frames[lost], max_shift_px=max_shift_px))
    usual_y, usual_x = (median_filter(shift, size=9, mode="nearest") for shift in (fit.dy_px, fit.dx_px))
    apart = np.flatnonzero(np.hypot(fit.dy_px - usual_y, fit.dx_px - usual_x) > 1.0)
    if apart.size:
        try_again(apart, usual_y[apart], usual_x[apart])
    return reference.locate_despite_flashes(frames, fit, max_shift_px=max_shift_px)


def _judge(fit: Fit) -> tuple[FloatArray, NDArray[np.bool_]]:
    """Match of each frame, from the correlation found over that expected at the light of its part of the recording."""
    n = len(fit.dy_px)
    parts = np.array_split(np.arange(n), int(np.clip(n // 50, 1, 20)))
    centres = [float(part.mean()) for part in parts]
    usual_brightness, usual_misfit = (
        np.interp(np.arange(n), centres, [float(np.median(values[part])) for part in parts])
        for values in (fit.brightness, fit.misfit)
    )

    def correlation(brightness: FloatArray, misfit: FloatArray) -> FloatArray:
        explained = np.maximum(brightness, 0.0) ** 2 * fit.signal
        result: FloatArray = np.sqrt(explained / np.maximum(explained + misfit * fit.n_pixels, 1e-300))
        return result

    expected = correlation(usual_brightness, usual_misfit)
    match = np.clip(correlation(fit.brightness, fit.misfit) / np.maximum(expected, 1e-12), 0.0, 1.0)
    # photon noise alone scatters the match of dim frames: no frame is given up for it
    scatter = np.sqrt(usual_misfit / np.maximum(fit.signal, 1e-300)) / np.maximum(usual_brightness, 1e-12)
    return match, match >= np.clip(1.0 - 5.0 * scatter, 0.0, _MATCH)
