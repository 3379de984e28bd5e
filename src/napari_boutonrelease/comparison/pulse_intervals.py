"""Pulse pairs of the same boutons at several intervals."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from ..analysis.quantal_step import CONFIDENCE
from ..quanta import fit_pulse_intervals, measure_pulse_pair, paired_means, pulse_interval_groups
from .columns import INTERVALS, RECOVERY
from .tables import limits, table_of

if TYPE_CHECKING:
    from collections.abc import Sequence

    import pandas as pd

    from .matching import Matches
    from .recording import ComparedRecording
    from .settings import CompareSettings

_SAME_S = 0.0005


def interval_tables(
    recordings: Sequence[ComparedRecording],
    matches: Matches,
    *,
    settings: CompareSettings,
    rng: np.random.Generator,
) -> tuple[pd.DataFrame, pd.DataFrame]:
    """Return the tables `intervals` and `recovery`; both are empty where there is but one interval.

    Trials of all recordings with the same interval are taken together: what differs between the recordings must be
    nothing but the interval.
    """
    held: list[tuple[int, int, float]] = []  # recording, trial, interval
    for k, recording in enumerate(recordings):
        for group in pulse_interval_groups(recording.stimulus_s, tolerance_s=_SAME_S):
            held += [(k, int(trial), group.interval_s) for trial in group.trials]
    order = sorted({interval for _, _, interval in held})
    distinct = [value for at, value in enumerate(order) if at == 0 or value - order[at - 1] > _SAME_S]
    if len(distinct) < 2:
        return table_of(INTERVALS, []), table_of(RECOVERY, [])
    intervals, recovery = [], []
    for row, bouton in enumerate(recordings[0].bouton):
        gaps, means = [], []
        for gap in distinct:
            chosen = [
                (k, trial) for k, trial, interval in held if abs(interval - gap) <= _SAME_S and matches.row[row, k] >= 0
            ]
            pairs = np.array([recordings[k].amplitude[matches.row[row, k], trial, :2] for k, trial in chosen]).reshape(
                -1, 2
            )
            pairs = pairs[np.isfinite(pairs).all(axis=1)]
            if not len(pairs):
                continue
            pair = measure_pulse_pair(
                pairs[:, 0],
                pairs[:, 1],
                noise_sd=_noise_sd(recordings, matches.row[row], {k for k, _ in chosen}),
                confidence=CONFIDENCE,
                n_bootstrap=settings.bootstrap,
                rng=rng,
            )
            intervals.append(
                {
                    "bouton": bouton,
                    "interval_s": gap,
                    "recordings": ";".join(recordings[k].name for k in sorted({k for k, _ in chosen})),
                    "trials": len(pairs),
                    **limits("ppr", pair.ppr),
                }
            )
            mean = paired_means(pairs[:, 0], pairs[:, 1])
            if mean is not None:
                gaps.append(gap)
                means.append(mean)
        fit = fit_pulse_intervals(gaps, means, confidence=CONFIDENCE)
        recovery.append(
            {
                "bouton": bouton,
                "model": fit.model,
                **limits("facilitation", fit.facilitation),
                **limits("facilitation_s", fit.facilitation_s),
                **limits("depression", fit.depression),
                **limits("depression_s", fit.depression_s),
                "p_constant": fit.p_constant,
                "fit_p": fit.p_fit,
                "note": fit.reason or None,
            }
        )
    return table_of(INTERVALS, intervals), table_of(RECOVERY, recovery)


def _noise_sd(recordings: Sequence[ComparedRecording], rows: np.ndarray, chosen: set[int]) -> float:
    noise = [float(recordings[k].column("noise_sd")[rows[k]]) for k in chosen]
    return float(np.sqrt(np.mean(np.square(noise))))
