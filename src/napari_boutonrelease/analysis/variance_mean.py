"""Variance against mean over the pulses of a recording: q and sites of a bouton without a histogram."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from ..quanta import ReleaseVariation, VarianceMeanFit, fit_variance_mean, pulse_patterns
from .quantal_step import CONFIDENCE

if TYPE_CHECKING:
    from .pipeline import Measured

LEAST_PULSES = 3  # two points lie on every parabola
_BOOTSTRAP = 500
_LEAST_NULL = 2.0
_STREAM = 4  # random numbers of its own, beside those of the other steps


def fit_pulses(measured: Measured, row: int) -> VarianceMeanFit | None:
    """Fit the parabola to the pulses of the bouton in a row, or return None where trials have fewer than three.

    Trials that were stimulated at other times count as other conditions, as release probability differs. Vesicles vary
    as the whole axon's fit has it. The same bouton gets the same resamplings, whichever others are asked for.

    References
    ----------
    Silver 2003 J Neurosci Methods 130:127.
    """
    stimulus_s, fit, q_cv = measured.timing.stimulus_s, measured.amplitudes, measured.release.axon.q_cv
    if stimulus_s.shape[1] < LEAST_PULSES or not np.isfinite(q_cv):
        return None
    alike = pulse_patterns(stimulus_s, tolerance_s=measured.settings.trains.same_interval_s)
    n_null = fit.n_null_effective[row]
    return fit_variance_mean(
        [fit.amplitude[row, one.trials] for one in alike],
        [fit.amplitude_se[row, one.trials] for one in alike],
        n_null=[max(float(n_null), _LEAST_NULL) if np.isfinite(n_null) else _LEAST_NULL] * len(alike),
        variation=ReleaseVariation(within_cv=float(q_cv), between_cv=0.0, within_sd="same", p_cv=0.0, p_shape=None),
        confidence=CONFIDENCE,
        n_bootstrap=_BOOTSTRAP,
        rng=np.random.default_rng([measured.settings.seed, _STREAM, int(measured.places.bouton[row])]),
    )
