"""What `inspect` says of a recording, line by line."""

from __future__ import annotations

from collections import Counter
from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    from collections.abc import Iterable

    from numpy.typing import NDArray

    from ..recording.light import Light
    from ..recording.motion import Drift
    from ..recording.movie import Movie
    from ..recording.timing import Timing

_MOST_RUNS = 8


def movie_lines(movie: Movie) -> list[str]:
    """Axes, size, type, and what the file's own metadata says."""
    n_frames, height, width = movie.shape
    pieces = f" in {len(movie.file_frames)} files, one a trial" if len(movie.file_frames) > 1 else ""
    ceiling = "" if movie.full_scale is None else f", at most {movie.full_scale:g}"
    lines = [
        _line("axes", f"{movie.axes} in the file: {n_frames} frames of {height} × {width} pixels (y × x){pieces}"),
        _line("type", f"{movie.dtype}{ceiling}"),
    ]
    if movie.channel is not None:
        lines.append(_line("channel", f"{movie.channel}"))
    return lines


def calibration_lines(movie: Movie, timing: Timing | None) -> list[str]:
    """Frame interval, exposure, pixel size and camera offset, and where each was found."""
    source = movie if timing is None else timing
    entries = [
        ("frame interval", source.frame_interval_s, "s", "frame_interval_s"),
        ("pixel size", source.pixel_size_um, "µm", "pixel_size_um"),
    ]
    if timing is not None:
        entries.insert(1, ("exposure", timing.exposure_s, "s", "exposure_s"))
        entries.append(("row time", timing.row_time_s, "s", "row_time_s"))
        entries.append(("camera offset", timing.camera_offset, "counts", "camera_offset"))
    lines = []
    for words, value, unit, key in entries:
        if value is None:
            lines.append(_line(words, "unknown"))
        else:
            found = source.found_in.get(key)
            lines.append(_line(words, f"{value:g} {unit}" + (f" ({found})" if found else "")))
    return lines


def stimulus_lines(timing: Timing) -> list[str]:
    """Trials, pulses, and when they come."""
    times = timing.stimulus_s
    pulses = np.sum(np.isfinite(times), axis=1)
    each = f"{pulses[0]}" if np.all(pulses == pulses[0]) else f"{pulses.min()} to {pulses.max()}"
    lines = [
        _line("trials", f"{len(times)}, with {each} pulse{'' if each == '1' else 's'} each"),
        _line("times", f"first at {np.nanmin(times):.6g} s, last at {np.nanmax(times):.6g} s"),
    ]
    gaps = np.diff(times, axis=1)
    if np.isfinite(gaps).any():
        lines.append(_line("between pulses", _span(gaps[np.isfinite(gaps)], unit="s")))
    inside = np.diff(timing.trial_segment) == 0
    between = np.diff(times[:, 0])[inside]
    if between.size:
        lines.append(_line("between trials", _span(between, unit="s")))
    end = timing.frame_start_s[-1] + timing.frame_interval_s
    lines.append(_line("movie ends", f"at {end:.6g} s"))
    return lines


def light_lines(light: Light) -> list[str]:
    """Gain, noise, bleaching, and the pixels and frames not to trust."""
    if np.isfinite(light.gain):
        gain = f"{light.gain:.3g} counts an electron ({light.gain_lo:.3g} to {light.gain_hi:.3g})"
    else:
        gain = "cannot be measured: the pixels are too alike in brightness"
    lines = [_line("gain", gain)]
    if light.offset_known:
        lines.append(_line("read noise", _known(light.read_noise_counts, "{:.3g} counts")))
    bleaching = _known(100 * light.bleaching, "{:.0f} % of the light lost from first to last frame")
    lines.append(_line("bleaching", bleaching + ("" if light.offset_known else " (camera offset unknown)")))
    lines.append(_line("saturated", f"{_count(int(light.saturated.sum()), 'pixel')}"))
    lines.append(_line("dead", f"{_count(int(light.dead.sum()), 'pixel')}"))
    reasons = Counter(reason for reason in light.bad_reason if reason)
    if reasons:
        parts = ", ".join(
            f"{reason}: {_runs(i for i, why in enumerate(light.bad_reason) if why == reason)}" for reason in reasons
        )
        lines.append(_line("bad frames", f"{sum(reasons.values())} left out ({parts}; counted from 0)"))
    else:
        lines.append(_line("bad frames", "none"))
    return lines


def drift_lines(drift: Drift, light: Light) -> list[str]:
    """How far the sample moved, and the lit frames that could not be followed."""
    used = drift.used
    if not (drift.corrected and used.any()):
        return [_line("drift", "cannot be followed: the image holds too little structure for its noise")]
    dy_px, dx_px = np.ptp(drift.dy_px[used]), np.ptp(drift.dx_px[used])
    steps = np.hypot(np.diff(drift.dy_px[used]), np.diff(drift.dx_px[used]))
    lines = [_line("drift", f"over {dy_px:.2f} px in y and {dx_px:.2f} px in x")]
    lines.append(_line("known within", f"{drift.noise_px:.2g} px a frame"))
    if steps.size:
        lines.append(_line("steps", f"{np.median(steps):.2f} px from frame to frame, at most {steps.max():.2f} px"))
    lost = np.flatnonzero(~used & ~light.bad_frame)
    lines.append(_line("no match", f"{_count(lost.size, 'frame')}" + (f" ({_runs(lost)})" if lost.size else "")))
    return lines


def doubts(light: Light, drift: Drift, timing: Timing) -> list[str]:
    """Sentences on what would make the numbers worse than they need be."""
    found = []
    if timing.pixel_size_um is None:
        found.append("The pixel size is unknown: set pixel_size_um in the protocol, else sizes in µm are guessed.")
    if timing.camera_offset is None:
        found.append(
            "The camera offset is unknown: give camera_offset in the protocol, else photon counts are too high and "
            "read noise is unknown."
        )
    if light.saturated.any():
        found.append("Saturated pixels clip large responses: record with less light or gain.")
    if light.bleaching > 0.5:
        found.append("More than half of the light is lost: expect later trials to be noisier.")
    left_out = float(np.mean(~drift.used | light.bad_frame))
    if left_out > 0.1:
        found.append(f"{100 * left_out:.0f} % of the frames are left out: look at the movie.")
    if len(timing.stimulus_s) < 20:
        found.append("Fewer than 20 trials: intervals will be wide.")
    return found


def _line(words: str, text: str) -> str:
    return f"  {words:<15} {text}"


def _known(value: float, words: str) -> str:
    return words.format(value) if np.isfinite(value) else "cannot be measured"


def _count(n: int, noun: str) -> str:
    return "none" if n == 0 else f"{n} {noun}{'' if n == 1 else 's'}"


def _span(values: NDArray[np.float64], *, unit: str) -> str:
    low, high = float(values.min()), float(values.max())
    return f"{low:.6g} {unit}" if high - low < 1e-6 * max(high, 1.0) else f"{low:.6g} to {high:.6g} {unit}"


def _runs(numbers: Iterable[int] | NDArray[np.intp]) -> str:
    """Write 3, 4, 5, 9 as `3-5, 9`; long lists are cut."""
    runs: list[list[int]] = []
    for number in numbers:
        if runs and number == runs[-1][1] + 1:
            runs[-1][1] = int(number)
        else:
            runs.append([int(number), int(number)])
    words = [f"{first}" if first == last else f"{first}-{last}" for first, last in runs]
    return ", ".join(words[:_MOST_RUNS]) + (", ..." if len(words) > _MOST_RUNS else "")
