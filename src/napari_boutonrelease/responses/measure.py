"""From traces to amplitudes: baseline, response shape and responses, each of which needs the others."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Literal

import numpy as np

from .amplitudes import AmplitudeFit, fit_amplitudes
from .dff import Baseline, BaselineMethod, measure_baseline
from .kinetics import ASSUMED_SHAPE, ShapeFit, fit_response_shape
from .response_design import evoked_responses
from .windows import plan_trial_windows, rest_s

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from ..recording.timing import Timing
    from ..response_shape import ResponseShape

__all__ = ["Responses", "measure_responses"]


@dataclass(frozen=True, slots=True, kw_only=True)
class Responses:
    """Baseline, response shape and amplitudes of one recording.

    Attributes
    ----------
    baseline : Baseline
        F0, with the tails of earlier responses taken out.
    shape : ResponseShape
        Time course used for the amplitudes.
    shape_from : {"protocol", "recording", "assumed"}
        Where it comes from.
    shape_fit : ShapeFit or None
        How it was estimated; None where the protocol fixes it.
    amplitudes : AmplitudeFit
        Amplitudes and noise.
    """

    baseline: Baseline
    shape: ResponseShape
    shape_from: Literal["protocol", "recording", "assumed"]
    shape_fit: ShapeFit | None
    amplitudes: AmplitudeFit


def measure_responses(
    f: NDArray[np.float64],
    *,
    timing: Timing,
    y_px: NDArray[np.float64],
    used: NDArray[np.bool_],
    shape: ResponseShape | None,
    baseline_method: BaselineMethod,
    baseline_s: float | None,
    percentile: float,
    running_s: float,
    slope: bool,
) -> Responses:
    """Measure F0, the response shape and all amplitudes.

    Trials that follow each other closely leave the tails of responses in the frames from which F0 is read. So a first
    round with the tails in yields amplitudes, whose tails are subtracted for the second round.

    Parameters
    ----------
    f : (n_boutons, n_frames) ndarray
        Brightness above background, counts; NaN in frames without a value.
    timing : Timing
        Frames and stimuli.
    y_px : (n_boutons,) ndarray
        Rows of the boutons.
    used : (n_frames,) ndarray of bool
        Frames that may be used.
    shape : ResponseShape or None
        Fixed response shape; None to estimate it.
    baseline_method : {"bleaching", "trial", "percentile"}
        See `measure_baseline`.
    baseline_s : float or None
        Time before the first pulse that a trial uses, in s; None for as long as the gap allows.
    percentile : float
        Which percentile, where F0 is a running one.
    running_s : float
        Length of the stretch of which that percentile is taken, in s.
    slope : bool
        Let the baseline of each trial slope.

    Returns
    -------
    Responses
    """

    def baseline_of(traces: NDArray[np.float64], course: ResponseShape) -> Baseline:
        return measure_baseline(
            traces,
            timing=timing,
            windows=plan_trial_windows(timing=timing, tail_s=rest_s(course), baseline_s=baseline_s),
            used=used,
            method=baseline_method,
            percentile=percentile,
            running_s=running_s,
        )

    def amplitudes_of(baseline: Baseline, course: ResponseShape) -> AmplitudeFit:
        return fit_amplitudes(
            f,
            baseline=baseline,
            timing=timing,
            y_px=y_px,
            shape=course,
            used=used,
            baseline_s=baseline_s,
            slope=slope,
        )

    def estimate(baseline: Baseline, start: ResponseShape | None) -> ShapeFit:
        return fit_response_shape(
            f, baseline=baseline, timing=timing, y_px=y_px, used=used, start=start, slow_component=True
        )

    course = ASSUMED_SHAPE if shape is None else shape
    baseline = baseline_of(f, course)
    shape_fit = None
    if shape is None:
        shape_fit = estimate(baseline, None)
        course = shape_fit.shape
        baseline = baseline_of(f, course)
    amplitudes = amplitudes_of(baseline, course)
    tails = evoked_responses(amplitudes.amplitude, timing=timing, y_px=y_px, shape=course) * baseline.f0
    cleaned = baseline_of(f - np.nan_to_num(tails), course)
    with np.errstate(invalid="ignore", divide="ignore"):
        change = np.abs(cleaned.f0 / baseline.f0 - 1.0)
    if np.any(change[baseline.usable & cleaned.usable] > 0.005):
        baseline = cleaned
        if shape is None:
            shape_fit = estimate(baseline, None)
            course = shape_fit.shape
        amplitudes = amplitudes_of(baseline, course)
    return Responses(
        baseline=baseline,
        shape=course,
        shape_from="protocol" if shape_fit is None else shape_fit.shape_from,
        shape_fit=shape_fit,
        amplitudes=amplitudes,
    )
