"""Do boutons release together? Correlation between boutons over stimuli, against independence."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from ...checks import check_array
from ...errors import InputError
from ..statistics.false_discovery import benjamini_hochberg

if TYPE_CHECKING:
    from numpy.typing import ArrayLike, NDArray

    Floats = NDArray[np.float64]

FEWEST_TRIALS = 10
"""Trials below which no correlation is given."""

_LEAST_SPREAD = 1e-3  # SD of p_released; below, a bouton does the same every time
_PAIRS_RESOLVED = 20  # permutations per pair of boutons, so that one pair can stand out among all
_MOST_PERMUTATIONS = 5000


@dataclass(frozen=True, slots=True, kw_only=True)
class CoRelease:
    """Correlation of release between boutons, trial by trial.

    Attributes
    ----------
    correlation : (n_boutons, n_boutons) ndarray
        NaN on the diagonal, and where a bouton does the same every time.
    together, together_expected : (n_boutons, n_boutons) ndarray
        Stimuli at which both released, and as many as independent boutons would show.
    p, p_adjusted : (n_boutons, n_boutons) ndarray
        Two-sided permutation p that the two are independent, plain and adjusted for the number of pairs (Benjamini &
        Hochberg 1995).
    mean : float
        Mean correlation over pairs; NaN where there is none.
    mean_lo, mean_hi : float
        Central 95 % of that mean if boutons are independent.
    mean_p : float
        Two-sided permutation p of the mean.
    n_boutons, n_stimuli : int
        Boutons and stimuli that entered.
    reason : str
        Why there is no correlation; empty where there is.
    """

    correlation: Floats
    together: Floats
    together_expected: Floats
    p: Floats
    p_adjusted: Floats
    mean: float
    mean_lo: float
    mean_hi: float
    mean_p: float
    n_boutons: int
    n_stimuli: int
    reason: str


def measure_co_release(
    released: ArrayLike, *, block_trials: int, n_permutations: int, rng: np.random.Generator
) -> CoRelease:
    """Correlate the release of every pair of boutons over stimuli, slow changes taken out.

    From each bouton and pulse its mean over a block of trials is taken off, so that rundown makes no correlation.
    Independence is simulated by exchanging the trials within every block, bouton by bouton.

    Parameters
    ----------
    released : (n_boutons, n_trials, n_pulses) array_like of float
        Calls, or probabilities of release; NaN where not measured. Stimuli that failed altogether must be NaN.
    block_trials : int
        Trials of a block, at least 4.
    n_permutations : int
        Random exchanges at least; more where there are many pairs.
    rng : numpy.random.Generator
        Source of the exchanges.

    Returns
    -------
    CoRelease

    Notes
    -----
    A trial in which a bouton was not measured is left out for that bouton alone. Light of neighbours that was not
    separated, and noise that boutons share, correlate them too.

    Examples
    --------
    >>> rng = np.random.default_rng(1)
    >>> one = (rng.random((1, 100, 1)) < 0.5) * 1.0
    >>> found = measure_co_release(np.concatenate([one, one]), block_trials=20, n_permutations=999, rng=rng)
    >>> round(found.mean, 3), found.mean_p
    (1.0, 0.001)
    """
    x = check_array("released", released, n_dims=3)
    if block_trials < 4:
        raise InputError(f"block_trials must be at least 4 (given {block_trials}).")
    n_boutons = len(x)
    x = x[:, np.isfinite(x).any(axis=(0, 2))] if n_boutons else x  # what was measured nowhere is not exchanged
    n_trials = x.shape[1]
    blocks = np.minimum(np.arange(n_trials) // block_trials, max(n_trials // block_trials - 1, 0))
    residual = _without_slow_changes(x, blocks)
    varies = np.sqrt(np.mean(residual**2, axis=(1, 2))) > _LEAST_SPREAD if x.size else np.zeros(n_boutons, dtype=bool)
    n_stimuli = int(np.isfinite(x[varies]).any(axis=0).sum())
    reason = (
        f"co-release needs at least {FEWEST_TRIALS} trials (given {n_trials})"
        if n_trials < FEWEST_TRIALS
        else f"co-release needs two boutons that release at some stimuli and fail at others (given {int(varies.sum())})"
        if varies.sum() < 2
        else ""
    )
    correlation, together, expected, p = (np.full((n_boutons, n_boutons), np.nan) for _ in range(4))
    if reason:
        return CoRelease(
            correlation=correlation,
            together=together,
            together_expected=expected,
            p=p,
            p_adjusted=p.copy(),
            mean=np.nan,
            mean_lo=np.nan,
            mean_hi=np.nan,
            mean_p=np.nan,
            n_boutons=int(varies.sum()),
            n_stimuli=n_stimuli,
            reason=reason,
        )
    rows = np.flatnonzero(varies)
    upper = np.triu_indices(rows.size, 1)
    z = residual[rows]
    z = z / np.sqrt(np.sum(z**2, axis=(1, 2), keepdims=True))
    found = np.einsum("atj,btj->ab", z, z)[upper]
    n_permutations = int(np.clip(_PAIRS_RESOLVED * found.size, n_permutations, max(_MOST_PERMUTATIONS, n_permutations)))
    exceeding = np.zeros(found.size)
    means = np.empty(n_permutations)
    for k in range(n_permutations):
        mixed = _exchange(z, blocks, rng).reshape(rows.size, -1)
        random = (mixed @ mixed.T)[upper]
        exceeding += np.abs(random) >= np.abs(found) - 1e-12
        means[k] = random.mean()
    one, other = rows[upper[0]], rows[upper[1]]
    known = np.nan_to_num(x)
    both = np.einsum("atj,btj->ab", known, known)[one, other]
    pair_p = (1.0 + exceeding) / (1.0 + n_permutations)
    for matrix, values in (
        (correlation, found),
        (together, both),
        (expected, both - np.einsum("atj,btj->ab", np.nan_to_num(residual), np.nan_to_num(residual))[one, other]),
        (p, pair_p),
    ):
        matrix[one, other] = matrix[other, one] = values
    adjusted = np.full_like(p, np.nan)
    adjusted[one, other] = adjusted[other, one] = benjamini_hochberg(pair_p)
    mean = float(found.mean())
    centre = float(means.mean())
    low, high = np.quantile(means, [0.025, 0.975])
    return CoRelease(
        correlation=correlation,
        together=together,
        together_expected=expected,
        p=p,
        p_adjusted=adjusted,
        mean=mean,
        mean_lo=float(low),
        mean_hi=float(high),
        mean_p=float((1 + np.sum(np.abs(means - centre) >= abs(mean - centre) - 1e-12)) / (1 + n_permutations)),
        n_boutons=int(rows.size),
        n_stimuli=n_stimuli,
        reason="",
    )


def _without_slow_changes(x: Floats, blocks: NDArray[np.intp]) -> Floats:
    """Take each bouton's and pulse's mean over a block off; 0 where not measured."""
    residual = np.zeros_like(x)
    for block in np.unique(blocks):
        inside = x[:, blocks == block]
        known = np.isfinite(inside)
        mean = np.where(known, inside, 0.0).sum(axis=1) / np.maximum(known.sum(axis=1), 1)
        residual[:, blocks == block] = np.where(known, inside - mean[:, None], 0.0)
    return residual


def _exchange(z: Floats, blocks: NDArray[np.intp], rng: np.random.Generator) -> Floats:
    """Exchange the trials of each block, each bouton on its own; the pulses of a trial stay together."""
    order = np.argsort(blocks[None, :] + rng.random(z.shape[:2]), axis=1)
    return np.take_along_axis(z, order[:, :, None], axis=1)
