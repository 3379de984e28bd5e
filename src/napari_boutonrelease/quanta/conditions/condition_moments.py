"""Mean and variance of the amplitudes of every release condition, also of resampled trials."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from ...errors import InputError

if TYPE_CHECKING:
    from collections.abc import Sequence

    from numpy.typing import ArrayLike, NDArray

    Floats = NDArray[np.float64]
    Recordings = list[tuple[Floats, Floats, float]]


@dataclass(frozen=True, slots=True, kw_only=True)
class ConditionMoments:
    """Moments of all conditions, for R resamplings: (R, n_conditions) arrays."""

    mean: Floats
    variance: Floats  # with noise
    noise: Floats  # of the recording: its variance
    noise_fourth: Floats  # what noise that differs between trials adds to the fourth cumulant
    count: Floats  # amplitudes

    def of(self, conditions: NDArray[np.bool_]) -> ConditionMoments:
        """Return some of the conditions."""
        return ConditionMoments(**{name: getattr(self, name)[:, conditions] for name in self.__slots__})


def read_conditions(
    amplitudes: Sequence[ArrayLike], amplitude_sds: Sequence[ArrayLike], n_null: Sequence[float]
) -> Recordings:
    """Return (n_trials, n_pulses) amplitudes and noise of each recording, NaN where one is missing, and n_null.

    Raises
    ------
    InputError
        If shapes do not match.
    """
    if not len(amplitudes) == len(amplitude_sds) == len(n_null) or not len(amplitudes):
        raise InputError(
            "amplitudes, amplitude_sds and n_null need one entry a recording, at least one "
            f"(given {len(amplitudes)}, {len(amplitude_sds)} and {len(n_null)})."
        )
    recordings = []
    for number, (a, sd, nulls) in enumerate(zip(amplitudes, amplitude_sds, n_null, strict=True)):
        values, noise = np.asarray(a, dtype=np.float64), np.asarray(sd, dtype=np.float64)
        if values.ndim == 1 and noise.ndim == 1:
            values, noise = values[:, None], noise[:, None]
        if values.ndim != 2 or values.shape != noise.shape:
            raise InputError(
                f"Recording {number}: amplitudes and their SDs need the same shape (n_trials, n_pulses) "
                f"(given {values.shape} and {noise.shape})."
            )
        known = np.isfinite(values) & np.isfinite(noise)
        recordings.append((np.where(known, values, np.nan), noise, float(nulls)))
    return recordings


def condition_moments(recordings: Recordings, draws: Sequence[Floats], scales: Sequence[Floats]) -> ConditionMoments:
    """Moments of every condition, for every resampling.

    Parameters
    ----------
    recordings : list
        As `read_conditions` returns them.
    draws : sequence of (R, n_trials) ndarray
        How often each trial counts; a single row is taken as the recording itself.
    scales : sequence of (R,) ndarray
        Noise variance over the given one.
    """
    parts = []
    for (a, sd, _), draw, scale in zip(recordings, draws, scales, strict=True):
        known = np.isfinite(a)
        n = known.sum(axis=0)
        middle = np.where(known, a, 0.0).sum(axis=0) / np.maximum(n, 1)
        offset = np.where(known, a - middle, 0.0)
        noise = np.where(known, sd, 0.0) ** 2
        count = draw @ known
        safe = np.maximum(count, 2.0)
        mean = draw @ offset / safe
        spread = np.maximum(draw @ offset**2 / safe - mean**2, 0.0) * safe / (safe - 1.0)
        if len(draw) > 1:  # a resample varies less than what it is drawn from
            spread = spread * n / np.maximum(n - 1.0, 1.0)
        noise_mean = draw @ noise / safe
        noise_spread = np.maximum(draw @ noise**2 / safe - noise_mean**2, 0.0)
        parts.append((middle + mean, spread, noise_mean * scale[:, None], 3.0 * noise_spread, count))
    mean, variance, noise, noise_fourth, count = (np.concatenate(arrays, axis=1) for arrays in zip(*parts, strict=True))
    return ConditionMoments(mean=mean, variance=variance, noise=noise, noise_fourth=noise_fourth, count=count)
