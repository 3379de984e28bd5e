"""When each frame was exposed and each stimulus given, on one clock."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import ArrayLike, NDArray

from ..errors import ProtocolError
from .protocol import Protocol, check_exposure
from .stimuli import RegularStimuli, StimulusTable

if TYPE_CHECKING:
    from .movie import Movie

_ROUNDING_FRAMES = 1e-6  # a stimulus this little before a frame's start falls into that frame


@dataclass(frozen=True, slots=True, kw_only=True)
class Timing:
    """Frames and stimuli on one clock that starts with the movie and runs file after file, without gaps.

    Attributes
    ----------
    frame_interval_s, exposure_s, row_time_s : float
        See `Protocol`.
    pixel_size_um, camera_offset : float or None
        None where neither the protocol nor the movie says.
    found_in : dict of str to str
        Where each of the five was found.
    frame_start_s : (n_frames,) ndarray of float
        Start of the exposure of the first row.
    segment : (n_frames,) ndarray of int
        File, from 0, that a frame belongs to; a response never reaches into another.
    stimulus_s : (n_trials, n_pulses) ndarray of float
        NaN where a trial has no such pulse; increasing within a trial.
    trial_segment : (n_trials,) ndarray of int
        Segment in which a trial lies.
    """

    frame_interval_s: float
    exposure_s: float
    row_time_s: float
    pixel_size_um: float | None
    camera_offset: float | None
    found_in: dict[str, str]
    frame_start_s: NDArray[np.float64]
    segment: NDArray[np.int64]
    stimulus_s: NDArray[np.float64]
    trial_segment: NDArray[np.int64]


def resolve_timing(movie: Movie, protocol: Protocol) -> Timing:
    """Bring the movie's metadata and the protocol onto one clock; what the protocol states wins.

    Parameters
    ----------
    movie : Movie
    protocol : Protocol

    Returns
    -------
    Timing

    Raises
    ------
    ProtocolError
        If the frame interval is nowhere stated, exposure or row time do not fit it, the number of files is not the
        number of trials, or a stimulus lies outside the movie.
    """
    found_in: dict[str, str] = {}
    interval = _choose("frame_interval_s", movie, protocol, found_in)
    if interval is None:
        raise ProtocolError(
            f"The frame interval of {movie.name} is stated neither by the movie nor by the protocol: add "
            "frame_interval_s = ... (in s) to [recording] of the protocol."
        )
    pixel_size = _choose("pixel_size_um", movie, protocol, found_in)
    exposure, row_time = protocol.exposure_s, protocol.row_time_s
    found_in["exposure_s"] = "protocol" if exposure is not None else "default: the frame interval"
    found_in["row_time_s"] = "protocol" if row_time is not None else "default: all rows at once"
    found_in["camera_offset"] = "protocol" if protocol.camera_offset is not None else "not stated"
    exposure = interval if exposure is None else exposure
    row_time = 0.0 if row_time is None else row_time
    check_exposure(exposure, interval)
    height = movie.shape[1]
    if row_time * height > interval * (1 + 1e-6):
        raise ProtocolError(
            f"[recording] row_time_s = {row_time:g} makes the {height} rows of {movie.name} take "
            f"{row_time * height:g} s, longer than a frame of {interval:g} s: check row_time_s and frame_interval_s."
        )
    file_frames = np.asarray(movie.file_frames)
    stimulus_s = _stimuli(movie, protocol.stimuli)
    n_files = len(file_frames)
    trial_segment = np.arange(len(stimulus_s)) if n_files > 1 else np.zeros(len(stimulus_s), dtype=np.int64)
    _check_inside(movie, protocol.stimuli, stimulus_s, file_frames * interval, interval)
    file_start_s = interval * (np.cumsum(file_frames) - file_frames)
    return Timing(
        frame_interval_s=interval,
        exposure_s=exposure,
        row_time_s=row_time,
        pixel_size_um=pixel_size,
        camera_offset=protocol.camera_offset,
        found_in=found_in,
        frame_start_s=interval * np.arange(movie.shape[0], dtype=np.float64),
        segment=np.repeat(np.arange(n_files), file_frames),
        stimulus_s=stimulus_s + file_start_s[trial_segment][:, None],
        trial_segment=trial_segment,
    )


def frame_times_s(timing: Timing, y_px: ArrayLike) -> NDArray[np.float64]:
    """Start of each frame's exposure at image rows, in s.

    Parameters
    ----------
    timing : Timing
    y_px : array_like of float
        Rows, any shape; rows between two are taken in proportion.

    Returns
    -------
    (..., n_frames) ndarray
        The shape of `y_px`, then frames.
    """
    return timing.row_time_s * np.asarray(y_px, dtype=np.float64)[..., None] + timing.frame_start_s


def stimulus_frame(timing: Timing) -> NDArray[np.int64]:
    """Frame during which each stimulus was given, (n_trials, n_pulses); -1 where there is none."""
    present = np.isfinite(timing.stimulus_s)
    frames = np.where(present, timing.stimulus_s, 0.0) / timing.frame_interval_s + _ROUNDING_FRAMES
    return np.where(present, np.floor(frames), -1).astype(np.int64)


def segment_frames(timing: Timing, segment: int) -> slice:
    """Return the frames of one segment."""
    start, stop = np.searchsorted(timing.segment, [segment, segment + 1])
    return slice(int(start), int(stop))


def _choose(key: str, movie: Movie, protocol: Protocol, found_in: dict[str, str]) -> float | None:
    """Value of a key that both the protocol and the movie may state; notes where it was found."""
    stated: float | None = getattr(protocol, key)
    in_movie: float | None = getattr(movie, key)
    where = movie.found_in.get(key, "movie")
    if stated is None:
        found_in[key] = where if in_movie is not None else "not stated"
        return in_movie
    differs = in_movie is not None and abs(in_movie - stated) > 0.01 * stated
    found_in[key] = f"protocol ({where} says {in_movie:g})" if differs else "protocol"
    return stated


def _stimuli(movie: Movie, stimuli: RegularStimuli | StimulusTable) -> NDArray[np.float64]:
    """Pulse times (trial, pulse) from the start of the movie, or of each trial's file."""
    n_files, n_trials = len(movie.file_frames), stimuli.trials
    if n_files > 1 and n_trials != n_files:
        raise ProtocolError(
            f"{movie.name} is {n_files} files, one a trial, but the protocol has {n_trials} trials: set trials to "
            f"{n_files}, or leave out the files that are no trials."
        )
    if isinstance(stimuli, StimulusTable):
        times = np.full((n_trials, stimuli.pulses), np.nan)
        times[stimuli.trial - 1, stimuli.pulse - 1] = stimuli.time_s
        return times
    if n_files == 1 and n_trials > 1 and stimuli.trial_interval_s is None:
        raise ProtocolError(
            f"[stimuli] trial_interval_s is missing: {movie.name} is one movie of {n_trials} trials. Add it, in s."
        )
    first = np.zeros(n_trials) if n_files > 1 else np.arange(n_trials) * (stimuli.trial_interval_s or 0.0)
    return stimuli.first_s + first[:, None] + np.arange(stimuli.pulses) * (stimuli.pulse_interval_s or 0.0)


def _check_inside(
    movie: Movie,
    stimuli: RegularStimuli | StimulusTable,
    stimulus_s: NDArray[np.float64],
    file_s: NDArray[np.float64],
    interval: float,
) -> None:
    """Refuse stimuli after the end of the movie, or of their file."""
    what_to_check = "trials" if isinstance(stimuli, RegularStimuli) else "times"
    if len(file_s) == 1:
        n_stimuli, n_inside = int(np.isfinite(stimulus_s).sum()), int((stimulus_s < file_s[0]).sum())
        if n_inside < n_stimuli:
            raise ProtocolError(
                f"Protocol has {n_stimuli} stimuli but the movie ends after {n_inside} ({file_s[0]:.1f} s at "
                f"{interval:.3f} s a frame): check frame_interval_s or {what_to_check}."
            )
        in_order = np.sort(stimulus_s[np.isfinite(stimulus_s)])
        twice = in_order[1:][np.diff(in_order) <= 0]
        if twice.size:
            raise ProtocolError(f"Two trials have a stimulus at the same time, {twice[0]:g} s: check {what_to_check}.")
        return
    last = np.nanmax(stimulus_s, axis=1)
    outside = last >= file_s
    if outside.any():
        k = int(np.argmax(outside))
        name = movie.files[k].name if len(movie.files) == len(file_s) else f"part {k + 1} of {movie.name}"
        keys = "first_s or pulses" if isinstance(stimuli, RegularStimuli) else "times"
        raise ProtocolError(
            f"Trial {k + 1} has a stimulus at {last[k]:g} s but its file {name} ends at {file_s[k]:g} s "
            f"({interval:g} s a frame): check frame_interval_s, {keys}, or leave the file out."
        )
