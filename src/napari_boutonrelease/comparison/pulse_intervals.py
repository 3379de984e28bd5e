"""Pulse pairs of the same boutons at several intervals, over recordings."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from ..analysis.pulse_intervals import interval_rows, recovery_row
from ..analysis.train_columns import INTERVALS, RECOVERY
from ..quanta import pulse_interval_groups
from .tables import table_of

if TYPE_CHECKING:
    from collections.abc import Sequence

    import pandas as pd

    from .matching import Matches
    from .recording import ComparedRecording
    from .settings import CompareSettings


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
    paired = [k for k, recording in enumerate(recordings) if recording.stimulus_s.shape[1] > 1]
    if not paired:
        return table_of(INTERVALS, []), table_of(RECOVERY, [])
    stimulus_s = np.concatenate([recordings[k].stimulus_s[:, :2] for k in paired])
    groups = pulse_interval_groups(stimulus_s, tolerance_s=settings.same_interval_s)
    if len(groups) < 2:
        return table_of(INTERVALS, []), table_of(RECOVERY, [])
    intervals, recovery = [], []
    for row, bouton in enumerate(recordings[0].bouton):
        amplitude = np.concatenate([_amplitude(recordings[k], int(matches.row[row, k])) for k in paired])
        noise_sd = _noise_sd([recordings[k] for k in paired], matches.row[row, paired])
        here = tuple(group for group in groups if np.isfinite(amplitude[group.trials]).all(axis=1).any())
        intervals += interval_rows(
            int(bouton), amplitude, here, noise_sd=noise_sd, n_bootstrap=settings.bootstrap, rng=rng
        )
        recovery.append(recovery_row(int(bouton), amplitude, here, noise_sd=noise_sd))
    return table_of(INTERVALS, intervals), table_of(RECOVERY, recovery)


def _amplitude(recording: ComparedRecording, row: int) -> np.ndarray:
    """Both pulses of every trial; NaN where the bouton is not there."""
    if row < 0:
        return np.full((recording.stimulus_s.shape[0], 2), np.nan)
    return recording.amplitude[row, :, :2]


def _noise_sd(recordings: Sequence[ComparedRecording], rows: np.ndarray) -> float:
    noise = [float(one.column("noise_sd")[row]) for one, row in zip(recordings, rows, strict=True) if row >= 0]
    return float(np.sqrt(np.mean(np.square(noise)))) if noise else float("nan")
