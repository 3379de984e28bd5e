"""Curves that the tables of trains and pulse intervals describe, to be drawn."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING

import numpy as np

from ..quanta import release_shares

if TYPE_CHECKING:
    from collections.abc import Mapping

    from numpy.typing import NDArray

    Floats = NDArray[np.float64]

_COURSES = (("facilitation", 1.0), ("depression", -1.0))


def train_curve(row: Mapping[str, float], pulse_s: Floats) -> Floats:
    """Amplitudes (dF/F) that the model of a train gives each pulse (Tsodyks and Markram 1997).

    Parameters
    ----------
    row : mapping
        `u`, `resources`, `tau_rec_s` and `tau_facil_s`, as in the table of trains.
    pulse_s : (n_pulses,) ndarray
        Time of each pulse after the first.

    Returns
    -------
    (n_pulses,) ndarray
        Empty where there is no model.
    """
    if not (math.isfinite(row["u"]) and math.isfinite(row["resources"]) and pulse_s.size):
        return np.empty(0)
    # a time constant that is not known is longer than the train can tell
    recovery, facilitation = (
        row[name] if math.isfinite(row[name]) else math.inf for name in ("tau_rec_s", "tau_facil_s")
    )
    shares = release_shares(pulse_s, u=row["u"], tau_rec_s=recovery, tau_facil_s=facilitation)
    return np.asarray(row["resources"] * shares)


def ratio_curve(row: Mapping[str, float], interval_s: Floats) -> Floats:
    """Paired-pulse ratio at some intervals after the chosen time course.

    Parameters
    ----------
    row : mapping
        `facilitation`, `facilitation_s`, `depression` and `depression_s`, as in the table of recovery; NaN where the
        time course has no such term.
    interval_s : (n,) ndarray
        Times from pulse 1 to pulse 2.

    Returns
    -------
    (n,) ndarray
    """
    curve = np.ones(interval_s.shape)
    for name, sign in _COURSES:
        size, time_s = row[name], row[f"{name}_s"]
        if math.isfinite(size):
            curve += sign * size * (np.exp(-interval_s / time_s) if math.isfinite(time_s) else 1.0)
    return curve
