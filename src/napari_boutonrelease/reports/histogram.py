"""Amplitude histograms and the release model's distribution, component by component."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from ..quanta import binomial_log_weights, gamma_vesicles_logpdf, poisson_log_weights, poisson_m_max
from .facts import texts, values

if TYPE_CHECKING:
    import pandas as pd
    from numpy.typing import NDArray

    from ..analysis.measured import Measured

_NOISE_LEVELS = 9


@dataclass(frozen=True, slots=True, kw_only=True)
class AmplitudeHistogram:
    """Amplitudes of one pulse beside those without stimulus and the model's, all in trials a bin.

    Attributes
    ----------
    edges : (n_bins + 1,) ndarray
        Edges of the bins, dF/F.
    evoked : (n_bins,) ndarray
        Trials.
    null : (n_bins,) ndarray
        Amplitudes without stimulus, scaled to the share of failures, which they should then explain; empty where
        there are none.
    fine : (n,) ndarray
        Amplitudes at which the model is evaluated, dF/F.
    components : (n_components, n) ndarray
        What the model predicts for 0, 1, 2, ... vesicles; no row where there is no model.
    """

    edges: NDArray[np.float64]
    evoked: NDArray[np.float64]
    null: NDArray[np.float64]
    fine: NDArray[np.float64]
    components: NDArray[np.float64]


def amplitude_histogram(
    evoked: NDArray[np.float64],
    null: NDArray[np.float64],
    *,
    noise_sd: float,
    trial_noise_sd: NDArray[np.float64],
    model: str,
    n_sites: float,
    p_site: float,
    p_release: float,
    q: float,
    q_cv: float,
) -> AmplitudeHistogram | None:
    """Count amplitudes into bins and work out what the model predicts there.

    Parameters
    ----------
    evoked, null : (n_trials,), (n_null,) ndarray
        Amplitudes with and without stimulus, dF/F; NaN is skipped.
    noise_sd : float
        Sets the width of the bins, dF/F.
    trial_noise_sd : (n_trials,) ndarray
        Noise of each evoked amplitude, dF/F.
    model, n_sites, p_site, p_release, q, q_cv
        See `vesicle_components`.

    Returns
    -------
    AmplitudeHistogram or None
        None where there is no amplitude.
    """
    evoked, null = evoked[np.isfinite(evoked)], null[np.isfinite(null)]
    if not evoked.size:
        return None
    edges = bin_edges(evoked, null, noise_sd=noise_sd)
    trials_a_density = len(evoked) * float(edges[1] - edges[0])
    failures = 1.0 - p_release if math.isfinite(p_release) else 1.0
    fine = np.linspace(edges[0], edges[-1], 400)
    components = vesicle_components(
        fine, model=model, n_sites=n_sites, p_site=p_site, p_release=p_release, q=q, q_cv=q_cv, noise_sd=trial_noise_sd
    )
    return AmplitudeHistogram(
        edges=edges,
        evoked=np.histogram(evoked, edges)[0].astype(np.float64),
        null=failures * trials_a_density * amplitude_density(null, edges) if null.size else np.empty(0),
        fine=fine,
        components=trials_a_density * components,
    )


def histogram_of(measured: Measured, row: int, *, pulse: int) -> AmplitudeHistogram | None:
    """Return the histogram of one bouton (row) and pulse (from 0); a bouton that shows no release has no model."""
    axon, fit = measured.release.axon, measured.amplitudes
    releases = bool(np.isfinite(axon.p_release[row, 0])) and not axon.silent_probability[row] >= 0.5
    return amplitude_histogram(
        fit.amplitude[row, :, pulse],
        fit.null_amplitude[row],
        noise_sd=float(fit.noise_sd[row]),
        trial_noise_sd=fit.amplitude_se[row, :, pulse],
        model="binomial" if releases else "none",
        n_sites=float(axon.n_sites[row]),
        p_site=float(axon.p_site[row, pulse]),
        p_release=float(axon.p_release[row, pulse]),
        q=float(axon.q[row]),
        q_cv=float(axon.q_cv),
    )


def bin_edges(evoked: NDArray[np.float64], null: NDArray[np.float64], *, noise_sd: float) -> NDArray[np.float64]:
    """Edges of equal bins over evoked and null amplitudes.

    Half a noise_sd wide, or wider where the evoked amplitudes are too few to fill such bins.
    """
    everything = np.concatenate([evoked, null])
    low, high = float(everything.min()), float(everything.max())
    spread = (high - low) or max(abs(high), 1e-6)
    filled = float(np.ptp(evoked)) / (2.0 * math.sqrt(max(len(evoked), 1)))
    width = max(0.5 * noise_sd if noise_sd > 0 else spread / 20.0, filled, spread / 80.0)
    first, last = math.floor((low - 0.02 * spread) / width), math.ceil((high + 0.02 * spread) / width)
    return width * np.arange(first, max(last, first + 1) + 1, dtype=np.float64)


def amplitude_density(amplitudes: NDArray[np.float64], edges: NDArray[np.float64]) -> NDArray[np.float64]:
    """Share of the amplitudes a bin, divided by its width (1/(dF/F))."""
    return np.histogram(amplitudes, edges)[0] / (max(len(amplitudes), 1) * np.diff(edges))


def fitted_components(
    boutons: pd.DataFrame, row: int, amplitude: NDArray[np.float64], *, noise_sd: NDArray[np.float64]
) -> NDArray[np.float64]:
    """Return the density of each number of vesicles under the bouton's fitted model.

    The probability of m vesicles, Binomial(m; n_sites, p_site) or Poisson(m; -ln(1 - p_release)), times the density of
    an amplitude of m gamma-distributed vesicles under noise, averaged over the trials' noise.

    Parameters
    ----------
    boutons : DataFrame
        Table of boutons.
    row : int
        Row of the bouton.
    amplitude : (n,) ndarray
        Where to evaluate, dF/F.
    noise_sd : (n_trials,) ndarray
        Noise of each trial's amplitude, dF/F; one value stands for all.

    Returns
    -------
    (n_components, n) ndarray
        In 1/(dF/F); no component where there is no model or a parameter is missing.
    """
    one = {name: float(values(boutons, name)[row]) for name in ("n_sites", "p_site", "p_release", "q", "q_cv")}
    return vesicle_components(amplitude, model=texts(boutons, "quantal_model")[row], noise_sd=noise_sd, **one)


def vesicle_components(
    amplitude: NDArray[np.float64],
    *,
    model: str,
    n_sites: float,
    p_site: float,
    p_release: float,
    q: float,
    q_cv: float,
    noise_sd: NDArray[np.float64],
) -> NDArray[np.float64]:
    """Return what `fitted_components` does, from the parameters themselves.

    Parameters
    ----------
    amplitude : (n,) ndarray
        Where to evaluate, dF/F.
    model : str
        `binomial`, `poisson` or `none`.
    n_sites, p_site, p_release, q, q_cv : float
        The model's parameters; q in dF/F. NaN where not known.
    noise_sd : (n_trials,) ndarray
        Noise of each trial's amplitude, dF/F; one value stands for all.

    Returns
    -------
    (n_components, n) ndarray
    """
    weights = _weights(model, n_sites=n_sites, p_site=p_site, p_release=p_release)
    noise = noise_sd[np.isfinite(noise_sd) & (noise_sd > 0)]
    if not weights.size or not noise.size or not q > 0:
        return np.empty((0, len(amplitude)))
    if noise.size > _NOISE_LEVELS:  # a few levels stand for hundreds of trials
        noise = np.quantile(noise, (np.arange(_NOISE_LEVELS) + 0.5) / _NOISE_LEVELS)
    log_density = gamma_vesicles_logpdf(
        amplitude,
        vesicles=np.arange(len(weights))[:, None],
        q=q,
        q_cv=max(np.nan_to_num(q_cv), 1e-3),
        noise_sd=noise[:, None, None],
    )
    return np.asarray(weights[:, None] * np.exp(log_density).mean(axis=0))


def _weights(model: str, *, n_sites: float, p_site: float, p_release: float) -> NDArray[np.float64]:
    """Probability of 0, 1, 2, ... vesicles."""
    if model == "binomial" and n_sites >= 1 and 0.0 <= p_site <= 1.0:
        return np.exp(binomial_log_weights(p_site, n_sites=int(n_sites), m_max=int(n_sites)))
    if model == "poisson" and 0.0 <= p_release < 1.0:
        mean = -math.log1p(-p_release)
        return np.exp(poisson_log_weights(mean, m_max=poisson_m_max(mean)))
    return np.empty(0)
