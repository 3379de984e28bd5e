"""Pulse pairs at several intervals within one recording: the ratio at each, and its time course."""

from __future__ import annotations

from dataclasses import replace
from typing import TYPE_CHECKING, Any

import numpy as np

from ..quanta import (
    PulseIntervalFit,
    PulsePair,
    PulsePattern,
    fit_pulse_intervals,
    measure_pulse_pair,
    paired_means,
    pulse_interval_groups,
)
from .quantal_step import CONFIDENCE
from .train_columns import INTERVALS, RECOVERY

if TYPE_CHECKING:
    import pandas as pd
    from numpy.typing import NDArray

    from .pipeline import Measured

    Floats = NDArray[np.float64]

_LEAST_TRIALS = 3  # of one interval: fewer are an accident of the stimulator
_LIMITS = ("facilitation", "facilitation_s", "depression", "depression_s")


def interval_groups(measured: Measured) -> tuple[PulsePattern, ...]:
    """Trials by pulse interval; empty unless there are several intervals."""
    tolerance_s = measured.settings.trains.same_interval_s
    found = pulse_interval_groups(measured.timing.stimulus_s, tolerance_s=tolerance_s)
    groups = tuple(group for group in found if group.trials.size >= _LEAST_TRIALS)
    return groups if len(groups) > 1 else ()


def interval_table(measured: Measured) -> pd.DataFrame:
    """Return a row a bouton and pulse interval; none where all trials have the same."""
    import pandas as pd

    groups, fit = interval_groups(measured), measured.amplitudes
    rng = np.random.default_rng(measured.settings.seed)
    rows = []
    for b, bouton in enumerate(measured.places.bouton):
        if np.isfinite(fit.noise_sd[b]):
            rows += interval_rows(
                int(bouton),
                fit.amplitude[b],
                groups,
                noise_sd=fit.noise_sd[b],
                n_bootstrap=measured.settings.pairs.bootstrap,
                rng=rng,
            )
    return pd.DataFrame(rows, columns=list(INTERVALS.names))


def recovery_table(measured: Measured) -> pd.DataFrame:
    """Return a row a bouton: the time course of its paired-pulse ratio; none where all trials have one interval."""
    import pandas as pd

    groups, fit = interval_groups(measured), measured.amplitudes
    rows = [
        recovery_row(int(bouton), fit.amplitude[b], groups, noise_sd=fit.noise_sd[b])
        for b, bouton in enumerate(measured.places.bouton if groups else ())
    ]
    return pd.DataFrame(rows, columns=list(RECOVERY.names))


def interval_rows(
    bouton: int,
    amplitude: Floats,
    groups: tuple[PulsePattern, ...],
    *,
    noise_sd: float,
    n_bootstrap: int,
    rng: np.random.Generator,
) -> list[dict[str, Any]]:
    """Return one bouton's rows of the table `intervals`, from its amplitudes (trial, pulse)."""
    pairs = [(group, _pair(amplitude, group, noise_sd=noise_sd, n_bootstrap=n_bootstrap, rng=rng)) for group in groups]
    return [
        {
            "bouton": bouton,
            "interval_s": group.interval_s,
            "trials": pair.n_trials,
            "first_mean": pair.first_mean,
            "second_mean": pair.second_mean,
            "ppr": pair.ppr.value,
            "ppr_lo": pair.ppr.lo,
            "ppr_hi": pair.ppr.hi,
        }
        for group, pair in pairs
    ]


def recovery_row(
    bouton: int, amplitude: Floats, groups: tuple[PulsePattern, ...], *, noise_sd: float
) -> dict[str, Any]:
    """Return one bouton's row of the table `recovery`, from its amplitudes (trial, pulse)."""
    course = _time_course(amplitude, groups, noise_sd=noise_sd)
    return {"bouton": bouton, "intervals": course.n_intervals, **_row(course)}


def interval_summary(measured: Measured) -> dict[str, Any]:
    """Return what all boutons together say, JSON-ready; empty where all trials have the same interval."""
    groups, fit = interval_groups(measured), measured.amplitudes
    known = np.isfinite(fit.noise_sd) & np.isfinite(fit.amplitude).any(axis=(1, 2))
    if not groups or not known.any():
        return {}
    summed = fit.amplitude[known].sum(axis=0)
    noise_sd = float(np.sqrt(np.sum(fit.noise_sd[known] ** 2)))
    rng = np.random.default_rng(measured.settings.seed)
    n_bootstrap = measured.settings.pairs.bootstrap
    ratios = [_pair(summed, group, noise_sd=noise_sd, n_bootstrap=n_bootstrap, rng=rng).ppr for group in groups]
    row = _row(_time_course(summed, groups, noise_sd=noise_sd))
    return {
        "interval_s": [round(group.interval_s, 9) for group in groups],
        "ppr": [_ready(ratio.value) for ratio in ratios],
        "ppr_lo": [_ready(ratio.lo) for ratio in ratios],
        "ppr_hi": [_ready(ratio.hi) for ratio in ratios],
        **{key: _ready(value) for key, value in row.items()},
    }


def interval_cautions(measured: Measured) -> list[str]:
    """Return what a reader of paired-pulse ratios must know."""
    groups = interval_groups(measured)
    if not groups:
        return []
    return [
        f"Trials have {len(groups)} different pulse intervals: ppr in boutons.csv mixes them, intervals.csv has each."
    ]


def _time_course(amplitude: Floats, groups: tuple[PulsePattern, ...], *, noise_sd: float) -> PulseIntervalFit:
    """Fit those intervals at which the first response is clear of the noise: elsewhere there is no ratio."""
    interval_s, means = [], []
    for group in groups:
        pair = paired_means(amplitude[group.trials, 0], amplitude[group.trials, 1])
        if pair is not None and pair.first > 2.0 * noise_sd / np.sqrt(pair.n_trials):
            interval_s.append(group.interval_s)
            means.append(pair)
    course = fit_pulse_intervals(interval_s, means, confidence=CONFIDENCE)
    left_out = len(groups) - len(means)
    if not left_out:
        return course
    where = f" at {left_out} of {len(groups)} intervals" if means else ""
    noisy = f"the first response is within noise of zero{where}"
    return replace(course, reason="; ".join(filter(None, [noisy, course.reason if means else ""])))


def _pair(
    amplitude: Floats, group: PulsePattern, *, noise_sd: float, n_bootstrap: int, rng: np.random.Generator
) -> PulsePair:
    return measure_pulse_pair(
        amplitude[group.trials, 0],
        amplitude[group.trials, 1],
        noise_sd=noise_sd,
        confidence=CONFIDENCE,
        n_bootstrap=n_bootstrap,
        rng=rng,
    )


def _row(course: PulseIntervalFit) -> dict[str, Any]:
    row: dict[str, Any] = {"model": course.model}
    for name in _LIMITS:
        estimate = getattr(course, name)
        row |= {name: estimate.value, f"{name}_lo": estimate.lo, f"{name}_hi": estimate.hi}
    return {**row, "constant_p": course.p_constant, "model_p": course.p_fit, "note": course.reason}


def _ready(value: Any) -> Any:
    return None if isinstance(value, float) and not np.isfinite(value) else value
