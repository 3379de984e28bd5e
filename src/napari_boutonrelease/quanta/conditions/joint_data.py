"""What the joint fit of one bouton is given, checked and laid out by cell: a pulse of a recording."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from ...checks import check_array, check_positive
from ...errors import InputError
from .joint_likelihood import Cells, p_bounds

if TYPE_CHECKING:
    from collections.abc import Sequence

    from numpy.typing import ArrayLike, NDArray

    from ..one_bouton.mixture_fit import LogPrior

    Floats = NDArray[np.float64]

_SMALLEST_Q_SD, _LARGEST_Q_SD = 0.7, 12.0
_NOISE_DOUBT = 0.02  # relative: nulls and evoked amplitudes are not measured at the same moments
_LARGEST_NOISE_DOUBT = 0.3
_LARGEST_NOISE_CHANGE = 0.7  # of its logarithm
_Q_CV_DOUBTS = 4.0  # how many of them q_cv may move
_Q_CV_RANGE = (0.02, 1.0)


@dataclass(frozen=True, slots=True, kw_only=True)
class JointData:
    """Amplitudes of one bouton in one recording.

    Attributes
    ----------
    amplitude : (n_trials, n_pulses) array_like of float
        dF/F; NaN marks what is not to be used.
    amplitude_sd : (n_trials, n_pulses) array_like of float
        SD of the noise of each amplitude, calibrated on null amplitudes.
    n_null : float
        Number of null amplitudes behind that calibration: how well the noise is known.
    """

    amplitude: ArrayLike
    amplitude_sd: ArrayLike
    n_null: float


def read_cells(
    recordings: Sequence[JointData], *, q_cv: float, q_cv_doubt: float, q_prior: LogPrior | None
) -> Cells | None:
    """Check the recordings and lay out their finite amplitudes; None where fewer than two differ.

    The noise scale of a recording has a log-normal prior about 1, as wide as `n_null` null amplitudes leave it; q_cv
    has one about `q_cv`. A prior of q holds for the mean of log q over recordings, so that it is counted once and does
    not favour q being the same in all.

    Raises
    ------
    InputError
        If there is no recording, shapes differ, or a number is out of range.
    """
    if not recordings:
        raise InputError("A joint fit needs at least one recording (given none).")
    check_positive("q_cv", q_cv)
    check_positive("q_cv_doubt", q_cv_doubt)
    if q_prior is not None:
        check_positive("centre of q_prior", q_prior.centre)
        check_positive("log_sd of q_prior", q_prior.log_sd)
    values, noises, places = [], [], []
    for r, one in enumerate(recordings):
        amplitude = check_array(f"amplitude of recording {r + 1}", one.amplitude, n_dims=2)
        sd = check_array(f"amplitude_sd of recording {r + 1}", one.amplitude_sd, n_dims=2)
        if amplitude.shape != sd.shape:
            raise InputError(
                f"amplitude {amplitude.shape} and amplitude_sd {sd.shape} of recording {r + 1} must have one shape."
            )
        good = np.isfinite(amplitude) & np.isfinite(sd) & (sd > 0)
        for j in np.flatnonzero(good.any(axis=0)):
            values.append(amplitude[good[:, j], j])
            noises.append(sd[good[:, j], j])
            places.append((r, int(j)))
    if not values or np.ptp(np.concatenate(values)) == 0:
        return None
    sizes = np.array([len(part) for part in values])
    where = np.array(places, dtype=np.intp)
    used, recording = np.unique(where[:, 0], return_inverse=True)
    amplitude, sd = np.concatenate(values), np.concatenate(noises)
    lower, upper = _bounds(amplitude, sd, len(used), len(sizes), q_cv=q_cv, q_cv_doubt=q_cv_doubt)
    mean, precision = np.zeros(lower.size), np.zeros((lower.size, lower.size))
    cells = Cells(
        amplitude=amplitude,
        sd=sd,
        first=np.concatenate([[0], np.cumsum(sizes)[:-1]]).astype(np.intp),
        cell=np.repeat(np.arange(len(sizes)), sizes),
        recording=recording.astype(np.intp),
        pulse=where[:, 1],
        recordings=used,
        lower=lower,
        upper=upper,
        prior_mean=mean,
        prior_precision=precision,
    )
    mean[cells.q_cv] = np.log(q_cv)
    precision[cells.q_cv, cells.q_cv] = q_cv_doubt**-2.0
    for r, k in zip(used, cells.noise, strict=True):
        doubt = np.hypot(np.sqrt(0.5 / max(recordings[r].n_null, 2.0)), _NOISE_DOUBT)
        precision[k, k] = min(doubt, _LARGEST_NOISE_DOUBT) ** -2.0
    if q_prior is not None:
        mean[cells.q] = np.log(q_prior.centre)
        precision[np.ix_(cells.q, cells.q)] = (q_prior.log_sd * len(used)) ** -2.0
    return cells


def _bounds(
    amplitude: Floats, sd: Floats, n_recordings: int, n_cells: int, *, q_cv: float, q_cv_doubt: float
) -> tuple[Floats, Floats]:
    """Limits of all parameters; a vesicle smaller than these could not be told from noise."""
    typical = float(np.median(sd))
    q = np.log([_SMALLEST_Q_SD * typical, max(_LARGEST_Q_SD * typical, 1.1 * float(amplitude.max()))])
    variation = np.log(q_cv) + _Q_CV_DOUBTS * q_cv_doubt * np.array([-1.0, 1.0])
    variation = np.clip(variation, *np.log(_Q_CV_RANGE))
    noise = np.array([-_LARGEST_NOISE_CHANGE, _LARGEST_NOISE_CHANGE])
    counts = [n_recordings, 1, n_recordings, n_cells]
    lower, upper = (np.repeat([q[i], variation[i], noise[i], p_bounds()[i]], counts).astype(np.float64) for i in (0, 1))
    return lower, upper
