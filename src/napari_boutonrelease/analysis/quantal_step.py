"""From amplitudes to release: calls, the axon's quantal model, each bouton's own fit, pulse pairs."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from ..quanta import (
    AxonRelease,
    Compression,
    Estimate,
    LogPrior,
    PulsePair,
    ReleaseHistory,
    ReleasePriors,
    SitesFit,
    balanced_threshold,
    benjamini_hochberg,
    fit_axon_release,
    fit_sites,
    measure_compression,
    measure_history,
    measure_pulse_pair,
    pool_compression,
    rogan_gladen,
)
from ..responses import AmplitudeFit, ReleaseCalls, call_releases

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from .progress import Progress
    from .settings import CallSettings, PairSettings, QuantalSettings

CONFIDENCE = 0.95
_TELLING = 1.1  # sensitivity and specificity must add up to this, or the correction blows up
_AXON_PARTS = 3  # time that the whole axon takes, in units of what its boutons one by one do
_VERDICT_SHARE = 0.05  # false verdicts tolerated among the boutons said to facilitate or depress


@dataclass(frozen=True, slots=True, kw_only=True)
class ReleaseFits:
    """What the amplitudes of every bouton say about its release, whatever the threshold.

    Attributes
    ----------
    axon : AxonRelease
        Release and quanta of all boutons together.
    own : tuple of SitesFit
        Each bouton fitted alone, from pulse 1.
    pairs : tuple of PulsePair or None
        Pulse 2 against pulse 1; None without a second pulse.
    verdicts : tuple of str
        `facilitation`, `depression`, `unresolved`, or empty; corrected for the number of boutons.
    compression : tuple of Compression
        Whether each bouton's amplitudes are compressed, from the first two pulses.
    axon_compression : Compression
        The same of all boutons that tell, together.
    """

    axon: AxonRelease
    own: tuple[SitesFit, ...]
    pairs: tuple[PulsePair | None, ...]
    verdicts: tuple[str, ...]
    compression: tuple[Compression, ...]
    axon_compression: Compression


@dataclass(frozen=True, slots=True, kw_only=True)
class Counts:
    """What the calls say.

    Attributes
    ----------
    calls : ReleaseCalls
        Responses above threshold.
    corrected : tuple of Estimate
        Called fraction of pulse 1 freed of false calls and misses (Rogan & Gladen 1978).
    histories : tuple of ReleaseHistory or None
        Calls of pulse 2 after a call, and after a failure, of pulse 1.
    missed_expected : (n_boutons, n_pulses) ndarray
        Releases that the fitted model expects to stay below threshold; NaN where there is no model.
    """

    calls: ReleaseCalls
    corrected: tuple[Estimate, ...]
    histories: tuple[ReleaseHistory | None, ...]
    missed_expected: NDArray[np.float64]


def fit_release(
    fit: AmplitudeFit,
    *,
    saturated: NDArray[np.bool_],
    quanta: QuantalSettings,
    pulse_pairs: PairSettings,
    rng: np.random.Generator,
    progress: Progress | None,
) -> ReleaseFits:
    """Fit the release model to all boutons together and to each alone, and compare the pulses.

    Where the detector clips, responses do not say how large a vesicle is; other boutons are not to believe them.
    """
    amplitude, noise = fit.amplitude, fit.amplitude_se
    n_boutons, _, n_pulses = amplitude.shape
    axon = fit_axon_release(
        amplitude,
        noise,
        n_null=fit.n_null_effective,
        n_max=quanta.n_max,
        q_cv=quanta.q_cv,
        q_cv_doubt=quanta.q_cv_doubt,
        tells=~saturated,
        progress=None
        if progress is None
        else lambda done, total: progress(_AXON_PARTS * done, (_AXON_PARTS + 1) * total),
    )
    own: list[SitesFit] = []
    pairs: list[PulsePair | None] = []
    compression: list[Compression] = []
    priors = ReleasePriors(q=None, q_cv=LogPrior(centre=quanta.q_cv, log_sd=quanta.q_cv_doubt), noise=None)
    for b in range(n_boutons):
        with np.errstate(invalid="ignore", divide="ignore"):
            relative = noise[b, :, 0] / fit.noise_sd[b]
        own.append(
            fit_sites(
                amplitude[b, :, 0],
                fit.null_amplitude[b],
                relative_noise=np.where(np.isfinite(relative), relative, 1.0),
                n_max=quanta.n_max,
                priors=priors if fit.null_amplitude[b].size else _with_noise(priors, fit.noise_sd[b]),
                confidence=CONFIDENCE,
                n_bootstrap=quanta.bootstrap,
                rng=rng,
            )
        )
        pairs.append(
            measure_pulse_pair(
                amplitude[b, :, 0],
                amplitude[b, :, 1],
                noise_sd=fit.noise_sd[b],
                confidence=CONFIDENCE,
                n_bootstrap=pulse_pairs.bootstrap,
                rng=rng,
            )
            if n_pulses > 1 and np.isfinite(fit.noise_sd[b])
            else None
        )
        compression.append(
            measure_compression(
                np.full_like(amplitude[b, :, :2], np.nan) if saturated[b] else amplitude[b, :, :2],
                noise[b, :, :2],
                q=float(axon.q[b]) if axon.silent_probability[b] < 0.5 else np.nan,
                n_max=quanta.n_max,
                q_cv=quanta.q_cv,  # what the axon's fit finds has taken in the compression
                q_cv_doubt=quanta.q_cv_doubt,
            )
        )
        if progress is not None:
            progress(_AXON_PARTS * n_boutons + b + 1, (_AXON_PARTS + 1) * n_boutons)
    return ReleaseFits(
        axon=axon,
        own=tuple(own),
        pairs=tuple(pairs),
        verdicts=_verdicts(pairs),
        compression=tuple(compression),
        axon_compression=pool_compression(compression),
    )


def count_releases(fit: AmplitudeFit, axon: AxonRelease, *, settings: CallSettings) -> Counts:
    """Call releases by the threshold, and say what the calls are worth."""
    n_boutons, _, n_pulses = fit.amplitude.shape
    threshold_sd = np.full(n_boutons, settings.threshold_sd)
    if settings.threshold_rule == "balanced":
        threshold_sd = np.array([_balanced(axon, b, fit.noise_sd[b], settings) for b in range(n_boutons)])
    calls = call_releases(
        fit.amplitude, amplitude_se=fit.amplitude_se, noise_sd=fit.noise_sd, threshold_sd=threshold_sd
    )
    histories = tuple(
        measure_history(calls.called[b, :, 0], calls.called[b, :, 1], confidence=CONFIDENCE)
        if n_pulses > 1 and np.isfinite(fit.noise_sd[b])
        else None
        for b in range(n_boutons)
    )
    corrected = tuple(_corrected(axon, calls, b, fit.noise_sd[b]) for b in range(n_boutons))
    missed = expected_misses(
        axon, amplitude_se=np.where(np.isnan(calls.called), np.nan, fit.amplitude_se), threshold=calls.threshold
    )
    return Counts(calls=calls, corrected=corrected, histories=histories, missed_expected=missed)


def expected_misses(
    axon: AxonRelease, *, amplitude_se: NDArray[np.float64], threshold: NDArray[np.float64]
) -> NDArray[np.float64]:
    """Count the releases that stay below threshold, each under the noise of its own trial.

    Parameters
    ----------
    axon : AxonRelease
        The fitted model.
    amplitude_se : (n_boutons, n_trials, n_pulses) ndarray
        Noise of each amplitude, dF/F; NaN where there is none.
    threshold : (n_boutons,) ndarray
        Amplitude above which a response counts, dF/F.

    Returns
    -------
    (n_boutons, n_pulses) ndarray
        NaN where there is no model.
    """
    n_boutons, _, n_pulses = amplitude_se.shape
    missed = np.full((n_boutons, n_pulses), np.nan)
    for b, pulse in np.argwhere(np.isfinite(axon.p_site) & np.isfinite(threshold)[:, None]):
        noise_sd = amplitude_se[b, :, pulse]
        noise_sd = noise_sd[np.isfinite(noise_sd)]
        weights = vesicle_weights(axon, b, pulse=pulse)[1:]
        missed[b, pulse] = np.sum(weights * (1.0 - _caught(axon, b, threshold[b], noise_sd[:, None])))
    return missed


def vesicle_weights(axon: AxonRelease, bouton: int, *, pulse: int) -> NDArray[np.float64]:
    """Probability of 0, 1, ... vesicles at one pulse, at the bouton's most probable number of sites."""
    n = int(axon.n_sites[bouton])
    p = float(axon.p_site[bouton, pulse])
    m = np.arange(n + 1)
    choose = np.cumprod(np.concatenate([[1.0], (n - m[:-1]) / (m[:-1] + 1.0)]))
    return np.asarray(choose * p**m * (1.0 - p) ** (n - m))


def _balanced(axon: AxonRelease, bouton: int, noise_sd: float, settings: CallSettings) -> float:
    if not np.isfinite(axon.p_site[bouton, 0]) or not noise_sd > 0:
        return settings.threshold_sd
    weights = vesicle_weights(axon, bouton, pulse=0)
    return balanced_threshold(weights, q=axon.q[bouton], q_cv=axon.q_cv, noise_sd=noise_sd) / noise_sd


def _with_noise(priors: ReleasePriors, noise_sd: float) -> ReleasePriors:
    """Stand in for null amplitudes that the protocol leaves no room for."""
    if not (np.isfinite(noise_sd) and noise_sd > 0):
        return priors
    return ReleasePriors(q=priors.q, q_cv=priors.q_cv, noise=LogPrior(centre=noise_sd, log_sd=0.1))


def _corrected(axon: AxonRelease, calls: ReleaseCalls, bouton: int, noise_sd: float) -> Estimate:
    n_trials = int(calls.n_trials[bouton, 0])
    if n_trials == 0 or not np.isfinite(axon.p_site[bouton, 0]):
        return Estimate(value=np.nan, lo=np.nan, hi=np.nan, method="none: no trial")
    weights = vesicle_weights(axon, bouton, pulse=0)[1:]
    caught = _caught(axon, bouton, calls.threshold[bouton], np.array(noise_sd))
    sensitivity = float(weights @ caught / weights.sum()) if weights.sum() > 0 else float(caught[0])
    specificity = 1.0 - float(calls.false_calls_expected[bouton, 0]) / n_trials
    if sensitivity + specificity < _TELLING:
        return Estimate(value=np.nan, lo=np.nan, hi=np.nan, method="none: a call says nothing of release")
    estimate, _ = rogan_gladen(
        int(calls.n_called[bouton, 0]),
        n_trials,
        sensitivity=sensitivity,
        specificity=specificity,
        n_sensitivity=np.inf,
        n_specificity=np.inf,
        confidence=CONFIDENCE,
    )
    return estimate


def _caught(axon: AxonRelease, bouton: int, threshold: float, noise_sd: NDArray[np.float64]) -> NDArray[np.float64]:
    """Chance that 1, 2, ... vesicles (last axis) exceed the threshold under noise."""
    from scipy.special import ndtr

    m = np.arange(1, int(axon.n_sites[bouton]) + 1)
    q = axon.q[bouton]
    spread = np.sqrt(noise_sd**2 + m * (q * axon.q_cv) ** 2)
    return np.asarray(ndtr((m * q - threshold) / spread))


def _verdicts(pairs: list[PulsePair | None]) -> tuple[str, ...]:
    """Verdicts that hold although many boutons were looked at (Benjamini & Hochberg 1995)."""
    p_values = np.array([np.nan if pair is None or pair.verdict is None else pair.p_equal for pair in pairs])
    adjusted = benjamini_hochberg(p_values) if np.isfinite(p_values).any() else p_values
    return tuple(
        ""
        if pair is None or pair.verdict is None
        else pair.verdict
        if not adjusted[i] > _VERDICT_SHARE
        else "unresolved"
        for i, pair in enumerate(pairs)
    )
