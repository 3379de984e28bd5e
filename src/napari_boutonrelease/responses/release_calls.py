"""Which responses count as a release."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from ..checks import check_positive

if TYPE_CHECKING:
    from numpy.typing import NDArray

__all__ = ["ReleaseCalls", "call_releases"]


@dataclass(frozen=True, slots=True, kw_only=True)
class ReleaseCalls:
    """Calls of one recording.

    Attributes
    ----------
    called : (n_boutons, n_trials, n_pulses) ndarray
        1 release, 0 none, NaN where there is no amplitude.
    threshold : (n_boutons,) ndarray
        Amplitude above which a response counts, dF/F.
    n_trials, n_called : (n_boutons, n_pulses) ndarray of int
        Amplitudes, and calls among them.
    false_calls_expected : (n_boutons, n_pulses) ndarray
        Calls that noise alone is expected to make if there were no release at all, each amplitude with its own error.
    """

    called: NDArray[np.float64]
    threshold: NDArray[np.float64]
    n_trials: NDArray[np.intp]
    n_called: NDArray[np.intp]
    false_calls_expected: NDArray[np.float64]


def call_releases(
    amplitude: NDArray[np.float64],
    *,
    amplitude_se: NDArray[np.float64],
    noise_sd: NDArray[np.float64],
    threshold_sd: float | NDArray[np.float64],
) -> ReleaseCalls:
    """Call a release where the amplitude exceeds `threshold_sd` × `noise_sd`.

    Parameters
    ----------
    amplitude, amplitude_se : (n_boutons, n_trials, n_pulses) ndarray
        Amplitudes and their standard errors without release, dF/F; NaN where there is none.
    noise_sd : (n_boutons,) ndarray
        SD of a typical amplitude without release, dF/F.
    threshold_sd : float or (n_boutons,) ndarray
        Threshold in noise_sd, greater than 0; one for all, or one a bouton.

    Returns
    -------
    ReleaseCalls

    Raises
    ------
    InputError
        If a threshold is not greater than 0.

    Examples
    --------
    >>> calls = call_releases(np.array([[[0.1], [0.4], [np.nan]]]), amplitude_se=np.full((1, 3, 1), 0.1),
    ...                       noise_sd=np.array([0.1]), threshold_sd=2.5)
    >>> calls.called.ravel(), calls.false_calls_expected.round(4)
    (array([ 0.,  1., nan]), array([[0.0124]]))
    """
    from scipy.special import ndtr

    for value in np.unique(threshold_sd):
        if not np.isnan(value):
            check_positive("threshold_sd", value)
    threshold = threshold_sd * noise_sd
    limit = threshold[:, None, None]
    known = np.isfinite(amplitude) & np.isfinite(limit)
    called = np.where(known, (amplitude > limit).astype(np.float64), np.nan)
    with np.errstate(invalid="ignore", divide="ignore"):
        chance = ndtr(-limit / amplitude_se)
    return ReleaseCalls(
        called=called,
        threshold=np.asarray(threshold),
        n_trials=np.count_nonzero(known, axis=1),
        n_called=np.count_nonzero(called == 1, axis=1),
        false_calls_expected=np.sum(np.where(known & np.isfinite(chance), chance, 0.0), axis=1),
    )
