"""Joint fits of each bouton, over all recordings and over each pair of them, and variance against mean."""

from __future__ import annotations

from dataclasses import dataclass
from itertools import combinations
from typing import TYPE_CHECKING

import numpy as np

from ..analysis.quantal_step import CONFIDENCE
from ..quanta import (
    InverseCv2Change,
    JointData,
    JointFit,
    LogPrior,
    ReleaseVariation,
    VarianceMeanFit,
    fit_joint,
    fit_variance_mean,
    inverse_cv2_change,
)

if TYPE_CHECKING:
    from collections.abc import Sequence

    from ..analysis.progress import Progress
    from .matching import Matches
    from .recording import ComparedRecording
    from .settings import CompareSettings

_Q_DOUBT = 0.3  # SD of log q about the axons' vesicle: more than boutons of one axon differ


@dataclass(frozen=True, slots=True, kw_only=True)
class BoutonFits:
    """What the recordings of one bouton say together.

    Attributes
    ----------
    there : tuple of int
        Recordings in which it was found.
    joint : JointFit
        Over all of those; its recordings are numbered as in `there`.
    pairs : dict of (int, int) to JointFit
        Over two recordings each.
    inverse_cv2 : dict of (int, int) to InverseCv2Change
        1/CV² against mean of pulse 1, from the earlier to the later.
    variance_mean : VarianceMeanFit
        Over all pulses and recordings.
    """

    there: tuple[int, ...]
    joint: JointFit
    pairs: dict[tuple[int, int], JointFit]
    inverse_cv2: dict[tuple[int, int], InverseCv2Change]
    variance_mean: VarianceMeanFit


def fit_boutons(
    recordings: Sequence[ComparedRecording],
    matches: Matches,
    *,
    settings: CompareSettings,
    rng: np.random.Generator,
    progress: Progress | None,
) -> tuple[BoutonFits, ...]:
    """Fit every bouton of the first recording that another one has, too; the others get a fit of what there is."""
    fits = []
    q_prior = _common_vesicle(recordings)
    for bouton, rows in enumerate(matches.row):
        there = tuple(int(k) for k in np.flatnonzero(rows >= 0))
        fits.append(_fit_bouton(recordings, rows, there, q_prior=q_prior, settings=settings, rng=rng))
        if progress is not None:
            progress(bouton + 1, len(matches.row))
    return tuple(fits)


def _fit_bouton(
    recordings: Sequence[ComparedRecording],
    rows: np.ndarray,
    there: tuple[int, ...],
    *,
    q_prior: LogPrior | None,
    settings: CompareSettings,
    rng: np.random.Generator,
) -> BoutonFits:
    data = {k: _data(recordings[k], int(rows[k])) for k in there}
    noise_sd = {k: float(recordings[k].column("noise_sd")[rows[k]]) for k in there}

    def joint(chosen: Sequence[int]) -> JointFit:
        return fit_joint(
            [data[k] for k in chosen],
            n_max=settings.n_max,
            q_cv=settings.q_cv,
            q_cv_doubt=settings.q_cv_doubt,
            q_prior=q_prior,
            confidence=CONFIDENCE,
        )

    whole = joint(there)
    pairs = {pair: whole if len(there) == 2 else joint(pair) for pair in combinations(there, 2)}
    cv2 = {
        (a, b): inverse_cv2_change(
            np.asarray(data[a].amplitude)[:, 0],
            np.asarray(data[b].amplitude)[:, 0],
            noise_sd=(noise_sd[a], noise_sd[b]),
            n_null=(data[a].n_null, data[b].n_null),
            confidence=CONFIDENCE,
            n_bootstrap=settings.bootstrap,
            rng=rng,
        )
        for a, b in pairs
        if np.isfinite(noise_sd[a]) and np.isfinite(noise_sd[b])
    }
    parabola = fit_variance_mean(
        [data[k].amplitude for k in there],
        [data[k].amplitude_sd for k in there],
        n_null=[data[k].n_null for k in there],
        variation=ReleaseVariation(within_cv=settings.q_cv, between_cv=0.0, within_sd="same", p_cv=0.0, p_shape=None),
        confidence=CONFIDENCE,
        n_bootstrap=settings.bootstrap,
        rng=rng,
    )
    return BoutonFits(there=there, joint=whole, pairs=pairs, inverse_cv2=cv2, variance_mean=parabola)


def _common_vesicle(recordings: Sequence[ComparedRecording]) -> LogPrior | None:
    """Return the axons' vesicle, held so loosely that a bouton that releases hardly leans on it.

    It says to a silent bouton how large a response would have been; without it, none could be too small to be seen.
    """
    sizes = [recording.summary.get("population", {}).get("q") for recording in recordings]
    known = [float(size) for size in sizes if size]
    return LogPrior(centre=float(np.exp(np.mean(np.log(known)))), log_sd=_Q_DOUBT) if known else None


def _data(recording: ComparedRecording, row: int) -> JointData:
    n_null = float(recording.column("noise_n")[row])
    return JointData(
        amplitude=recording.amplitude[row],
        amplitude_sd=recording.amplitude_sd[row],
        n_null=max(n_null, 2.0) if np.isfinite(n_null) else 2.0,
    )
