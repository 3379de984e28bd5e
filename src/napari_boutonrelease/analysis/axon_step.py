"""What the boutons of one axon say together: failed stimuli, spread, order along the axon, and release in common."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import numpy as np

from ..quanta import (
    CoRelease,
    Gradient,
    Heterogeneity,
    MoransI,
    SplitHalf,
    StimulusFailures,
    correlate_release_with_ratio,
    effective_counts,
    find_stimulus_failures,
    measure_co_release,
    measure_gradient,
    measure_heterogeneity,
    measure_morans_i,
    release_curves,
    release_log_ratio,
)
from .quantal_step import CONFIDENCE

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from ..quanta import AxonRelease
    from ..responses import AmplitudeFit
    from .hand_edits import HandEdits
    from .measured import Measured
    from .settings import AxonSettings, CallSettings

SUSPECTED = "suspected stimulus failure"
"""Reason that excluded stimuli carry."""

_BELIEVED = 0.05  # p that no stimulus failed, below which single stimuli are suspected


@dataclass(frozen=True, slots=True, kw_only=True)
class FailedStimuli:
    """Stimuli at which nothing seems to have been stimulated.

    Attributes
    ----------
    found : StimulusFailures
        The mixture over all stimuli that were measured.
    suspected : (n_trials, n_pulses) ndarray of bool
        Those more probable than the cut, where failures are believed at all.
    excluded : bool
        Whether the suspected ones are left out of every estimate.
    """

    found: StimulusFailures
    suspected: NDArray[np.bool_]
    excluded: bool

    @property
    def likely(self) -> bool:
        """Whether stimuli failed beyond reasonable doubt."""
        return bool(self.found.p_none < _BELIEVED)


@dataclass(frozen=True, slots=True, kw_only=True)
class AxonStatistics:
    """What the boutons say together; where it cannot be said, each part gives its reason in words.

    Attributes
    ----------
    heterogeneity : Heterogeneity
        True spread of p_release between boutons, and each bouton's shrunken estimate.
    morans_i : MoransI
        Likeness of neighbours in p_release.
    distance : Gradient
        p_release against the distance along the axon, per µm.
    co_release : CoRelease
        Release of pairs of boutons, suspected stimulus failures left out.
    split_half : SplitHalf or None
        p_release against the paired-pulse ratio; None without a second pulse.
    """

    heterogeneity: Heterogeneity
    morans_i: MoransI
    distance: Gradient
    co_release: CoRelease
    split_half: SplitHalf | None


def look_for_failed_stimuli(fit: AmplitudeFit, axon: AxonRelease, *, settings: CallSettings) -> FailedStimuli:
    """Find stimuli that reached no bouton.

    Boutons that seem silent say nothing of a stimulus.
    """
    telling = np.isfinite(axon.p_release[:, 0]) & (axon.silent_probability < 0.5)
    ratio = np.full(fit.amplitude.shape, np.nan)
    ratio[telling] = release_log_ratio(
        fit.amplitude[telling],
        fit.amplitude_se[telling] * axon.noise_scale[telling, None, None],
        q=axon.q[telling],
        q_cv=axon.q_cv,
        n_sites=axon.n_sites[telling],
        p_site=axon.p_site[telling],
    )
    found = find_stimulus_failures(ratio, confidence=CONFIDENCE)
    believed = found.p_none < _BELIEVED
    with np.errstate(invalid="ignore"):
        suspected = (found.probability > settings.stimulus_failure_cut) & believed
    excluded = bool(settings.exclude_stimulus_failures and suspected.any())
    return FailedStimuli(found=found, suspected=suspected, excluded=excluded)


def without_stimuli(fit: AmplitudeFit, left_out: NDArray[np.bool_]) -> AmplitudeFit:
    """Leave stimuli, (n_trials, n_pulses), out: their amplitudes are NaN."""
    factor = np.where(left_out, np.nan, 1.0)
    return replace(fit, amplitude=fit.amplitude * factor, amplitude_counts=fit.amplitude_counts * factor)


def measure_axon(
    fit: AmplitudeFit,
    axon: AxonRelease,
    *,
    axon_um: NDArray[np.float64],
    failed: FailedStimuli,
    settings: AxonSettings,
    rng: np.random.Generator,
) -> AxonStatistics:
    """Compare the boutons with one another, from the first pulse except for co-release.

    Parameters
    ----------
    fit : AmplitudeFit
        Amplitudes that count.
    axon : AxonRelease
        The fitted model.
    axon_um : (n_boutons,) ndarray
        Distance along the axon; NaN without a path.
    failed : FailedStimuli
        Stimuli that co-release does not look at.
    settings : AxonSettings
        Permutations, neighbours and blocks of trials.
    rng : numpy.random.Generator
        Source of the permutations.
    """
    p_release = axon.p_release[:, 0]
    released, trials, shared_variance = _comparable_counts(fit, axon)
    return AxonStatistics(
        heterogeneity=measure_heterogeneity(
            released,
            trials,
            confidence=CONFIDENCE,
            n_simulations=settings.permutations,
            rng=rng,
            shared_variance=shared_variance,
        ),
        morans_i=measure_morans_i(
            p_release,
            position=axon_um,
            weighting=settings.neighbours,
            n_permutations=settings.permutations,
            rng=rng,
        ),
        distance=measure_gradient(
            p_release, position=axon_um, confidence=CONFIDENCE, n_permutations=settings.permutations, rng=rng
        ),
        co_release=measure_co_release(
            np.where(failed.suspected, np.nan, axon.p_released),
            block_trials=settings.block_trials,
            n_permutations=settings.permutations,
            rng=rng,
        ),
        split_half=correlate_release_with_ratio(
            axon.p_released[:, :, 0],
            fit.amplitude[:, :, :2],
            noise_sd=fit.noise_sd,
            confidence=CONFIDENCE,
            n_permutations=settings.permutations,
            rng=rng,
        )
        if fit.amplitude.shape[2] > 1
        else None,
    )


def _comparable_counts(
    fit: AmplitudeFit, axon: AxonRelease
) -> tuple[NDArray[np.float64], NDArray[np.float64], NDArray[np.float64]]:
    """Return releases and trials that tell as much as pulse 1 of each bouton, and the variance that all share."""
    grid = axon.p_release_grid
    curves = release_curves(
        fit.amplitude[:, :, 0],
        fit.amplitude_se[:, :, 0] * axon.noise_scale[:, None],
        q=axon.axon_q,
        q_log_sd=axon.axon_q_spread,
        q_cv=axon.q_cv,
        n_sites=axon.n_sites,
        p_site=axon.p_site[:, 0],
        p_release=grid,
    )
    released, trials = effective_counts(curves, grid)
    a, b = released + 0.5, trials - released + 0.5
    alone = a * b / ((a + b) ** 2 * (a + b + 1.0))
    mass = axon.p_release_mass[:, 0]
    mean = mass @ grid
    return released, trials, np.maximum(mass @ grid**2 - mean**2 - alone, 0.0)


def suspected_trials(measured: Measured, edits: HandEdits) -> tuple[int, ...]:
    """Trials, from 1, of which at least one stimulus is suspected to have failed and which were not left out yet."""
    if measured.failed.excluded:
        return ()
    left_out = {trial for trial, _ in edits.excluded}
    trials = np.flatnonzero(measured.failed.suspected.any(axis=1)) + 1
    return tuple(int(trial) for trial in trials if int(trial) not in left_out)


def exclude_suspected(edits: HandEdits, measured: Measured) -> HandEdits:
    """Leave the suspected trials out by hand, whole and with the reason, so that a person can take each back."""
    for trial in suspected_trials(measured, edits):
        edits = edits.exclude(trial, SUSPECTED)
    return edits
