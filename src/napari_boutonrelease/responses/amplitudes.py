"""Amplitude of every response with its error, and what the same fit finds where nothing was stimulated."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from .bouton_groups import groups_of_boutons, row_offset_s
from .noise import TimeCorrelation, estimate_time_correlation, robust_sd, variance_by_brightness, white
from .response_design import (
    ResponseDesign,
    build_design,
    evoked_responses,
    pooled_residuals,
)
from .windows import Windows, plan_null_windows, plan_trial_windows, rest_s

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from ..recording.timing import Timing
    from ..response_shape import ResponseShape
    from .dff import Baseline

__all__ = ["AmplitudeFit", "fit_amplitudes"]

_MAX_ORDER = 4
"""Frames that the noise is allowed to remember."""
_REST_HEIGHT = 0.05
"""Frames in which every response is below this share of its peak show the noise."""
_LEAST_NULLS = 10
"""With fewer pseudo-stimuli their scatter is less certain than the theory."""
_NO_GAP_NULLS = 50.0
"""Without any gap the frames' scatter stands for the noise of amplitudes: taken to be right within 10 %."""
_WORSE = 3.0
"""A pulse whose error is this many times the typical one, since frames are missing, is not used."""


@dataclass(frozen=True, slots=True, kw_only=True)
class AmplitudeFit:
    """Amplitudes of all responses.

    Attributes
    ----------
    amplitude, amplitude_se : (n_boutons, n_trials, n_pulses) ndarray
        dF/F and its standard error without release; NaN where F0 is not usable, the trial has no such pulse or frames
        that it needs are missing.
    amplitude_counts : (n_boutons, n_trials, n_pulses) ndarray
        The same in counts, also where F0 is not usable.
    offset : (n_boutons, n_trials) ndarray
        Baseline of each trial above F0, in dF/F.
    null_amplitude, null_se : (n_boutons, n_null) ndarray
        Amplitudes at pseudo-stimuli, dF/F, scaled to the error of a typical first response; and that error.
    null_time_s : (n_null,) ndarray
        Times of the pseudo-stimuli.
    noise_sd, noise_sd_counts : (n_boutons,) ndarray
        SD of a typical first response where nothing is released, dF/F and counts.
    noise_from : tuple of str
        A bouton each: `gaps` or `residuals`.
    noise_ratio : (n_boutons,) ndarray
        SD of the null amplitudes over the error that the scatter of single frames predicts; 1 without gaps.
    n_null_effective : (n_boutons,) ndarray
        Independent null amplitudes that would tell `noise_sd` as well as the bouton's own and the others' together.
    frame_sd : (n_boutons, n_trials) ndarray
        SD of single frames at the brightness of each trial, dF/F (counts where F0 is not usable).
    correlation : TimeCorrelation
        Correlation of the noise in time that the fit allowed for.
    windows : Windows
        Frames of each trial.
    """

    amplitude: NDArray[np.float64]
    amplitude_se: NDArray[np.float64]
    amplitude_counts: NDArray[np.float64]
    offset: NDArray[np.float64]
    null_amplitude: NDArray[np.float64]
    null_se: NDArray[np.float64]
    null_time_s: NDArray[np.float64]
    noise_sd: NDArray[np.float64]
    noise_sd_counts: NDArray[np.float64]
    noise_from: tuple[str, ...]
    noise_ratio: NDArray[np.float64]
    n_null_effective: NDArray[np.float64]
    frame_sd: NDArray[np.float64]
    correlation: TimeCorrelation
    windows: Windows


def fit_amplitudes(
    f: NDArray[np.float64],
    *,
    baseline: Baseline,
    timing: Timing,
    y_px: NDArray[np.float64],
    shape: ResponseShape,
    used: NDArray[np.bool_],
    baseline_s: float | None,
    slope: bool,
) -> AmplitudeFit:
    """Fit the responses of all trials together: one generalised least-squares problem a bouton.

    Each trial has its own baseline around the bleaching curve. Every response is followed until it has decayed, into
    the following trials if need be, so that no tail passes for a response. Noise correlated in time is estimated on
    the residuals and whitened within runs of usable frames. The error of an amplitude is what the scatter of the frames
    at rest predicts for its trial's brightness, times the ratio at which null amplitudes exceed that prediction.

    Parameters
    ----------
    f : (n_boutons, n_frames) ndarray
        Brightness above background, counts; NaN in frames without a value.
    baseline : Baseline
        F0.
    timing : Timing
        Frames and stimuli.
    y_px : (n_boutons,) ndarray
        Rows of the boutons, for the times at which they are exposed.
    shape : ResponseShape
        Time course of a response.
    used : (n_frames,) ndarray of bool
        Frames that may be used.
    baseline_s : float or None
        Time before the first pulse that a trial uses, in s; None for as long as the gap allows.
    slope : bool
        Let the baseline of each trial slope.

    Returns
    -------
    AmplitudeFit
    """
    trials = plan_trial_windows(timing=timing, tail_s=rest_s(shape), baseline_s=baseline_s)
    nulls = plan_null_windows(timing=timing, used=used, shape=shape, trials=trials, slope=slope)
    scale = np.where(baseline.usable[:, None], baseline.f0, 1.0)
    y = (f - baseline.f0) / scale
    groups = list(groups_of_boutons(y, offset_s=row_offset_s(y_px, timing=timing), used=used))

    def designs(windows: Windows, correlation: TimeCorrelation) -> list[ResponseDesign]:
        return [
            build_design(
                windows=windows,
                timing=timing,
                shape=shape,
                offset_s=offset_s,
                usable=usable,
                slope=slope,
                correlation=correlation,
            )
            for _, offset_s, usable in groups
        ]

    members = [group for group, _, _ in groups]
    plain = designs(trials, white())
    residual, common = pooled_residuals(y, designs=plain, members=members)
    correlation = (
        white()
        if common is None
        else estimate_time_correlation(
            residual,
            frame_in_run=common.frame_in_run,
            fitted=common.typical_block(),
            max_order=_MAX_ORDER,
        )
    )
    trial_designs = designs(trials, correlation) if correlation.order else plain

    n_boutons, (n_trials, n_pulses) = f.shape[0], timing.stimulus_s.shape
    coefficient = np.full((n_boutons, n_trials, 1 + slope + n_pulses), np.nan)
    theory = np.full((n_boutons, n_trials, n_pulses), np.nan)
    frame_variance = np.full((n_boutons, n_trials), np.nan)
    n_rest = np.zeros((n_boutons, n_trials))
    for group, design in zip(members, trial_designs, strict=True):
        whitened = design.whiten(y[np.ix_(group, design.frame)].T)
        solved = design.solve(whitened)
        coefficient[group] = np.moveaxis(solved, 2, 0)
        theory[group] = _known_only(design.standard_errors()[:, design.n_baseline :])
        residual = design.residual(whitened, solved)
        frame_variance[group], n_rest[group] = _variance_of_trials(residual, design=design)
    first_pulse_frame = _frame_of_pulse(timing)
    brightness = scale[:, np.clip(trials.start, 0, f.shape[1] - 1)]
    # In counts the variance is a line in brightness; in dF/F it is that over the square of the brightness.
    in_counts = variance_by_brightness(
        frame_variance * brightness**2, brightness=_f0_at(baseline, trials), n_values=n_rest
    )
    frame_sd = np.sqrt(np.where(in_counts > 0, in_counts, np.nan)) / brightness
    amplitude_se = theory * frame_sd[:, :, None]
    n_baseline = 1 + slope
    amplitude = np.where(np.isfinite(theory), coefficient[:, :, n_baseline:], np.nan)

    null_z = _null_scores(
        y - evoked_responses(amplitude, timing=timing, y_px=y_px, shape=shape),
        nulls=nulls,
        members=members,
        designs=designs(nulls, correlation) if nulls.start.size else [],
        frame_sd=frame_sd,
        trials=trials,
    )
    ratio, from_gaps, n_effective = _noise_ratio(null_z, independent=_independent_share(nulls))
    amplitude_se = amplitude_se * ratio[:, None, None]
    typical = _typical(amplitude_se)
    at_pulse = scale[:, first_pulse_frame]
    noise_counts = _typical(amplitude_se * at_pulse)
    dff = np.where(baseline.usable, 1.0, np.nan)
    null_amplitude = null_z * (typical / ratio)[:, None]
    return AmplitudeFit(
        amplitude=amplitude * dff[:, None, None],
        amplitude_se=np.where(np.isfinite(amplitude), amplitude_se, np.nan) * dff[:, None, None],
        amplitude_counts=amplitude * at_pulse,
        offset=coefficient[:, :, 0] * dff[:, None],
        null_amplitude=null_amplitude * dff[:, None],
        null_se=np.where(np.isfinite(null_z), typical[:, None], np.nan) * dff[:, None],
        null_time_s=nulls.pulse_s[:, 0],
        noise_sd=typical * dff,
        noise_sd_counts=noise_counts,
        noise_from=tuple("gaps" if gaps else "residuals" for gaps in from_gaps),
        noise_ratio=ratio,
        n_null_effective=n_effective,
        frame_sd=frame_sd,
        correlation=correlation,
        windows=trials,
    )


def _known_only(standard_errors: NDArray[np.float64]) -> NDArray[np.float64]:
    """Drop pulses that missing frames left much less certain than their like."""
    result = standard_errors.copy()
    for pulse in range(result.shape[1]):
        known = result[np.isfinite(result[:, pulse]), pulse]
        if known.size:
            with np.errstate(invalid="ignore"):
                result[result[:, pulse] > _WORSE * np.median(known), pulse] = np.nan
    return result


def _variance_of_trials(
    residual: NDArray[np.float64], *, design: ResponseDesign
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Variance of single frames in each trial, from its frames at rest, and their number, (n_boutons, n_trials)."""
    at_rest = ~design.response_rows(above=_REST_HEIGHT)
    if np.count_nonzero(at_rest) < 30:
        at_rest[:] = True
    left = 1.0 - design.leverage()
    at_rest &= left > 0.05
    scaled = residual[at_rest] / np.sqrt(left[at_rest])[:, None]
    overall = robust_sd(scaled.T)
    # Releases without stimulus are cut like any outlier; normal noise loses 5 % of its variance to the cut at 2.5 SD.
    kept = np.abs(scaled) <= 2.5 * overall
    squares = np.where(kept, scaled, 0.0) ** 2
    window = design.window[at_rest]
    edges = np.searchsorted(window, np.arange(design.n_windows + 1))
    totals = np.concatenate([np.zeros((1, squares.shape[1])), np.cumsum(squares, axis=0)])
    counts = np.concatenate([np.zeros((1, squares.shape[1])), np.cumsum(kept, axis=0)])
    n = np.diff(counts[edges], axis=0)
    variance = np.where(n > 0, np.diff(totals[edges], axis=0) / np.maximum(n, 1), np.nan)
    pooled = np.sum(np.nan_to_num(variance) * n, axis=0) / np.maximum(np.sum(n, axis=0), 1)
    variance *= overall**2 / np.where(pooled > 0, pooled, 1.0)
    return variance.T, n.T


def _null_scores(
    y: NDArray[np.float64],
    *,
    nulls: Windows,
    members: list[NDArray[np.intp]],
    designs: list[ResponseDesign],
    frame_sd: NDArray[np.float64],
    trials: Windows,
) -> NDArray[np.float64]:
    """Null amplitudes over the error that the frames' scatter predicts, (n_boutons, n_null)."""
    result = np.full((y.shape[0], nulls.start.size), np.nan)
    order = np.argsort(trials.start, kind="stable")
    nearest = order[np.clip(np.searchsorted(trials.start[order], nulls.start, side="right") - 1, 0, None)]
    for group, design in zip(members, designs, strict=False):
        solved = design.solve(design.whiten(y[np.ix_(group, design.frame)].T))[:, design.n_baseline]
        error = design.standard_errors()[:, design.n_baseline]
        spread = error * frame_sd[np.ix_(group, nearest)]
        result[group] = np.where(spread > 0, solved.T / np.where(spread > 0, spread, 1.0), np.nan)
    return result


def _independent_share(nulls: Windows) -> float:
    """Share of the null amplitudes that count as independent: two for the length of a window."""
    if not nulls.start.size:
        return 1.0
    covered = np.zeros(int(nulls.stop.max()), dtype=bool)
    for low, high in zip(nulls.start, nulls.stop, strict=True):
        covered[low:high] = True
    length = float(np.median(nulls.stop - nulls.start))
    return min(1.0, 2.0 * np.count_nonzero(covered) / (length * nulls.start.size))


def _noise_ratio(
    null_z: NDArray[np.float64], *, independent: float
) -> tuple[NDArray[np.float64], NDArray[np.bool_], NDArray[np.float64]]:
    """SD of the null scores of each bouton, drawn towards the boutons' common value as far as chance explains them.

    The scatter of n null amplitudes is uncertain by 1/sqrt(2n). Boutons of one recording share the reasons for which
    noise exceeds the frames' scatter, so that most of their differences are chance (empirical Bayes on the logarithm).
    """
    n = independent * np.sum(np.isfinite(null_z), axis=1)
    from_gaps = n >= _LEAST_NULLS
    ratio = np.ones(null_z.shape[0])
    if not from_gaps.any():
        return ratio, from_gaps, np.full(ratio.shape, _NO_GAP_NULLS)
    # About zero: null amplitudes of one gap share the error of their baseline, which their own mean would take out.
    sd = robust_sd(null_z[from_gaps], centre=0.0)
    log_sd = np.log(np.where(sd > 0, sd, 1.0))
    chance = 0.6 / n[from_gaps]
    between = max(float(np.var(log_sd) - np.mean(chance)), 0.05**2)
    precision = 1.0 / (chance + between)
    common = np.sum(precision * log_sd) / (np.sum(precision) + 1.0 / 0.2**2)
    ratio[from_gaps] = np.exp(common + between / (chance + between) * (log_sd - common))
    ratio[~from_gaps] = np.exp(common)
    # The variance of the logarithm of an SD from n values is 1 / (2 n).
    doubt = np.full(ratio.shape, between)
    doubt[from_gaps] = between * chance / (between + chance)
    doubt += 1.0 / (np.sum(precision) + 1.0 / 0.2**2)
    return ratio, from_gaps, 0.5 / doubt


def _typical(standard_errors: NDArray[np.float64]) -> NDArray[np.float64]:
    """Median over trials for the first pulse that each bouton has, (n_boutons,)."""
    result = np.full(standard_errors.shape[0], np.nan)
    for bouton, errors in enumerate(standard_errors):
        for pulse in range(errors.shape[1]):
            known = errors[np.isfinite(errors[:, pulse]), pulse]
            if known.size:
                result[bouton] = np.median(known)
                break
    return result


def _frame_of_pulse(timing: Timing) -> NDArray[np.intp]:
    at = np.searchsorted(timing.frame_start_s, np.nan_to_num(timing.stimulus_s), side="right") - 1
    return np.clip(at, 0, timing.frame_start_s.size - 1)


def _f0_at(baseline: Baseline, trials: Windows) -> NDArray[np.float64]:
    return np.abs(baseline.f0[:, np.clip(trials.start, 0, baseline.f0.shape[1] - 1)])
