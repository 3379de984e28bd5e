"""Does the paired-pulse ratio depend on the starting p_release? Correlated over boutons, without shared noise.

Both numbers rest on the first responses: a bouton whose first responses were few by chance shows a low p_release and a
high ratio, a correlation where there is none. Taking p_release from odd trials and the ratio from even ones, and the
other way round, keeps the two noises apart.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from scipy.special import stdtrit

from ...checks import check_array
from ...errors import InputError
from ..statistics.intervals import Estimate
from .gradient import spearman, standard_ranks

if TYPE_CHECKING:
    from collections.abc import Callable

    from numpy.typing import ArrayLike, NDArray

    Floats = NDArray[np.float64]

FEWEST = 5
"""Boutons below which no correlation is given."""

_SEEN_SE = 2.0  # the first mean must rise this many SE of the noise above zero


@dataclass(frozen=True, slots=True, kw_only=True)
class SplitHalf:
    """Correlation over boutons of starting p_release with the paired-pulse ratio.

    Attributes
    ----------
    plain : Estimate
        Spearman's correlation of both from all trials; shared noise makes it too negative.
    plain_p : float
        Its two-sided permutation p.
    corrected : Estimate
        The mean of p_release of odd trials with the ratio of even ones, and the reverse. Noise still draws it towards
        zero, but no longer away from it. NaN with `method` saying why.
    corrected_p : float
        Its two-sided permutation p.
    n_boutons : int
        Boutons with a ratio in both halves.
    """

    plain: Estimate
    plain_p: float
    corrected: Estimate
    corrected_p: float
    n_boutons: int


def correlate_release_with_ratio(
    p_released: ArrayLike,
    amplitude: ArrayLike,
    *,
    noise_sd: ArrayLike,
    confidence: float,
    n_permutations: int,
    rng: np.random.Generator,
) -> SplitHalf:
    """Correlate starting p_release with the paired-pulse ratio over boutons, plain and split-half corrected.

    Parameters
    ----------
    p_released : (n_boutons, n_trials) array_like
        Probability that pulse 1 of each trial released, or the call; NaN where not measured.
    amplitude : (n_boutons, n_trials, 2) array_like
        Amplitudes of both pulses, dF/F; NaN where not measured.
    noise_sd : (n_boutons,) array_like
        Noise of an amplitude: a bouton whose first mean is within noise of zero has no ratio.
    confidence : float
        Coverage of the intervals: Fisher's z with its SE by the jackknife over boutons.
    n_permutations : int
        Random orders for the p.
    rng : numpy.random.Generator
        Source of the orders.

    Raises
    ------
    InputError
        If shapes differ.

    References
    ----------
    Spearman 1904 Am J Psychol 15:72; Efron & Tibshirani 1993 An Introduction to the Bootstrap, ch. 11 (jackknife).
    """
    chance, a = check_array("p_released", p_released, n_dims=2), check_array("amplitude", amplitude, n_dims=3)
    noise = check_array("noise_sd", noise_sd, n_dims=1)
    if a.shape != (*chance.shape, 2) or noise.shape != chance.shape[:1]:
        raise InputError(
            f"p_released {chance.shape}, amplitude {a.shape} and noise_sd {noise.shape} must describe the same boutons "
            "and trials, with two pulses."
        )
    there = np.isfinite(a).all(axis=2) & np.isfinite(chance)
    halves = (np.arange(chance.shape[1]) % 2 == 0, np.arange(chance.shape[1]) % 2 == 1)
    # Asked of all trials: a half that must rise above noise too would keep the high halves of weak boutons alone.
    count = there.sum(axis=1)
    mean = np.where(there, a[:, :, 0], 0.0).sum(axis=1) / np.maximum(count, 1)
    seen = mean > _SEEN_SE * noise / np.sqrt(np.maximum(count, 1))
    p, ratio = (np.full((3, len(a)), np.nan) for _ in range(2))
    for part, inside in enumerate((np.ones(chance.shape[1], dtype=bool), *halves)):
        for b in range(len(a)):
            used = there[b] & inside
            first = a[b, used, 0]
            if used.sum() > 2 and seen[b]:
                p[part, b] = chance[b, used].mean()
                ratio[part, b] = _centred_ratio(a[b, used, 1], first)
    known = ~np.isnan(ratio).any(axis=0) & np.isfinite(p).all(axis=0)
    n = int(known.sum())
    if n < FEWEST:
        none = Estimate(
            value=np.nan, lo=np.nan, hi=np.nan, method=f"none: needs {FEWEST} boutons with a ratio (given {n})"
        )
        return SplitHalf(plain=none, plain_p=np.nan, corrected=none, corrected_p=np.nan, n_boutons=n)
    p, ratio = p[:, known], ratio[:, known]
    plain, plain_p = spearman(p[0], ratio[0], n_permutations=n_permutations, rng=rng)
    corrected = _crossed(p[1:], ratio[1:])
    orders = rng.permuted(np.tile(np.arange(n), (n_permutations, 1)), axis=1)
    random = _crossed_in_orders(p[1:], ratio[1:], orders)
    return SplitHalf(
        plain=_with_jackknife(plain, lambda kept: _rank_correlation(p[0, kept], ratio[0, kept]), n, confidence),
        plain_p=plain_p,
        corrected=_with_jackknife(corrected, lambda kept: _crossed(p[1:, kept], ratio[1:, kept]), n, confidence),
        corrected_p=float((1 + np.sum(np.abs(random) >= abs(corrected) - 1e-12)) / (1 + n_permutations)),
        n_boutons=n,
    )


def _centred_ratio(second: Floats, first: Floats) -> float:
    """Ratio of means whose logarithm has no bias, to second order.

    An arithmetic mean without bias (`unbiased_ratio`) is not what ranks ask for: it puts boutons of low p_release,
    whose ratios scatter most, below the others in most samples, a correlation where there is none.
    """
    above, below = float(second.mean()), float(first.mean())
    if below <= 0:
        return float("inf")  # among ranks the highest
    if above <= 0:
        return above / below
    bias = second.var(ddof=1) / above**2 - first.var(ddof=1) / below**2
    return float(above / below * np.exp(0.5 * np.clip(bias / first.size, -1.0, 1.0)))


def _rank_correlation(x: Floats, y: Floats) -> float:
    return float(standard_ranks(x) @ standard_ranks(y))


def _crossed(p: Floats, ratio: Floats) -> float:
    """Mean of the correlations of one half's p_release with the other half's ratio."""
    return 0.5 * (_rank_correlation(p[0], ratio[1]) + _rank_correlation(p[1], ratio[0]))


def _crossed_in_orders(p: Floats, ratio: Floats, orders: NDArray[np.intp]) -> Floats:
    """Return the same for boutons exchanged; both halves of a bouton move together."""
    odd, even = standard_ranks(p[0]), standard_ranks(p[1])
    return np.asarray(0.5 * (standard_ranks(ratio[1])[orders] @ odd + standard_ranks(ratio[0])[orders] @ even))


def _with_jackknife(value: float, without: Callable[[NDArray[np.bool_]], float], n: int, confidence: float) -> Estimate:
    z = np.arctanh(np.clip(value, -1 + 1e-6, 1 - 1e-6))
    others = np.array([without(np.arange(n) != i) for i in range(n)])
    others = np.arctanh(np.clip(others, -1 + 1e-6, 1 - 1e-6))
    se = float(np.sqrt((n - 1) / n * np.sum((others - others.mean()) ** 2)))
    half = float(stdtrit(n - 1, 0.5 * (1.0 + confidence))) * se
    return Estimate(
        value=value, se=se, lo=float(np.tanh(z - half)), hi=float(np.tanh(z + half)), method="Spearman, jackknife"
    )
