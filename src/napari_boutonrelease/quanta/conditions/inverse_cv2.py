"""The change of 1/CV² against that of the mean between two conditions: a hint at where a synapse changed.

The inverse squared coefficient of variation of binomial release, n p / (1 - p + q_cv²), does not depend on the size of
a vesicle (del Castillo & Katz 1954). A change of q alone leaves it where it was; a change of n changes it as much as
the mean, one of p at least as much (Bekkers & Stevens 1990 Nature 346:724; Malinow & Tsien 1990 Nature 346:177).
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Literal

import numpy as np
from scipy.special import ndtr, stdtrit

from ...checks import check_array, check_positive
from ...errors import InputError
from ..statistics.intervals import Estimate

if TYPE_CHECKING:
    from numpy.typing import ArrayLike, NDArray

    Floats = NDArray[np.float64]

Locus = Literal["presynaptic", "postsynaptic", "mixed", "neither", "undecided"]
_WORDS: dict[Locus, str] = {
    "presynaptic": "1/CV² changed at least as much as the mean: points to release (n or p)",
    "postsynaptic": "1/CV² stayed while the mean changed: points to the size of a vesicle (q)",
    "mixed": "1/CV² changed, but less than the mean: points to release and vesicle size both",
    "neither": "1/CV² changed against the mean: no single change of n, p or q does that",
    "undecided": "the trials do not tell a change of release from one of vesicle size",
}
_CAUTION = "; holds if sites are alike and the reporter is linear"


@dataclass(frozen=True, slots=True, kw_only=True)
class InverseCv2Change:
    """How 1/CV² and the mean changed from one condition to another.

    Attributes
    ----------
    mean_ratio, inverse_cv2_ratio : Estimate
        Mean, and 1/CV² with the variance of the noise taken off, after over before.
    before, after : float
        1/CV² in each condition; NaN where the variance is within noise.
    locus : {"presynaptic", "postsynaptic", "mixed", "neither", "undecided"} or None
        What the change points to; None where the mean did not change or there is no CV.
    reason : str
        The same in words, or why it cannot be said.
    """

    mean_ratio: Estimate
    inverse_cv2_ratio: Estimate
    before: float
    after: float
    locus: Locus | None
    reason: str


def inverse_cv2_change(
    before: ArrayLike,
    after: ArrayLike,
    *,
    noise_sd: tuple[float, float],
    n_null: tuple[float, float],
    confidence: float,
    n_bootstrap: int,
    rng: np.random.Generator,
) -> InverseCv2Change:
    """Compare 1/CV² and mean of one bouton's amplitudes between two conditions.

    Parameters
    ----------
    before, after : (T,) array_like of float
        Amplitudes of one pulse in each condition; NaN is skipped. The two may differ in length.
    noise_sd : tuple of float
        SD of the noise of an amplitude, before and after.
    n_null : tuple of float
        Number of null amplitudes behind each: how well it is known.
    confidence : float
        Coverage of the intervals and level of what is said of the locus.
    n_bootstrap : int
        Resamplings of the trials.
    rng : numpy.random.Generator
        Source of the resamplings.

    Returns
    -------
    InverseCv2Change

    Raises
    ------
    InputError
        If an array is not one-dimensional, or a number is out of range.

    Notes
    -----
    The percentiles lie a little further out than (1 ± confidence) / 2, as Student's t asks for (Hesterberg 2015).

    Examples
    --------
    >>> rng = np.random.default_rng(1)
    >>> def draw(p_site, q):
    ...     return q * rng.binomial(3, p_site, 300) + rng.normal(0, 0.02, 300)
    >>> known = dict(noise_sd=(0.02, 0.02), n_null=(300, 300), confidence=0.95, n_bootstrap=1000, rng=rng)
    >>> inverse_cv2_change(draw(0.2, 0.1), draw(0.6, 0.1), **known).locus
    'presynaptic'
    >>> inverse_cv2_change(draw(0.5, 0.1), draw(0.5, 0.2), **known).locus
    'postsynaptic'
    """
    if n_bootstrap < 100:
        raise InputError(f"n_bootstrap must be at least 100 (given {n_bootstrap}).")
    pairs = (("before", before), ("after", after))
    amplitudes = [values[np.isfinite(values)] for values in (check_array(name, one, n_dims=1) for name, one in pairs)]
    noise = [check_positive("noise_sd", sd) for sd in noise_sd]
    sizes = [one.size for one in amplitudes]
    if min(sizes) < 3:
        return _unknown(f"too few amplitudes: {sizes[0]} before, {sizes[1]} after, at least 3 each are needed")
    means = [float(one.mean()) for one in amplitudes]
    standard_errors = [float(one.std(ddof=1) / np.sqrt(one.size)) for one in amplitudes]
    tail = 0.5 * (1.0 - confidence)
    far = [float(stdtrit(size - 1, 1.0 - tail)) for size in sizes]
    for name, mean, error, t in zip(("before", "after"), means, standard_errors, far, strict=True):
        if mean <= t * error:
            return _unknown(f"the mean {name} is within noise of zero")
    variances = [float(one.var(ddof=1)) - sd**2 for one, sd in zip(amplitudes, noise, strict=True)]
    inverse = [mean**2 / var if var > 0 else np.nan for mean, var in zip(means, variances, strict=True)]

    drawn = [
        _resample(one, sd=sd, n_null=nulls, n_bootstrap=n_bootstrap, rng=rng)
        for one, sd, nulls in zip(amplitudes, noise, n_null, strict=True)
    ]
    wide = max(np.sqrt(size / (size - 1.0)) * t for size, t in zip(sizes, far, strict=True))
    outer = float(ndtr(-wide))
    log_mean = drawn[1][0] - drawn[0][0]
    mean_ratio = _ratio(means[1] / means[0], log_mean, outer)
    for name, value in zip(("before", "after"), inverse, strict=True):
        if not np.isfinite(value):
            return _unknown(f"the variance {name} is within noise: no CV", mean_ratio=mean_ratio, inverse=inverse)
    with np.errstate(invalid="ignore"):
        log_inverse = drawn[1][1] - drawn[0][1]
    inverse_ratio = _ratio(inverse[1] / inverse[0], log_inverse, outer)
    locus: Locus | None = None
    reason = "no change of the mean told apart from chance: nothing to locate"
    if not mean_ratio.lo <= 1.0 <= mean_ratio.hi:
        direction = 1.0 if mean_ratio.value > 1.0 else -1.0
        changed = _limits(direction * log_inverse, outer)
        beyond = _limits(direction * (log_inverse - log_mean), outer)
        locus = _locus(changed=changed, beyond=beyond)
        reason = _WORDS[locus] + _CAUTION
    return InverseCv2Change(
        mean_ratio=mean_ratio,
        inverse_cv2_ratio=inverse_ratio,
        before=inverse[0],
        after=inverse[1],
        locus=locus,
        reason=reason,
    )


def _resample(
    amplitude: Floats, *, sd: float, n_null: float, n_bootstrap: int, rng: np.random.Generator
) -> tuple[Floats, Floats]:
    """Logarithms of mean and 1/CV² of resampled trials; infinite where a resample has no variance above noise."""
    picked = amplitude[rng.integers(0, amplitude.size, (n_bootstrap, amplitude.size))]
    means = picked.mean(axis=1)
    noise = sd**2 * rng.chisquare(max(n_null, 2.0), n_bootstrap) / max(n_null, 2.0)
    variance = picked.var(axis=1, ddof=1) - noise
    with np.errstate(divide="ignore", invalid="ignore"):
        log_mean = np.where(means > 0, np.log(np.abs(means)), -np.inf)
        log_variance = np.where(variance > 0, np.log(np.abs(variance)), -np.inf)
        both = np.where(np.isfinite(log_mean), 2.0 * log_mean - log_variance, -np.inf)
    return log_mean, both


def _limits(values: Floats, tail: float) -> tuple[float, float]:
    """Percentiles; a resample that has no value could lie anywhere, and counts on both sides."""
    low, high = np.sort(np.nan_to_num(values, nan=-np.inf)), np.sort(np.nan_to_num(values, nan=np.inf))
    i = int(tail * (len(values) - 1))
    return float(low[i]), float(high[len(values) - 1 - i])


def _ratio(value: float, log_ratios: Floats, tail: float) -> Estimate:
    low, high = _limits(log_ratios, tail)
    return Estimate(value=value, lo=float(np.exp(low)), hi=float(np.exp(high)), method="bootstrap over trials")


def _locus(*, changed: tuple[float, float], beyond: tuple[float, float]) -> Locus:
    """Read the position between a level line (q) and the diagonal (n); p lies beyond the diagonal."""
    level = changed[0] <= 0.0 <= changed[1]
    diagonal = beyond[1] >= 0.0
    if level:
        return "undecided" if diagonal else "postsynaptic"
    if diagonal:
        return "presynaptic"
    return "mixed" if changed[0] > 0.0 else "neither"


def _unknown(
    reason: str, *, mean_ratio: Estimate | None = None, inverse: list[float] | None = None
) -> InverseCv2Change:
    nothing = Estimate(value=np.nan, lo=np.nan, hi=np.nan, method=f"none: {reason}")
    before, after = inverse if inverse is not None else (np.nan, np.nan)
    return InverseCv2Change(
        mean_ratio=mean_ratio if mean_ratio is not None else nothing,
        inverse_cv2_ratio=nothing,
        before=before,
        after=after,
        locus=None,
        reason=reason,
    )
