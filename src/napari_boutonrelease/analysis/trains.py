"""What trains of pulses say about each bouton and about all boutons together."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from ..quanta import (
    Estimate,
    PulsePattern,
    PulseTrain,
    TrainModel,
    fit_tsodyks_markram,
    measure_train,
    no_train_model,
    pool_in_vesicles,
    pulse_patterns,
)
from .quantal_step import CONFIDENCE
from .train_columns import TRAINS

if TYPE_CHECKING:
    import pandas as pd
    from numpy.typing import NDArray

    from .pipeline import Measured

    Floats = NDArray[np.float64]

_LEAST_PULSES = 5
_DETECTED_SE = 2.0  # as for pulse pairs: the first mean must rise this many SE of the noise above zero
_EVEN = 0.2  # a train is even where no gap differs from the median by more than this share of it


@dataclass(frozen=True, slots=True, kw_only=True)
class TrainResult:
    """One bouton's, or the whole axon's, trains.

    Attributes
    ----------
    train : PulseTrain or None
        Back-extrapolation; None where the pulses are not evenly spaced.
    model : TrainModel
        Use-dependent release.
    note : str
        What is missing, and what to doubt.
    """

    train: PulseTrain | None
    model: TrainModel
    note: str


def train_patterns(measured: Measured) -> tuple[PulsePattern, ...]:
    """Kinds of trials that are trains, the most frequent one first; empty where there is none."""
    tolerance_s = measured.settings.trains.same_interval_s
    found = pulse_patterns(measured.timing.stimulus_s, tolerance_s=tolerance_s)
    trains = [pattern for pattern in found if pattern.pulse_s.size >= _LEAST_PULSES]
    return tuple(sorted(trains, key=lambda pattern: -pattern.trials.size))


def train_table(measured: Measured) -> pd.DataFrame:
    """Return a row a bouton; none where no trial is a train."""
    import pandas as pd

    patterns, fit, axon = train_patterns(measured), measured.amplitudes, measured.release.axon
    rng = np.random.default_rng(measured.settings.seed)
    rows = []
    for b, bouton in enumerate(measured.places.bouton) if patterns else ():
        if not np.isfinite(fit.noise_sd[b]):
            rows.append({"bouton": int(bouton), "note": "no amplitude could be measured"})
            continue
        found = measure(fit.amplitude[b], fit.noise_sd[b], measured=measured, patterns=patterns, rng=rng)
        row: dict[str, Any] = {"bouton": int(bouton), **_row(found, patterns[0])}
        if found.train is not None:
            # a silent bouton's q is the axon's: it says nothing about a pool
            silent = axon.silent_probability[b] > 0.5
            vesicles = pool_in_vesicles(
                found.train.pool,
                q=np.nan if silent else axon.q[b],
                q_lo=axon.q_lo[b],
                q_hi=axon.q_hi[b],
                n_trials=found.train.n_trials,
                confidence=CONFIDENCE,
            )
            row |= _cells("pool_vesicles", vesicles)
        rows.append(row)
    return pd.DataFrame(rows, columns=list(TRAINS.names))


def train_summary(measured: Measured) -> dict[str, Any]:
    """Return what all boutons together say, JSON-ready; empty where no trial is a train or no bouton was measured."""
    patterns, fit = train_patterns(measured), measured.amplitudes
    known = np.isfinite(fit.noise_sd) & np.isfinite(fit.amplitude).any(axis=(1, 2))
    if not patterns or not known.any():
        return {}
    summed = fit.amplitude[known].sum(axis=0)
    noise_sd = float(np.sqrt(np.sum(fit.noise_sd[known] ** 2)))
    rng = np.random.default_rng(measured.settings.seed)
    found = measure(summed, noise_sd, measured=measured, patterns=patterns, rng=rng)
    row = {key: _ready(value) for key, value in _row(found, patterns[0]).items()}
    del row["steady_p"], row["interval_s"]
    train = found.train
    curves: dict[str, Any] = {"pulse_s": patterns[0].pulse_s.round(9).tolist()}
    if train is not None:
        curves |= {
            "late_pulses": train.n_late,
            "amplitude": _list(train.mean),
            "amplitude_lo": _list(train.mean_lo),
            "amplitude_hi": _list(train.mean_hi),
            "cumulative": _list(train.cumulative),
            "cumulative_se": _list(train.cumulative_se),
        }
    return {**row, **curves}


def train_cautions(measured: Measured) -> list[str]:
    """Return what a reader of trains must know."""
    patterns = train_patterns(measured)
    if not patterns:
        return []
    cautions = [
        "A pool from a train leaves out what refilling and low release probability keep in it: it is a lower limit."
    ]
    if len(patterns) > 1:
        cautions.append(
            f"Trials are trains of {len(patterns)} kinds: the pool is from the most frequent, the model fitted to all."
        )
    return cautions


def measure(
    amplitude: Floats,
    noise_sd: float,
    *,
    measured: Measured,
    patterns: tuple[PulsePattern, ...],
    rng: np.random.Generator,
) -> TrainResult:
    """Measure one set of trains, (n_trials, n_pulses)."""
    first, settings = patterns[0], measured.settings
    n_pulses = first.pulse_s.size
    gaps = np.diff(first.pulse_s)
    even = bool(np.all(np.abs(gaps - np.median(gaps)) <= _EVEN * np.median(gaps)))
    train = None
    if even:
        train = measure_train(
            amplitude[first.trials, :n_pulses],
            n_late=min(settings.trains.late_pulses, n_pulses - 2),
            origin="first pulse",
            noise_sd=noise_sd,
            confidence=CONFIDENCE,
            n_bootstrap=settings.pairs.bootstrap,
            rng=rng,
        )
    words = ["no pool: the pulses are not evenly spaced" if train is None else train.reason]
    firsts = amplitude[np.concatenate([pattern.trials for pattern in patterns]), 0]
    firsts = firsts[np.isfinite(firsts)]
    if firsts.size and firsts.mean() > _DETECTED_SE * noise_sd / np.sqrt(firsts.size):
        model = fit_tsodyks_markram(amplitude, patterns=patterns, confidence=CONFIDENCE)
        words.append(model.reason)
    else:
        model = no_train_model("the first response is within noise of zero")
    return TrainResult(train=train, model=model, note="; ".join(filter(None, words)))


def _row(found: TrainResult, pattern: PulsePattern) -> dict[str, Any]:
    train, model = found.train, found.model
    row: dict[str, Any] = {
        "pulses": pattern.pulse_s.size,
        "interval_s": float(np.median(np.diff(pattern.pulse_s))),
        "trials": model.n_trials if train is None else train.n_trials,
        **_cells("u", model.u),
        **_cells("tau_rec_s", model.tau_rec_s),
        **_cells("tau_facil_s", model.tau_facil_s),
        **_cells("resources", model.scale),
        "steady_p": np.nan if train is None else train.steady_p,
        "model_p": model.p_fit,
        "note": found.note,
    }
    if train is not None:
        row |= _cells("steady_ratio", train.steady_ratio) | _cells("pool", train.pool)
        row |= _cells("replenished", train.replenished)
    return row


def _cells(name: str, estimate: Estimate) -> dict[str, float]:
    return {name: estimate.value, f"{name}_lo": estimate.lo, f"{name}_hi": estimate.hi}


def _list(values: Floats) -> list[float | None]:
    return [_ready(value) for value in values.tolist()]


def _ready(value: Any) -> Any:
    return None if isinstance(value, float) and not np.isfinite(value) else value
