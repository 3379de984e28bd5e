"""Which trials of a recording were stimulated alike."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from ...checks import check_array, check_not_negative

if TYPE_CHECKING:
    from numpy.typing import ArrayLike, NDArray


@dataclass(frozen=True, slots=True, kw_only=True)
class PulsePattern:
    """Trials whose pulses come at the same times after the first.

    Attributes
    ----------
    pulse_s : (n_pulses,) ndarray
        Mean time of each pulse after the first, in s; starts with 0.
    trials : (n_trials,) ndarray of int
        Rows of the trials, from 0.
    """

    pulse_s: NDArray[np.float64]
    trials: NDArray[np.intp]

    @property
    def interval_s(self) -> float:
        """Time from pulse 1 to pulse 2, in s; NaN without a second pulse."""
        return float(self.pulse_s[1]) if self.pulse_s.size > 1 else float("nan")


def pulse_interval_groups(stimulus_s: ArrayLike, *, tolerance_s: float) -> tuple[PulsePattern, ...]:
    """Group trials by the time from pulse 1 to pulse 2.

    Parameters
    ----------
    stimulus_s : (n_trials, n_pulses) array_like of float
        Stimulus times, in s; NaN where a trial has no such pulse. Trials without a second pulse are left out.
    tolerance_s : float
        Sorted intervals that follow each other by no more than this belong together, in s.

    Returns
    -------
    tuple of PulsePattern
        From the shortest interval to the longest; `pulse_s` holds the first two pulses.

    Examples
    --------
    >>> groups = pulse_interval_groups([[0.0, 0.05], [1.0, 1.2], [2.0, 2.05]], tolerance_s=0.001)
    >>> [(round(group.interval_s, 3), group.trials.tolist()) for group in groups]
    [(0.05, [0, 2]), (0.2, [1])]
    """
    times = check_array("stimulus_s", stimulus_s, n_dims=2)
    return _alike(times[:, :2], tolerance_s) if times.shape[1] > 1 else ()


def pulse_patterns(stimulus_s: ArrayLike, *, tolerance_s: float) -> tuple[PulsePattern, ...]:
    """Group trials by the times of all their pulses after the first.

    Parameters as in `pulse_interval_groups`, but `tolerance_s` bounds each pulse's distance from the group's first
    trial. Trials with missing pulses make groups of their own.

    Examples
    --------
    >>> groups = pulse_patterns([[0.0, 0.1, 0.2], [1.0, 1.1, 1.2], [2.0, 2.1, np.nan]], tolerance_s=0.001)
    >>> [(group.pulse_s.round(3).tolist(), group.trials.tolist()) for group in groups]
    [([0.0, 0.1], [2]), ([0.0, 0.1, 0.2], [0, 1])]
    """
    times = check_array("stimulus_s", stimulus_s, n_dims=2)
    return tuple(
        group
        for n_pulses in range(1, times.shape[1] + 1)
        for group in _alike(times[:, :n_pulses], tolerance_s, and_no_more=times[:, n_pulses:])
    )


def _alike(
    times: NDArray[np.float64], tolerance_s: float, *, and_no_more: NDArray[np.float64] | None = None
) -> tuple[PulsePattern, ...]:
    check_not_negative("tolerance_s", tolerance_s, unit="s")
    there = np.isfinite(times).all(axis=1)
    if and_no_more is not None:
        there &= np.isnan(and_no_more).all(axis=1)
    after_first = times - times[:, :1]
    left = np.flatnonzero(there)
    left = left[np.lexsort(after_first[left].T[::-1])]
    groups: list[list[int]] = []
    for row in left:
        # neighbours in order differ by jitter alone, or by a pulse that was meant to come elsewhere
        if groups and np.all(np.abs(after_first[row] - after_first[groups[-1][-1]]) <= tolerance_s):
            groups[-1].append(int(row))
        else:
            groups.append([int(row)])
    found = [PulsePattern(pulse_s=after_first[rows].mean(axis=0), trials=np.sort(rows)) for rows in groups]
    return tuple(sorted(found, key=lambda group: tuple(group.pulse_s)))
