"""Paired pulses: how much more or less the second releases, and whether that depends on what the first did."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Literal

import numpy as np
from scipy.special import gammaln, stdtr

from ...checks import check_positive
from ...errors import InputError
from ..statistics.intervals import Estimate, mcnemar_test, wilson_interval
from ..statistics.ratios import (
    bootstrap_ratio_interval,
    complete_pairs,
    fieller_interval,
    unbiased_ratio,
)

if TYPE_CHECKING:
    from numpy.typing import ArrayLike, NDArray

    Verdict = Literal["facilitation", "depression", "unresolved"]

DETECTED_SE = 2.0  # the first mean must rise this many SE of the noise above zero


@dataclass(frozen=True, slots=True, kw_only=True)
class PulsePair:
    """Second response against the first.

    Attributes
    ----------
    ppr : Estimate
        Second mean over first mean, corrected for the bias of a ratio; interval by paired bootstrap over trials.
        NaN where the first mean is within noise of zero; `hi` is infinite where the first mean is told apart from
        noise, but not from zero once the randomness of release counts (Fieller's g >= 1).
    ratio_of_means : float
        The plain ratio of the two means, as it can be worked out by hand.
    ppf : float
        Paired-pulse facilitation, ppr - 1.
    first_mean, second_mean : float
        Mean amplitudes over the trials in which both pulses were measured.
    p_equal : float
        Paired t-test of equal means; what `benjamini_hochberg` takes over many boutons.
    verdict : {"facilitation", "depression", "unresolved"} or None
        Facilitation or depression only where the interval excludes 1; None where ppr is undefined.
    n_trials : int
        Complete pairs.
    flags : frozenset of str
        `ppr_undefined` where ppr is NaN or its interval has no upper end.
    """

    ppr: Estimate
    ratio_of_means: float
    ppf: float
    first_mean: float
    second_mean: float
    p_equal: float
    verdict: Verdict | None
    n_trials: int
    flags: frozenset[str]


@dataclass(frozen=True, slots=True, kw_only=True)
class ReleaseHistory:
    """Release at the second pulse against what happened at the first, from calls.

    Attributes
    ----------
    both, only_first, only_second, neither : int
        Trials by what was called.
    after_release, after_failure : Estimate
        P(release 2 | release 1) and P(release 2 | failure 1), Wilson intervals.
    history_p : float
        Fisher's exact test, two-sided: does the second pulse depend on the first?
    ppr_called : float
        Called fraction of the second pulse over that of the first; NaN where the first was never called.
    change_p : float
        McNemar's exact test: do both pulses release equally often?
    """

    both: int
    only_first: int
    only_second: int
    neither: int
    after_release: Estimate
    after_failure: Estimate
    history_p: float
    ppr_called: float
    change_p: float


def measure_pulse_pair(
    first: ArrayLike,
    second: ArrayLike,
    *,
    noise_sd: float,
    confidence: float,
    n_bootstrap: int,
    rng: np.random.Generator,
) -> PulsePair:
    """Measure the paired-pulse ratio of one bouton.

    Parameters
    ----------
    first, second : (T,) array_like of float
        Amplitudes of both pulses, failures included; trials with a NaN in either are skipped.
    noise_sd : float
        SD of the noise of one amplitude, greater than 0, in the same unit.
    confidence : float
        Coverage of the interval.
    n_bootstrap : int
        Resamplings of the trials.
    rng : numpy.random.Generator
        Source of the resamplings.

    Returns
    -------
    PulsePair
        The ratio is one of means, never the mean of single-trial ratios (Kim & Alger 2001).

    Raises
    ------
    InputError
        If the arrays do not match or `noise_sd` is not positive.

    Examples
    --------
    >>> rng = np.random.default_rng(1)
    >>> first, second = rng.normal(1.0, 0.2, 60), rng.normal(1.5, 0.2, 60)
    >>> pair = measure_pulse_pair(first, second, noise_sd=0.1, confidence=0.95, n_bootstrap=1000, rng=rng)
    >>> round(pair.ppr.value, 1), pair.verdict
    (1.5, 'facilitation')
    """
    check_positive("noise_sd", noise_sd)
    one, two = complete_pairs(first, second)
    n = one.size
    first_mean, second_mean = (float(values.mean()) if n else np.nan for values in (one, two))
    if n < 2 or first_mean < DETECTED_SE * noise_sd / np.sqrt(n):
        why = "fewer than two complete pairs" if n < 2 else "first mean within noise of zero"
        return PulsePair(
            ppr=Estimate(value=np.nan, lo=np.nan, hi=np.nan, method=f"none: {why}"),
            ratio_of_means=np.nan,
            ppf=np.nan,
            first_mean=first_mean,
            second_mean=second_mean,
            p_equal=_paired_t(one, two),
            verdict=None,
            n_trials=n,
            flags=frozenset({"ppr_undefined"}),
        )
    value = unbiased_ratio(two, one)
    lo, hi = bootstrap_ratio_interval(two, one, confidence=confidence, n_bootstrap=n_bootstrap, rng=rng)
    bounded = fieller_interval(two, one, confidence=confidence).bounded and np.isfinite(hi)
    hi = hi if bounded else np.inf
    return PulsePair(
        ppr=Estimate(value=value, lo=lo, hi=hi, method="paired bootstrap, percentiles"),
        ratio_of_means=second_mean / first_mean,
        ppf=value - 1.0,
        first_mean=first_mean,
        second_mean=second_mean,
        p_equal=_paired_t(one, two),
        verdict="facilitation" if lo > 1.0 else "depression" if hi < 1.0 else "unresolved",
        n_trials=n,
        flags=frozenset(() if bounded else {"ppr_undefined"}),
    )


def measure_history(first_called: ArrayLike, second_called: ArrayLike, *, confidence: float) -> ReleaseHistory:
    """Ask whether the second pulse releases less often where the first one did; depletion leaves its mark here.

    Parameters
    ----------
    first_called, second_called : (T,) array_like of bool or float
        1 where a release was called, 0 where not, NaN where not measured.
    confidence : float
        Coverage of the intervals.

    Raises
    ------
    InputError
        If the arrays do not match or hold anything but 0, 1 and NaN.

    Examples
    --------
    >>> history = measure_history([1, 1, 1, 1, 0, 0, 0, 0], [1, 1, 1, 0, 1, 0, 0, 0], confidence=0.95)
    >>> history.after_release.value, history.after_failure.value, round(history.history_p, 3)
    (0.75, 0.25, 0.486)
    """
    one, two = complete_pairs(first_called, second_called)
    if not (np.isin(one, (0.0, 1.0)).all() and np.isin(two, (0.0, 1.0)).all()):
        raise InputError("Calls must be 0, 1 or NaN.")
    released, again = one == 1, two == 1
    both, only_first = int(np.sum(released & again)), int(np.sum(released & ~again))
    only_second, neither = int(np.sum(~released & again)), int(np.sum(~released & ~again))
    n_first = both + only_first
    return ReleaseHistory(
        both=both,
        only_first=only_first,
        only_second=only_second,
        neither=neither,
        after_release=_share(both, n_first, confidence=confidence),
        after_failure=_share(only_second, only_second + neither, confidence=confidence),
        history_p=fisher_exact_p(both, only_first, only_second, neither),
        ppr_called=(both + only_second) / n_first if n_first else np.nan,
        change_p=mcnemar_test(only_first, only_second, method="exact")[1],
    )


def fisher_exact_p(a: int, b: int, c: int, d: int) -> float:
    """Two-sided exact test of the table [[a, b], [c, d]] (Fisher 1935): tables no likelier than this one.

    Examples
    --------
    >>> round(fisher_exact_p(3, 1, 1, 3), 6)
    0.485714
    """
    row, column, total = a + b, a + c, a + b + c + d
    corner = np.arange(max(0, row + column - total), min(row, column) + 1, dtype=np.float64)
    # log of C(column, x) C(total - column, row - x), up to a constant
    log_ways = -(
        gammaln(corner + 1)
        + gammaln(column - corner + 1)
        + gammaln(row - corner + 1)
        + gammaln(total - column - row + corner + 1)
    )
    likelihood = np.exp(log_ways - log_ways.max())
    observed = likelihood[int(a - corner[0])]
    return float(min(1.0, likelihood[likelihood <= observed * (1.0 + 1e-7)].sum() / likelihood.sum()))


def _share(successes: int, trials: int, *, confidence: float) -> Estimate:
    lo, hi = wilson_interval(successes, trials, confidence=confidence)
    value = successes / trials if trials else np.nan
    return Estimate(value=value, lo=float(lo), hi=float(hi), method="Wilson")


def _paired_t(one: NDArray[np.float64], two: NDArray[np.float64]) -> float:
    if one.size < 2:
        return float("nan")
    difference = two - one
    se = float(difference.std(ddof=1)) / np.sqrt(one.size)
    if se == 0:
        return 1.0 if difference[0] == 0 else 0.0
    return 2.0 * float(stdtr(one.size - 1, -abs(float(difference.mean())) / se))
