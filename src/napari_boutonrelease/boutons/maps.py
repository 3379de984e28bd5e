"""Response maps: every pixel projected on the response shape, at the stimuli and where nothing was stimulated."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import numpy as np

from ..errors import TooFewResponsesError
from ..recording.cubic_convolution import shift_frame_block
from .evidence import matched_filter
from .windows import Projection, null_windows, project, trial_windows

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from ..recording import Movie, Timing
    from ..recording.motion import Drift
    from ..response_shape import ResponseShape

Progress = Callable[[int, int], None]

_STILL_PX = 0.02  # movement that is neglected within a sum of frames
_PIXELS_AT_ONCE = 16_384
_MAX_NULL = 2.0  # null maps wanted per evoked map, at most
_ENOUGH_NULL = 20
_CLEAR_SD = 5.0
_SCAN_RESPONSES = 3  # pulses, or groups of them, that may differ in height while the time course is guessed


@dataclass(frozen=True, slots=True, kw_only=True)
class ResponseStack:
    """Response of every pixel to every pulse, and the same where nothing was stimulated.

    Attributes
    ----------
    evoked : (n_evoked, y, x) ndarray of float32
        Amplitude (counts) of one pulse of one trial; `evoked_trial` and `evoked_pulse` say which.
    evoked_trial, evoked_pulse : (n_evoked,) ndarray of int
        Index of trial and pulse, from 0.
    evoked_factor, null_factor : (n,) ndarray
        SD of a map's pixel in units of the SD of one frame's pixel.
    evoked_correlation : tuple of (n_pulses, n_pulses) ndarray
        Correlation of the noise of the maps of each trial, trial by trial in the order of `evoked`.
    null : (n_null, y, x) ndarray of float32
        The same at pseudo-stimuli, or from differences of trials.
    null_from : str
        `gaps` (pseudo-stimuli in stimulus-free time) or `differences` (of successive trials, divided by sqrt(2): there
        is no stimulus-free time; the releases in them make the noise of a bouton look larger than it is).
    mean_image : (y, x) ndarray
        Mean of the movement-corrected frames (counts).
    shape : ResponseShape
        Time course the pixels were projected on.
    """

    evoked: NDArray[np.float32]
    evoked_trial: NDArray[np.intp]
    evoked_pulse: NDArray[np.intp]
    evoked_factor: NDArray[np.float64]
    evoked_correlation: tuple[NDArray[np.float64], ...]
    null: NDArray[np.float32]
    null_factor: NDArray[np.float64]
    null_from: str
    mean_image: NDArray[np.float64]
    shape: ResponseShape


def project_responses(
    movie: Movie,
    *,
    timing: Timing,
    drift: Drift,
    shape: ResponseShape,
    pre_s: float,
    post_s: float,
    memory_bytes: float,
    block_frames: int,
    progress: Progress | None,
) -> ResponseStack:
    """Fit the response shape at every pixel to every pulse, in one pass over the movie.

    Each pulse of each trial gives one map: a least-squares fit of an offset and all pulses of the trial to the frames
    from `pre_s` before the first to `post_s` after the last pulse. Frames that moved are resampled by cubic
    convolution; bad frames are left out of the fit. Only the frames inside windows are read.

    Parameters
    ----------
    movie : Movie
    timing : Timing
    drift : Drift
    shape : ResponseShape
        Time course of a response.
    pre_s, post_s : float
        Baseline before the first and response after the last pulse (s).
    memory_bytes : float
        Most memory for the maps. If all pulses do not fit, the later pulses of all trials are left out; if not even the
        first pulses fit, trials are taken evenly.
    block_frames : int
        Frames read at a time.
    progress : callable or None
        Called with (done, total) blocks.

    Returns
    -------
    ResponseStack

    Raises
    ------
    TooFewResponsesError
        If fewer than two pulses can be fitted, or neither stimulus-free time nor a second trial shows the noise.
    """
    height, width = movie.shape[1:]
    most = max(int(memory_bytes / (4 * height * width)), 16)
    evoked = project(
        trial_windows(timing, used=drift.used, shape=shape, pre_s=pre_s, post_s=post_s),
        timing=timing,
        shape=shape,
        height_px=height,
    )
    evoked = _thin(evoked, most=most // 2)
    n_evoked = sum(len(projection.factor) for projection in evoked)
    if n_evoked < 2:
        raise TooFewResponsesError(
            f"{movie.name}: {n_evoked} of {len(timing.stimulus_s)} trials can be fitted with a baseline of {pre_s:g} s "
            f"and a response of {post_s:g} s; at least 2 are needed. Check the stimulus times, the frame interval and "
            "the frames left out."
        )
    null = project(
        null_windows(timing, used=drift.used, shape=shape, pre_s=pre_s, post_s=post_s),
        timing=timing,
        shape=shape,
        height_px=height,
    )
    null = _evenly(null, most=min(int(_MAX_NULL * n_evoked), most - n_evoked))
    null = null if len(null) >= min(_ENOUGH_NULL, n_evoked / 2) else []
    maps, mean_image = _accumulate(
        movie, drift=drift, projections=[*evoked, *null], block_frames=block_frames, progress=progress
    )
    stack = ResponseStack(
        evoked=maps[:n_evoked],
        evoked_trial=np.concatenate([np.full(len(one.factor), one.window.trial) for one in evoked]),
        evoked_pulse=np.concatenate([one.window.pulses[: len(one.factor)] for one in evoked]),
        evoked_factor=np.concatenate([one.factor for one in evoked]),
        evoked_correlation=tuple(one.correlation for one in evoked),
        null=maps[n_evoked:],
        null_factor=np.concatenate([one.factor for one in null]) if null else np.empty(0),
        null_from="gaps",
        mean_image=mean_image,
        shape=shape,
    )
    return stack if null else _with_differences(stack)


def scan_shapes(
    movie: Movie,
    *,
    timing: Timing,
    drift: Drift,
    candidates: Sequence[ResponseShape],
    pre_s: float,
    post_s: float,
    spot_sigma_px: float,
    block_frames: int,
    progress: Progress | None,
) -> NDArray[np.float64]:
    """How clearly each candidate shape shows in the mean response, for a first guess of the reporter's kinetics.

    Parameters
    ----------
    movie, timing, drift, pre_s, post_s, block_frames, progress
        As for `project_responses`.
    candidates : sequence of n ResponseShape
        Shapes to compare.
    spot_sigma_px : float
        Gaussian sigma of a bouton's image (px).

    Returns
    -------
    (n,) ndarray
        Sum over the clear local responses of the squared signal-to-noise ratio; the largest fits best. All 0 where
        nothing is clear under any of them.
    """
    from scipy.ndimage import maximum_filter

    means: list[Projection] = []
    owner: list[int] = []
    for index, shape in enumerate(candidates):
        windows = trial_windows(timing, used=drift.used, shape=shape, pre_s=pre_s, post_s=post_s)
        projections = project(
            windows, timing=timing, shape=shape, height_px=movie.shape[1], most_responses=_SCAN_RESPONSES
        )
        means += [_independent(projection) for projection in projections]
        owner += [_SCAN_RESPONSES * index] * len(projections)
    if not means:
        return np.zeros(len(candidates))
    maps, mean_image = _accumulate(
        movie,
        drift=drift,
        projections=means,
        block_frames=block_frames,
        progress=progress,
        slots=np.asarray(owner),
        n_slots=_SCAN_RESPONSES * len(candidates),
    )
    # One frame's noise variance follows the light; its scale drops out of the comparison.
    light = np.maximum(mean_image - np.min(mean_image), 0.02 * np.ptp(mean_image) + 1e-9)
    z = matched_filter(maps, inverse_variance=1.0 / light, spot_sigma_px=spot_sigma_px)
    filled = z[z.any(axis=(1, 2))]  # one SD for all: that of each map is too uncertain to compare them by
    sd = 1.482602 * float(np.median(np.abs(filled))) if len(filled) else 0.0
    z /= np.float32(sd if sd > 0 else np.inf)
    power = np.sum(np.maximum(z, 0.0).reshape(len(candidates), _SCAN_RESPONSES, *mean_image.shape) ** 2, axis=1)
    highest = power.max(axis=0)
    places = (highest > _CLEAR_SD**2) & (highest >= maximum_filter(highest, size=2 * round(2 * spot_sigma_px) + 1))
    return np.asarray(np.sum(power[:, places], axis=1, dtype=np.float64))


def _independent(projection: Projection) -> Projection:
    """Combine the amplitudes of a window to ones of independent unit noise, each as near to its own as can be."""
    values, vectors = np.linalg.eigh(projection.correlation)
    root = (vectors / np.sqrt(np.maximum(values, 1e-6))) @ vectors.T / projection.factor
    weights = np.matmul(root.astype(np.float32), projection.weights)
    return replace(projection, weights=weights, factor=np.ones(len(root)), correlation=np.eye(len(root)))


def _thin(projections: list[Projection], *, most: int) -> list[Projection]:
    """Leave out later pulses, then trials, until at most `most` maps remain."""
    n_pulses = max((len(one.factor) for one in projections), default=0)
    while n_pulses > 1 and sum(min(len(one.factor), n_pulses) for one in projections) > most:
        n_pulses -= 1
    cut = [
        replace(
            one,
            weights=one.weights[:, :n_pulses],
            factor=one.factor[:n_pulses],
            correlation=one.correlation[:n_pulses, :n_pulses],
        )
        for one in projections
    ]
    return _evenly(cut, most=most) if n_pulses == 1 else cut


def _evenly(projections: list[Projection], *, most: int) -> list[Projection]:
    if len(projections) <= most:
        return projections
    return [projections[i] for i in np.linspace(0, len(projections) - 1, max(most, 0)).round().astype(int)]


def _accumulate(
    movie: Movie,
    *,
    drift: Drift,
    projections: Sequence[Projection],
    block_frames: int,
    progress: Progress | None,
    slots: NDArray[np.intp] | None = None,
    n_slots: int = 0,
) -> tuple[NDArray[np.float32], NDArray[np.float64]]:
    """Sum weights times frames: one map a pulse of each projection; and the mean of all frames used.

    With `slots`, the first map of each projection, projections share maps: `n_slots` in all.
    """
    n_frames, height, width = movie.shape
    first_map = np.cumsum([0, *(len(one.factor) for one in projections)]) if slots is None else slots
    n_maps = int(first_map[-1]) if slots is None else n_slots
    maps = np.zeros((n_maps, height, width), dtype=np.float32)
    total = np.zeros((height, width))
    wanted = np.zeros(n_frames, dtype=np.bool_)
    for one in projections:
        wanted[one.window.frames] = True
    n_rows = projections[0].weights.shape[0]
    starts = [start for start in range(0, n_frames, block_frames) if wanted[start : start + block_frames].any()]
    for done, start in enumerate(starts):
        chosen = start + np.flatnonzero(wanted[start : start + block_frames])
        frames = movie.read(int(chosen[0]), int(chosen[-1]) + 1)
        frames = frames if len(frames) == len(chosen) else frames[chosen - chosen[0]]
        weights: dict[int, NDArray[np.float32]] = {}
        for index, one in enumerate(projections):
            if one.window.frames[-1] < chosen[0] or one.window.frames[0] > chosen[-1]:
                continue
            mine = np.isin(one.window.frames, chosen, assume_unique=True)
            places = np.searchsorted(chosen, one.window.frames[mine])
            for response, row in enumerate(one.weights.transpose(1, 0, 2)[:, :, mine], start=int(first_map[index])):
                spread = weights.setdefault(response, np.zeros((n_rows, len(chosen)), dtype=np.float32))
                spread[:, places] += row
        together = np.stack([np.ones((n_rows, len(chosen)), dtype=np.float32), *weights.values()], axis=1)
        targets = [total, *(maps[target] for target in weights)]
        _add_aligned(targets, frames, together, dy=drift.dy_px[chosen], dx=drift.dx_px[chosen])
        if progress is not None:
            progress(done + 1, len(starts))
    return maps, total / max(int(wanted.sum()), 1)


def _add_aligned(
    targets: Sequence[NDArray[np.floating]],
    frames: NDArray[np.generic],
    weights: NDArray[np.float32],
    *,
    dy: NDArray[np.float64],
    dx: NDArray[np.float64],
) -> None:
    """Add weighted sums of frames in reference coordinates: weights (rows or 1, n_targets, n_frames).

    Summing and resampling may change places. Frames that lie within `_STILL_PX` of each other are summed first and
    resampled together, which is most of the work saved where a sample drifts slowly.
    """
    cells = np.round(np.stack([dy, dx]) / (2 * _STILL_PX)).astype(int)
    unique, cell_of = np.unique(cells, axis=1, return_inverse=True)
    for cell in range(unique.shape[1]):
        members = np.flatnonzero(cell_of.ravel() == cell)
        part, mine = frames[members] if len(members) < len(frames) else frames, weights[:, :, members]
        # a sum to which none of these frames adds need not be resampled
        adds = np.flatnonzero(mine.any(axis=(0, 2)))
        mine, here = mine[:, adds], [targets[i] for i in adds.tolist()]
        if not unique[:, cell].any():
            _add_sums(here, part, mine)
        elif len(members) <= len(here):
            _add_sums(here, shift_frame_block(part, dy=dy[members], dx=dx[members]), mine)
        else:
            middle = [np.full(len(here), shift[members].mean()) for shift in (dy, dx)]
            sums = np.zeros((len(here), *frames.shape[1:]), dtype=np.float32)
            _add_sums(list(sums), part, mine)
            for target, moved in zip(here, shift_frame_block(sums, dy=middle[0], dx=middle[1]), strict=True):
                target += moved


def _add_sums(
    targets: Sequence[NDArray[np.floating]], frames: NDArray[np.generic], weights: NDArray[np.float32]
) -> None:
    """Add the products of weights (rows or 1, n_targets, n_frames) and frames, some rows at a time to stay small."""
    n_frames, height, width = frames.shape
    rows = max(1, _PIXELS_AT_ONCE // width)
    for start in range(0, height, rows):
        strip = frames[:, start : start + rows].astype(np.float32)
        if len(weights) == 1:
            sums = (weights[0] @ strip.reshape(n_frames, -1)).reshape(len(targets), -1, width)
        else:
            sums = np.matmul(weights[start : start + rows], strip.transpose(1, 0, 2)).transpose(1, 0, 2)
        for target, part in zip(targets, sums, strict=True):
            target[start : start + rows] += part


def _with_differences(stack: ResponseStack) -> ResponseStack:
    """Null maps from successive maps of the same pulse: what both have in common cancels."""
    earlier, later = [], []
    for pulse in np.unique(stack.evoked_pulse):
        same = np.flatnonzero(stack.evoked_pulse == pulse)
        earlier.append(same[:-1])
        later.append(same[1:])
    first, second = np.concatenate(earlier), np.concatenate(later)
    if not len(first):
        raise TooFewResponsesError(
            "The recording holds neither two trials of the same pulse nor stimulus-free time: its noise cannot be "
            "measured. Record more trials."
        )
    null = (stack.evoked[first] - stack.evoked[second]) / np.float32(np.sqrt(2))
    factor = np.sqrt((stack.evoked_factor[first] ** 2 + stack.evoked_factor[second] ** 2) / 2)
    return replace(stack, null=null, null_factor=factor, null_from="differences")
