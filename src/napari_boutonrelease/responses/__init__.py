"""Numbers per bouton and stimulus: traces, F0, response shape, amplitudes, calls, spontaneous releases."""

from __future__ import annotations

from .amplitudes import AmplitudeFit, fit_amplitudes
from .dff import Baseline, measure_baseline
from .exponentials import ExponentialFit, fit_exponential
from .kinetics import ASSUMED_SHAPE, ShapeFit, fit_response_shape
from .measure import Responses, measure_responses
from .noise import TimeCorrelation, estimate_time_correlation, robust_sd, variance_by_brightness, white
from .release_calls import ReleaseCalls, call_releases
from .response_design import evoked_responses
from .spontaneous import SpontaneousReleases, detect_spontaneous
from .traces import extract_traces
from .trends import Rundown, amplitude_trend, measure_rundown, release_trend
from .windows import Windows, plan_null_windows, plan_trial_windows, rest_frames, rest_s

__all__ = [
    "ASSUMED_SHAPE",
    "AmplitudeFit",
    "Baseline",
    "ExponentialFit",
    "ReleaseCalls",
    "Responses",
    "Rundown",
    "ShapeFit",
    "SpontaneousReleases",
    "TimeCorrelation",
    "Windows",
    "amplitude_trend",
    "call_releases",
    "detect_spontaneous",
    "estimate_time_correlation",
    "evoked_responses",
    "extract_traces",
    "fit_amplitudes",
    "fit_exponential",
    "fit_response_shape",
    "measure_baseline",
    "measure_responses",
    "measure_rundown",
    "plan_null_windows",
    "plan_trial_windows",
    "release_trend",
    "rest_frames",
    "rest_s",
    "robust_sd",
    "variance_by_brightness",
    "white",
]
