"""Maps of the response to every pulse, and the time course with which to look for it."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from ..boutons import ResponseStack, project_responses, scan_shapes
from ..boutons.windows import project, trial_windows
from ..response_shape import ResponseShape
from .recording_step import BLOCK_FRAMES

if TYPE_CHECKING:
    from ..recording import Timing
    from .progress import Progress
    from .recording_step import Recording

_MAP_BYTES = 500e6
_CANDIDATE_RATIO = 1.6
_RISE_OF_DECAY = 0.04
_LATENCY_S = 0.002  # conduction along the axon and the release itself


def guess_shape(recording: Recording, *, spot_sigma_px: float, progress: Progress | None) -> ResponseShape | None:
    """Guess the reporter's time course from which of several shows most clearly in the mean response.

    Returns
    -------
    ResponseShape or None
        None where nothing responds clearly under any of them.
    """
    timing = recording.timing
    room_s = _room_s(timing)
    decay = 1.5 * timing.frame_interval_s
    decays = [decay]
    while decays[-1] * _CANDIDATE_RATIO <= room_s / 2:
        decays.append(decays[-1] * _CANDIDATE_RATIO)
    candidates = [_guessed(decay) for decay in decays]
    pre_s, post_s = _window_s(timing, candidates[len(candidates) // 2])
    scores = scan_shapes(
        recording.movie,
        timing=timing,
        drift=recording.drift,
        candidates=candidates,
        pre_s=pre_s,
        post_s=post_s,
        spot_sigma_px=spot_sigma_px,
        block_frames=BLOCK_FRAMES,
        progress=progress,
    )
    if np.max(scores) <= 0:
        return None
    best = int(np.argmax(scores))
    between = 0.0
    if 0 < best < len(scores) - 1:  # a parabola through the best and its neighbours
        before, here, after = scores[best - 1 : best + 2]
        between = 0.5 * float((before - after) / (before - 2.0 * here + after)) if 2.0 * here > before + after else 0.0
    return _guessed(decays[best] * _CANDIDATE_RATIO**between)


def _guessed(decay_s: float) -> ResponseShape:
    rise_s = max(_RISE_OF_DECAY * decay_s, 1e-4)
    return ResponseShape(latency_s=_LATENCY_S, rise_s=rise_s, decay_s=decay_s, slow_fraction=0.0)


def map_responses(recording: Recording, shape: ResponseShape, *, progress: Progress | None) -> ResponseStack:
    """Project every pixel on the response to every pulse, and on pseudo-stimuli.

    Raises
    ------
    TooFewResponsesError
        If fewer than two pulses can be fitted.
    """
    pre_s, post_s = _window_s(recording.timing, shape)
    return project_responses(
        recording.movie,
        timing=recording.timing,
        drift=recording.drift,
        shape=shape,
        pre_s=pre_s,
        post_s=post_s,
        memory_bytes=_MAP_BYTES,
        block_frames=BLOCK_FRAMES,
        progress=progress,
    )


def seen_through(recording: Recording, *, looked_for: ResponseShape, true: ResponseShape) -> tuple[float, float]:
    """Tell what maps of one time course show of responses of another.

    Returns
    -------
    gain : float
        Height in the maps of a response of height 1, mean over the trials' first pulses.
    light_share : float
        Mean light of such a response in the frames that decide, weighted as the noise of a map weighs them.
    """
    timing = recording.timing
    pre_s, post_s = _window_s(timing, looked_for)
    used = recording.drift.used
    windows = trial_windows(timing, used=used, shape=looked_for, pre_s=pre_s, post_s=post_s)
    gains, shares = [], []
    for one in project(windows, timing=timing, shape=looked_for, height_px=1):
        weights = one.weights[0, 0].astype(np.float64)
        since = timing.frame_start_s[one.window.frames] - one.window.stimulus_s[0]
        seen = true.frame_average(since, exposure_s=timing.exposure_s)
        gains.append(float(weights @ seen))
        shares.append(float(weights**2 @ seen / np.sum(weights**2)))
    return (float(np.mean(gains)), float(np.mean(shares))) if gains else (1.0, 1.0)


def _window_s(timing: Timing, shape: ResponseShape) -> tuple[float, float]:
    """Time before the first and after the last pulse that response maps use, in s.

    Long enough for the offset and the response; short enough to fit, for the null maps, into stimulus-free time.
    """
    after = shape.latency_s + 3.0 * shape.rise_s + 3.0 * shape.decay_s
    before = 2.0 * shape.decay_s
    least = 3.0 * timing.frame_interval_s
    free = _room_s(timing) - 5.0 * shape.decay_s
    shrink = min(1.0, max(free / (before + after), 0.4))
    return max(before * shrink, least), max(after * shrink, least)


def _room_s(timing: Timing) -> float:
    """Time from a trial's last pulse to the next trial or the end of its file, typically, in s."""
    first = np.nanmin(timing.stimulus_s, axis=1)
    last = np.nanmax(timing.stimulus_s, axis=1)
    ends = np.array([timing.frame_start_s[timing.segment == k][-1] for k in timing.trial_segment])
    following = np.minimum(np.append(first[1:], np.inf), ends + timing.frame_interval_s)
    gaps = following - last
    return float(max(np.median(gaps[gaps > 0]) if np.any(gaps > 0) else 0.0, 4.0 * timing.frame_interval_s))
