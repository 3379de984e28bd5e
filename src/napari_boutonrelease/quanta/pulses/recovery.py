"""Paired-pulse ratio against the interval between the pulses: facilitation that wears off, depression that recovers."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Literal

import numpy as np

from ...checks import check_array, check_not_negative, check_positive
from ...errors import InputError
from ..statistics.intervals import Estimate, _normal_quantile
from ..statistics.ratios import complete_pairs
from ..statistics.row_fits import best_of_rows, profile_rows

if TYPE_CHECKING:
    from collections.abc import Callable

    from numpy.typing import ArrayLike, NDArray

    Floats = NDArray[np.float64]

IntervalModel = Literal["none", "constant", "facilitation", "depression", "both"]

_LEAST_INTERVALS: dict[IntervalModel, int] = {"constant": 3, "facilitation": 3, "depression": 3, "both": 5}
_PARAMETERS: dict[IntervalModel, int] = {"constant": 0, "facilitation": 2, "depression": 2, "both": 4}
_SHORTEST, _LONGEST = 0.5, 10.0  # time constants looked for, in units of the shortest and the longest interval
_MOST_FACILITATION = 10.0
_BOTH_BETTER = 2.0  # AICc by which both terms must beat one: less is as good as equal (Burnham & Anderson 2002)


@dataclass(frozen=True, slots=True, kw_only=True)
class PairedMeans:
    """Mean responses to both pulses of the trials with one interval.

    Attributes
    ----------
    first, second : float
        Mean amplitudes.
    first_var, second_var, covariance : float
        Variances of the two means, and their covariance.
    n_trials : int
        Trials, at least 2.
    """

    first: float
    second: float
    first_var: float
    second_var: float
    covariance: float
    n_trials: int


@dataclass(frozen=True, slots=True, kw_only=True)
class PulseIntervalFit:
    """Time course of the paired-pulse ratio.

    Attributes
    ----------
    model : {"none", "constant", "facilitation", "depression", "both"}
        What was chosen: ratio 1 throughout, 1 + a exp(-interval / tau), 1 - d exp(-interval / tau), or the sum of both;
        "none" where nothing could be fitted.
    facilitation, facilitation_s : Estimate
        a, and its time constant in s; NaN where the model has none, and where the ratio changes too little over the
        intervals to tell. An end is 0 or infinite where the data set none.
    depression, depression_s : Estimate
        d, and its time constant in s.
    aicc : dict of str to float
        Akaike's corrected criterion of each model that was tried: both terms only with five intervals, and where a
        perfect fit would pay for them.
    p_constant : float
        Chi-square p of the ratio being 1 at every interval.
    p_fit : float
        Chi-square p of so large a distance of the ratios from the chosen curve; NaN without a degree of freedom.
    n_intervals, n_trials : int
        Different intervals, and trials in all.
    reason : str
        Why there is no time course, or what of it is open; empty where all is well.
    parameters : (2 k,) ndarray
        Size and time constant (s) of each exponential as fitted, also where they lie at the end of what was searched.
    """

    model: IntervalModel
    facilitation: Estimate
    facilitation_s: Estimate
    depression: Estimate
    depression_s: Estimate
    aicc: dict[str, float]
    p_constant: float
    p_fit: float
    n_intervals: int
    n_trials: int
    reason: str
    parameters: Floats

    def ratio(self, interval_s: ArrayLike) -> Floats:
        """Return the fitted ratio at any intervals, in s; NaN where nothing was fitted.

        Examples
        --------
        >>> means = [ratio_as_means(r, ratio_se=0.05, n_trials=40) for r in (1.8, 1.4, 1.1, 1.0)]
        >>> fit = fit_pulse_intervals([0.02, 0.08, 0.2, 0.5], means, confidence=0.95)
        >>> fit.model, bool(abs(fit.ratio(0.05) - 1.58) < 0.05)
        ('facilitation', True)
        """
        gap = np.asarray(interval_s, dtype=np.float64)
        if self.model == "none":
            return np.full(gap.shape, np.nan)
        curve = np.ones(gap.shape)
        for sign, size, time_s in zip(_terms(self.model), self.parameters[::2], self.parameters[1::2], strict=True):
            curve += sign * size * np.exp(-gap / time_s)
        return curve


def paired_means(first: ArrayLike, second: ArrayLike) -> PairedMeans | None:
    """Summarise the trials with one interval; None with fewer than three complete pairs.

    Parameters
    ----------
    first, second : (T,) array_like of float
        Amplitudes of both pulses, failures included; trials with a NaN in either are skipped.

    Raises
    ------
    InputError
        If the arrays do not match.

    Examples
    --------
    >>> means = paired_means([1.0, 0.0, 1.0, 2.0], [2.0, 1.0, 1.0, 2.0])
    >>> means.first, means.second, means.n_trials
    (1.0, 1.5, 4)
    """
    one, two = complete_pairs(first, second)
    if one.size < 3:
        return None
    (first_var, covariance), (_, second_var) = np.cov(one, two) / one.size
    return PairedMeans(
        first=float(one.mean()),
        second=float(two.mean()),
        first_var=float(first_var),
        second_var=float(second_var),
        covariance=float(covariance),
        n_trials=one.size,
    )


def ratio_as_means(ratio: float, *, ratio_se: float, n_trials: int) -> PairedMeans:
    """Express a ratio with its standard error as means of which the first is known to be 1.

    Examples
    --------
    >>> ratio_as_means(1.4, ratio_se=0.1, n_trials=60).second
    1.4
    """
    check_positive("ratio_se", ratio_se)
    check_not_negative("ratio", ratio)
    if n_trials < 2:
        raise InputError(f"A ratio needs at least 2 trials (given {n_trials}).")
    return PairedMeans(
        first=1.0, second=float(ratio), first_var=0.0, second_var=ratio_se**2, covariance=0.0, n_trials=n_trials
    )


def fit_pulse_intervals(interval_s: ArrayLike, means: Sequence[PairedMeans], *, confidence: float) -> PulseIntervalFit:
    """Fit the time course of the paired-pulse ratio and choose its form by AICc.

    Each interval's ratio r is judged as Fieller (1954) does, by the paired t statistic of second - r first: its own
    denominator may be uncertain, and no ratio is formed before the fit. Intervals are those of the profile likelihood.

    Parameters
    ----------
    interval_s : (k,) array_like of float
        Time from pulse 1 to pulse 2, in s, greater than 0; may repeat.
    means : (k,) sequence of PairedMeans
        Mean responses at each.
    confidence : float
        Coverage of the intervals.

    Returns
    -------
    PulseIntervalFit
        Facilitation and depression need three different intervals, both together five. AICc counts trials, since the
        spread is known from them (Hurvich & Tsai 1989); both terms must be better than one by 2.

    Raises
    ------
    InputError
        If the arrays do not match or an interval is not positive.
    """
    gap = check_array("interval_s", interval_s, n_dims=1)
    if gap.size != len(means):
        raise InputError(f"Each interval needs its means (given {gap.size} intervals and {len(means)} means).")
    if not np.all(np.isfinite(gap) & (gap > 0)):
        raise InputError("Every pulse interval must be greater than 0 s.")
    n_intervals, n_trials = int(np.unique(gap).size), sum(one.n_trials for one in means)
    if n_intervals < _LEAST_INTERVALS["constant"]:
        return _nothing(n_intervals, n_trials, f"{n_intervals} different pulse intervals; a time course needs 3")
    if any(one.second_var <= 0 for one in means):
        return _nothing(n_intervals, n_trials, "the responses at one interval do not vary: their spread is unknown")
    distance = _distance_to(means)
    fits: dict[IntervalModel, tuple[Floats, float]] = {}
    aicc: dict[str, float] = {}
    for model, least in _LEAST_INTERVALS.items():
        k = _PARAMETERS[model]
        price = 2.0 * k * (1.0 + (k + 1.0) / max(n_trials - k - 1.0, 1.0))
        if n_intervals >= least and not (k > 2 and price >= min(aicc.values())):
            fits[model] = _best_fit(model, gap, distance)
            aicc[model] = fits[model][1] + price
    handicap = {"both": _BOTH_BETTER}
    chosen = min(fits, key=lambda model: aicc[model] + handicap.get(model, 0.0))
    best, deviance = fits[chosen]
    p_constant = _chi_square_p(fits["constant"][1], gap.size)
    named, reason = _estimates(chosen, gap, distance, best, confidence=confidence)
    if chosen == "constant":
        reason = f"no time course: the ratios do not differ from 1 (chi-square p = {p_constant:.2g})"
    return PulseIntervalFit(
        model=chosen,
        **named,
        aicc=aicc,
        p_constant=p_constant,
        p_fit=_chi_square_p(deviance, gap.size - _PARAMETERS[chosen]),
        n_intervals=n_intervals,
        n_trials=n_trials,
        reason=reason,
        parameters=np.where(np.arange(best.size) % 2 == 1, np.exp(best), best),
    )


def _distance_to(means: Sequence[PairedMeans]) -> Callable[[Floats], Floats]:
    """Return what tells how far each interval's means are from given ratios, as standard normal deviates."""
    first, second, first_var, second_var, covariance, n = (
        np.array([getattr(one, name) for one in means], dtype=np.float64)
        for name in ("first", "second", "first_var", "second_var", "covariance", "n_trials")
    )
    freedom = n - 1.0

    def distance(ratio: Floats) -> Floats:
        variance = second_var - 2.0 * ratio * covariance + ratio**2 * first_var
        t = (second - ratio * first) / np.sqrt(np.maximum(variance, 1e-12 * second_var))
        # Student's t as a normal deviate: the signed root of the likelihood ratio, scaled to the variance of one
        return np.asarray(np.sign(t) * np.sqrt((freedom - 0.5) * np.log1p(t**2 / freedom)))

    return distance


def _terms(model: IntervalModel) -> tuple[float, ...]:
    """Signs of the exponentials."""
    return {"facilitation": (1.0,), "depression": (-1.0,), "both": (1.0, -1.0)}.get(model, ())


def _residuals(model: IntervalModel, gap: Floats, distance: Callable[[Floats], Floats]) -> Callable[[Floats], Floats]:
    """Distances from the curves of many parameters: size and log time constant of each exponential."""

    def residuals(theta: Floats) -> Floats:
        ratio = np.ones((len(theta), gap.size))
        for term, sign in enumerate(_terms(model)):
            size, log_time = theta[:, 2 * term, None], theta[:, 2 * term + 1, None]
            ratio += sign * size * np.exp(-gap / np.exp(log_time))
        return distance(ratio)

    return residuals


def _bounds(model: IntervalModel, gap: Floats) -> tuple[Floats, Floats]:
    shortest, longest = np.log(_SHORTEST * gap.min()), np.log(_LONGEST * gap.max())
    most = [_MOST_FACILITATION if sign > 0 else 1.0 for sign in _terms(model)]
    lower = np.array([[0.0, shortest] for _ in most]).ravel()
    return lower, np.array([[size, longest] for size in most]).ravel()


def _best_fit(model: IntervalModel, gap: Floats, distance: Callable[[Floats], Floats]) -> tuple[Floats, float]:
    """Parameters and deviance of the best of several starts."""
    if model == "constant":
        return np.empty(0), float(np.sum(distance(np.ones_like(gap)) ** 2))
    lower, upper = _bounds(model, gap)
    times = np.log(gap.min()) + (np.log(gap.max()) - np.log(gap.min())) * np.array([0.0, 0.25, 0.5, 0.75, 1.0])
    starts = (
        [[size, time] for size in (0.3, 0.9) for time in times]
        if model != "both"
        else [[0.8, one, 0.5, other] for one in times for other in times if one != other]
    )
    return best_of_rows(_residuals(model, gap, distance), np.array(starts), lower=lower, upper=upper)


def _estimates(
    model: IntervalModel, gap: Floats, distance: Callable[[Floats], Floats], best: Floats, *, confidence: float
) -> tuple[dict[str, Estimate], str]:
    """Put names and profile intervals to the parameters, and say in words what stays open."""
    unknown = Estimate(value=np.nan, lo=np.nan, hi=np.nan, method="none: not in the model")
    named = dict.fromkeys(("facilitation", "facilitation_s", "depression", "depression_s"), unknown)
    if model == "constant":
        return named, ""
    lower, upper = _bounds(model, gap)
    shift = np.tile([0.2, 1.0], len(_terms(model)))
    ends = profile_rows(
        _residuals(model, gap, distance),
        best,
        rise=_normal_quantile(confidence) ** 2,
        lower=lower,
        upper=upper,
        shifts=np.array([shift, -shift]),
    )
    open_ends = []
    for term, sign in enumerate(_terms(model)):
        name = "facilitation" if sign > 0 else "depression"
        size, time = 2 * term, 2 * term + 1
        # no less than nothing wears off, and no more than every vesicle is lost
        most = np.inf if sign > 0 else 1.0
        for row, what, value, lo, hi in (
            (size, name, best[size], max(ends[size, 0], 0.0), min(ends[size, 1], most)),
            (time, f"{name}_s", np.exp(best[time]), np.exp(ends[time, 0]), np.exp(ends[time, 1])),
        ):
            if np.isinf(hi):
                open_ends.append(f"{what} has no upper limit")
            at_end = best[row] >= upper[row] - 1e-6 and row == time
            named[what] = Estimate(
                value=np.nan if at_end else float(value), lo=float(lo), hi=float(hi), method="profile likelihood"
            )
    return named, "; ".join(open_ends)


def _chi_square_p(deviance: float, freedom: int) -> float:
    from scipy.special import chdtrc

    return float(chdtrc(freedom, deviance)) if freedom > 0 else float("nan")


def _nothing(n_intervals: int, n_trials: int, reason: str) -> PulseIntervalFit:
    unknown = Estimate(value=np.nan, lo=np.nan, hi=np.nan, method=f"none: {reason}")
    return PulseIntervalFit(
        model="none",
        facilitation=unknown,
        facilitation_s=unknown,
        depression=unknown,
        depression_s=unknown,
        aicc={},
        p_constant=np.nan,
        p_fit=np.nan,
        n_intervals=n_intervals,
        n_trials=n_trials,
        reason=reason,
        parameters=np.empty(0),
    )
