"""Small traces with known truth, made without the package's own response averaging."""

from dataclasses import dataclass

import numpy as np
import pytest

from napari_boutonrelease.recording import Timing
from napari_boutonrelease.response_shape import ResponseShape
from napari_boutonrelease.responses import measure_baseline, plan_trial_windows, rest_s


def timing_of(
    stimulus_s,
    *,
    n_frames,
    frame_interval_s=0.01,
    exposure_s=None,
    row_time_s=0.0,
    segment=None,
    trial_segment=None,
):
    stimulus_s = np.asarray(stimulus_s, dtype=float)
    return Timing(
        frame_interval_s=frame_interval_s,
        exposure_s=frame_interval_s if exposure_s is None else exposure_s,
        row_time_s=row_time_s,
        pixel_size_um=0.1,
        camera_offset=100.0,
        found_in={},
        frame_start_s=np.arange(n_frames) * frame_interval_s,
        segment=np.zeros(n_frames, dtype=int) if segment is None else np.asarray(segment),
        stimulus_s=stimulus_s,
        trial_segment=np.zeros(len(stimulus_s), dtype=int) if trial_segment is None else np.asarray(trial_segment),
    )


def regular(*, trials, interval_s=1.0, pulses=2, pulse_interval_s=0.05, first_s=0.5, jitter=None):
    first = first_s + interval_s * np.arange(trials)
    if jitter is not None:
        first = first + jitter.uniform(0.0, 0.0137, trials)
    return first[:, None] + pulse_interval_s * np.arange(pulses)


def mean_over_exposure(shape, since_s, exposure_s, n=4000):
    """Average by a fine sum, for the closed form to be checked against."""
    fine = np.arange(
        -0.5, 12.0 * max(shape.decay_s, shape.slow_decay_s * (shape.slow_fraction > 0)), exposure_s / n * 8
    )
    rise = (1 - shape.slow_fraction) * np.exp(-np.maximum(fine - shape.latency_s, 0) / shape.decay_s)
    rise += shape.slow_fraction * np.exp(-np.maximum(fine - shape.latency_s, 0) / shape.slow_decay_s)
    rise *= -np.expm1(-np.maximum(fine - shape.latency_s, 0) / shape.rise_s)
    rise /= rise.max()
    area = np.concatenate([[0.0], np.cumsum(0.5 * (rise[1:] + rise[:-1]) * np.diff(fine))])
    return (np.interp(since_s + exposure_s, fine, area) - np.interp(since_s, fine, area)) / exposure_s


@dataclass
class Traces:
    f: np.ndarray
    f0: np.ndarray
    timing: Timing
    y_px: np.ndarray
    shape: ResponseShape
    used: np.ndarray

    def baseline(self, method="bleaching"):
        return measure_baseline(
            self.f,
            timing=self.timing,
            windows=plan_trial_windows(timing=self.timing, tail_s=rest_s(self.shape), baseline_s=None),
            used=self.used,
            method=method,
            percentile=10.0,
            running_s=5.0,
        )


def traces_of(
    amplitude, *, timing, shape, rng=None, noise=0.0, f0=1000.0, bleach_s=80.0, y_px=None, memory=0.0, events=()
):
    """F with responses `amplitude` (bouton, trial, pulse), events (bouton, time_s, size) and noise of SD noise·F0."""
    n_boutons = amplitude.shape[0]
    time_s = timing.frame_start_s
    y_px = np.zeros(n_boutons) if y_px is None else np.asarray(y_px, dtype=float)
    resting = f0 * np.exp(-time_s / bleach_s) * np.ones((n_boutons, 1))
    response = np.zeros_like(resting)
    courses = {}
    for bouton in range(n_boutons):
        offset_s = float(y_px[bouton] * timing.row_time_s)
        if offset_s not in courses:
            courses[offset_s] = [
                mean_over_exposure(shape, time_s + offset_s - pulse_s, timing.exposure_s)
                * (timing.segment == timing.trial_segment[trial])
                for trial, pulses in enumerate(timing.stimulus_s)
                for pulse_s in pulses
                if np.isfinite(pulse_s)
            ]
        sizes = amplitude[bouton][np.isfinite(timing.stimulus_s)]
        response[bouton] = sizes @ np.array(courses[offset_s])
    for bouton, at_s, size in events:
        response[bouton] += size * mean_over_exposure(shape, time_s - at_s, timing.exposure_s)
    f = resting * (1 + response)
    if noise:
        white = rng.normal(size=f.shape)
        for i in range(1, f.shape[1] if memory else 0):
            white[:, i] = memory * white[:, i - 1] + np.sqrt(1 - memory**2) * white[:, i]
        f = f + noise * np.sqrt(resting * f0) * white  # photon noise: the variance follows the brightness
    return Traces(f=f, f0=resting, timing=timing, y_px=y_px, shape=shape, used=np.ones(time_s.size, dtype=bool))


@pytest.fixture
def make_timing():
    return timing_of


@pytest.fixture
def make_regular():
    return regular


@pytest.fixture
def make_traces():
    return traces_of


@pytest.fixture
def exposure_mean():
    return mean_over_exposure


@pytest.fixture
def shape():
    return ResponseShape(latency_s=0.001, rise_s=0.002, decay_s=0.06)
