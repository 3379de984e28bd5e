"""Amplitude histograms and the release model's distribution, component by component."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING

import numpy as np

from .facts import texts, values

if TYPE_CHECKING:
    import pandas as pd
    from numpy.typing import NDArray

_MOST_COMPONENTS = 40


def bin_edges(evoked: NDArray[np.float64], null: NDArray[np.float64], *, noise_sd: float) -> NDArray[np.float64]:
    """Edges of bins of half a noise_sd (at most 80 bins) over evoked and null amplitudes."""
    everything = np.concatenate([evoked, null])
    low, high = float(everything.min()), float(everything.max())
    spread = (high - low) or max(abs(high), 1e-6)
    width = max(0.5 * noise_sd if noise_sd > 0 else spread / 20.0, spread / 80.0)
    first, last = math.floor((low - 0.02 * spread) / width), math.ceil((high + 0.02 * spread) / width)
    return width * np.arange(first, max(last, first + 1) + 1, dtype=np.float64)


def amplitude_density(amplitudes: NDArray[np.float64], edges: NDArray[np.float64]) -> NDArray[np.float64]:
    """Share of the amplitudes a bin, divided by its width (1/(dF/F))."""
    return np.histogram(amplitudes, edges)[0] / (max(len(amplitudes), 1) * np.diff(edges))


def fitted_components(boutons: pd.DataFrame, row: int, amplitude: NDArray[np.float64]) -> NDArray[np.float64]:
    """Return the density of each number of vesicles under the bouton's fitted model (Boyd and Martin 1956).

    Component m is Binomial(m; n_sites, p_site), or Poisson(m; -ln(1 - p_release)), times
    Normal(m q, noise_sd² + m (q q_cv)²).

    Parameters
    ----------
    boutons : DataFrame
        Table of boutons.
    row : int
        Row of the bouton.
    amplitude : (n,) ndarray
        Where to evaluate, dF/F.

    Returns
    -------
    (n_components, n) ndarray
        In 1/(dF/F); no component where there is no model or a parameter is missing.
    """
    none = np.empty((0, len(amplitude)))
    one = {
        name: float(values(boutons, name)[row]) for name in ("n_sites", "p_site", "p_release", "q", "q_cv", "noise_sd")
    }
    weights = _weights(texts(boutons, "quantal_model")[row], one)
    if not weights or not (one["noise_sd"] > 0 and math.isfinite(one["q"])):
        return none
    vesicles = np.arange(len(weights))
    q_cv = one["q_cv"] if math.isfinite(one["q_cv"]) else 0.0
    variance = one["noise_sd"] ** 2 + vesicles * (one["q"] * q_cv) ** 2
    distance = amplitude[None, :] - vesicles[:, None] * one["q"]
    normal = np.exp(-0.5 * distance**2 / variance[:, None]) / np.sqrt(2 * np.pi * variance[:, None])
    return np.asarray(weights, dtype=np.float64)[:, None] * np.asarray(normal, dtype=np.float64)


def _weights(model: str, one: dict[str, float]) -> list[float]:
    """Probability of 0, 1, 2, ... vesicles."""
    n_sites, p_site, p_release = one["n_sites"], one["p_site"], one["p_release"]
    if model == "binomial" and n_sites >= 1 and 0.0 <= p_site <= 1.0:
        n = int(n_sites)
        return [math.comb(n, m) * p_site**m * (1.0 - p_site) ** (n - m) for m in range(n + 1)]
    if model == "poisson" and 0.0 <= p_release < 1.0:
        mean = -math.log1p(-p_release)
        return [math.exp(-mean) * mean**m / math.factorial(m) for m in range(_MOST_COMPONENTS)]
    return []
