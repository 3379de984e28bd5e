"""The mean change over boutons that were measured twice, and whether it could be chance."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from scipy.special import stdtrit

from ...checks import check_array
from .intervals import Estimate

if TYPE_CHECKING:
    from numpy.typing import ArrayLike

_EXACT = 14  # differences up to which all patterns of signs are tried


@dataclass(frozen=True, slots=True, kw_only=True)
class PairedChange:
    """What paired differences say.

    Attributes
    ----------
    mean : Estimate
        Mean difference, Student's interval over boutons; none for fewer than two.
    p_none : float
        Two-sided p that signs are chance, by flipping them: Fisher's randomisation test. All patterns are tried where
        there are few; NaN for fewer than two differences. With n differences it cannot be below 2 / 2^n.
    n : int
        Differences that rest on two measured values.
    """

    mean: Estimate
    p_none: float
    n: int


def measure_paired_change(
    differences: ArrayLike, *, confidence: float, n_permutations: int, rng: np.random.Generator
) -> PairedChange:
    """Measure a mean change over boutons.

    Parameters
    ----------
    differences : (n_boutons,) array_like of float
        Later minus earlier value of each bouton; NaN is skipped.
    confidence : float
        Coverage of the interval.
    n_permutations : int
        Random patterns of signs where there are too many to try all.
    rng : numpy.random.Generator
        Source of those patterns.

    Returns
    -------
    PairedChange

    References
    ----------
    Fisher 1935, The Design of Experiments, section 21 (randomisation test of paired differences).

    Examples
    --------
    >>> change = measure_paired_change([0.2, 0.3, 0.1, 0.25, 0.15], confidence=0.95, n_permutations=1000,
    ...     rng=np.random.default_rng(1))
    >>> round(change.mean.value, 2), change.p_none
    (0.2, 0.0625)
    """
    values = check_array("differences", differences, n_dims=1)
    values = values[np.isfinite(values)]
    n = values.size
    if n < 2:
        mean = float(values.mean()) if n else np.nan
        none = Estimate(value=mean, lo=np.nan, hi=np.nan, method="none: fewer than two boutons")
        return PairedChange(mean=none, p_none=np.nan, n=n)
    mean, se = float(values.mean()), float(values.std(ddof=1) / np.sqrt(n))
    half = float(stdtrit(n - 1, 0.5 + confidence / 2)) * se
    estimate = Estimate(value=mean, se=se, lo=mean - half, hi=mean + half, method="Student's t over boutons")
    return PairedChange(mean=estimate, p_none=_sign_flip_p(values, n_permutations, rng), n=n)


def _sign_flip_p(values: np.ndarray, n_permutations: int, rng: np.random.Generator) -> float:
    n = values.size
    if n <= _EXACT:
        signs = 1.0 - 2.0 * (np.arange(2**n)[:, None] >> np.arange(n) & 1)
    else:
        signs = rng.choice([-1.0, 1.0], size=(n_permutations, n))
    sums = np.abs(signs @ values)
    as_large = int(np.sum(sums >= np.abs(values.sum()) * (1.0 - 1e-12)))
    return as_large / len(signs) if n <= _EXACT else (as_large + 1) / (len(signs) + 1)
