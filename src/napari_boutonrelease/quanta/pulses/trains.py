"""Trains of pulses: amplitude against pulse number, and the pool that the cumulative amplitude points back to."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Literal

import numpy as np
from scipy.special import stdtr, stdtrit

from ...checks import check_array, check_positive
from ...errors import InputError
from ..statistics.intervals import Estimate, _tail
from .pulse_pairs import measure_pulse_pair

if TYPE_CHECKING:
    from numpy.typing import ArrayLike, NDArray

    Floats = NDArray[np.float64]

Origin = Literal["first pulse", "index 0"]

_STILL_CHANGING = 0.01  # p of the slope of the late responses below which there is no steady state
_MUCH_LEFT = 0.4  # late over first response above which refilling hides much of the pool


@dataclass(frozen=True, slots=True, kw_only=True)
class PulseTrain:
    """Responses of one bouton to a train.

    Attributes
    ----------
    mean, mean_lo, mean_hi : (n_pulses,) ndarray
        Mean amplitude of each pulse over the complete trials, and its interval (Student's t).
    cumulative, cumulative_se : (n_pulses,) ndarray
        Mean over the same trials of the amplitudes summed up to each pulse, and its standard error.
    steady_ratio : Estimate
        Late responses over the first, ratio of means as in `measure_pulse_pair`.
    pool : Estimate
        Where the line through the late cumulative amplitudes meets the train's start: the amplitude that the pool of
        vesicles ready at the first pulse would give, all released (Schneggenburger, Meyer & Neher 1999). It
        underestimates the pool by what is not emptied when responses are steady. NaN where responses do not decline.
    replenished : Estimate
        Slope of that line: amplitude that comes back from pulse to pulse, all of it released.
    steady_p : float
        p of no slope in the late responses.
    n_late : int
        Late responses, on which the line rests.
    n_trials : int
        Complete trials.
    reason : str
        Why there is no pool, or why to doubt it; empty where there is no reason.
    """

    mean: Floats
    mean_lo: Floats
    mean_hi: Floats
    cumulative: Floats
    cumulative_se: Floats
    steady_ratio: Estimate
    pool: Estimate
    replenished: Estimate
    steady_p: float
    n_late: int
    n_trials: int
    reason: str


def measure_train(
    amplitude: ArrayLike,
    *,
    n_late: int,
    origin: Origin,
    noise_sd: float,
    confidence: float,
    n_bootstrap: int,
    rng: np.random.Generator,
) -> PulseTrain:
    """Measure the responses of one bouton to trains of equal pulses.

    The intercept is linear in the amplitudes, so that every trial has one of its own; pool and interval are mean and
    Student's t of these, which is what resampling whole trials tends to.

    Parameters
    ----------
    amplitude : (n_trials, n_pulses) array_like of float
        Amplitudes, failures included; trials with a NaN are skipped.
    n_late : int
        Late responses through whose cumulative amplitudes the line goes; at least 2, fewer than the pulses.
    origin : {"first pulse", "index 0"}
        Where the line is read: at the first pulse, or one pulse interval before it.
    noise_sd : float
        SD of the noise of one amplitude, greater than 0.
    confidence : float
        Coverage of the intervals.
    n_bootstrap : int
        Resamplings of the trials for the interval of `steady_ratio`.
    rng : numpy.random.Generator
        Source of these.

    Raises
    ------
    InputError
        If `n_late` does not suit the number of pulses, or `noise_sd` is not positive.

    Notes
    -----
    With a pool N of which each pulse releases the share p and to which each interval adds r, the line cuts the first
    pulse at N - (r / p - r), what the steady train leaves in the pool after each pulse; at index 0 at N - r / p. Low p
    and fast refilling therefore hide much of the pool (Thanawala & Regehr 2016).
    """
    values = check_array("amplitude", amplitude, n_dims=2)
    check_positive("noise_sd", noise_sd)
    n_pulses = values.shape[1]
    if not 2 <= n_late < n_pulses:
        raise InputError(f"n_late must be 2 or more and less than the number of pulses ({n_pulses}); given {n_late}.")
    complete = values[np.isfinite(values).all(axis=1)]
    n = len(complete)
    if n < 3:
        return _too_few(n_pulses, n_late, n)
    mean, se = _mean_and_se(complete)
    half = float(stdtrit(n - 1, 1.0 - _tail(confidence))) * se
    cumulative, cumulative_se = _mean_and_se(np.cumsum(complete, axis=1))
    index = np.arange(n_pulses, dtype=np.float64) + (1.0 if origin == "index 0" else 0.0)
    intercept, slope = _lines(np.cumsum(complete, axis=1)[:, -n_late:], index[-n_late:])
    late = complete[:, -n_late:]
    steady = measure_pulse_pair(
        complete[:, 0], late.mean(axis=1), noise_sd=noise_sd, confidence=confidence, n_bootstrap=n_bootstrap, rng=rng
    ).ppr
    _, late_slope = _lines(late, index[-n_late:])
    steady_p = _t_test(late_slope)
    pool = _student(intercept, confidence=confidence, method=f"line through the last {n_late}, read at the {origin}")
    reason = _doubt(complete, steady, steady_p, late_mean=float(late.mean()), noise_se=noise_sd / np.sqrt(n))
    if reason.startswith("no pool"):
        pool = Estimate(value=np.nan, lo=np.nan, hi=np.nan, method=f"none: {reason}")
    return PulseTrain(
        mean=mean,
        mean_lo=mean - half,
        mean_hi=mean + half,
        cumulative=cumulative,
        cumulative_se=cumulative_se,
        steady_ratio=steady,
        pool=pool,
        replenished=_student(slope, confidence=confidence, method="slope of the line"),
        steady_p=steady_p,
        n_late=n_late,
        n_trials=n,
        reason=reason,
    )


def pool_in_vesicles(
    pool: Estimate, *, q: float, q_lo: float, q_hi: float, n_trials: int, confidence: float
) -> Estimate:
    """Divide a pool by the response to one vesicle, with the doubt of both.

    Parameters
    ----------
    pool : Estimate
        Pool and its standard error, in units of the amplitudes.
    q, q_lo, q_hi : float
        Response to one vesicle and its interval of the same confidence, read as log-normal.
    n_trials : int
        Trials behind the pool.
    confidence : float
        Coverage of the interval, that of the generalised pivotal quantity (Weerahandi 1993): quantiles of the ratio of
        a Student variable about the pool and a log-normal one about q, found without drawing.

    Returns
    -------
    Estimate
        NaN where the pool or q is unknown.

    Examples
    --------
    >>> pool = Estimate(value=1.5, se=0.1, lo=1.3, hi=1.7, method="line")
    >>> vesicles = pool_in_vesicles(pool, q=0.3, q_lo=0.29, q_hi=0.31, n_trials=60, confidence=0.95)
    >>> round(vesicles.value, 2), round(vesicles.lo, 2), round(vesicles.hi, 2)
    (5.0, 4.32, 5.69)
    """
    tail = _tail(confidence)
    known = np.isfinite([pool.value, pool.se, q, q_lo, q_hi]).all()
    if not known or not 0 < q_lo <= q <= q_hi:
        why = "no pool" if not np.isfinite(pool.value) else "no vesicle size"
        return Estimate(value=np.nan, lo=np.nan, hi=np.nan, method=f"none: {why}")
    from scipy.special import ndtri

    log_sd = float(np.log(q_hi / q_lo) / (2.0 * -ndtri(tail)))
    nodes, weights = np.polynomial.hermite_e.hermegauss(41)
    weights = weights / weights.sum()
    sizes = q * np.exp(log_sd * nodes)

    def quantile(share: float) -> float:
        low, high = -abs(pool.value) - 50.0 * pool.se, abs(pool.value) + 50.0 * pool.se
        low, high = low / sizes.min(), high / sizes.min()
        for _ in range(80):
            middle = 0.5 * (low + high)
            chance = float(weights @ stdtr(n_trials - 1, (middle * sizes - pool.value) / max(pool.se, 1e-300)))
            low, high = (middle, high) if chance < share else (low, middle)
        return float(0.5 * (low + high))

    value = pool.value / q
    return Estimate(
        value=value,
        se=float(np.hypot(pool.se / q, value * log_sd)),
        lo=quantile(tail),
        hi=quantile(1.0 - tail),
        method="pool over q, generalised pivot",
    )


def _lines(values: Floats, index: Floats) -> tuple[Floats, Floats]:
    """Intercept and slope of a straight line through each row."""
    centred = index - index.mean()
    slope = values @ centred / np.sum(centred**2)
    return values.mean(axis=1) - slope * index.mean(), slope


def _mean_and_se(values: Floats) -> tuple[Floats, Floats]:
    return values.mean(axis=0), values.std(axis=0, ddof=1) / np.sqrt(len(values))


def _student(values: Floats, *, confidence: float, method: str) -> Estimate:
    mean, se = (float(one) for one in _mean_and_se(values))
    half = float(stdtrit(values.size - 1, 1.0 - _tail(confidence))) * se
    return Estimate(value=mean, se=se, lo=mean - half, hi=mean + half, method=method)


def _t_test(values: Floats) -> float:
    mean, se = (float(one) for one in _mean_and_se(values))
    if se == 0:
        return 1.0 if mean == 0 else 0.0
    return float(2.0 * stdtr(values.size - 1, -abs(mean) / se))


def _doubt(complete: Floats, steady: Estimate, steady_p: float, *, late_mean: float, noise_se: float) -> str:
    """Say why there is no pool, or why to doubt it."""
    if not np.isfinite(steady.value):
        return "no pool: the first response is within noise of zero"
    if steady.value >= 1.0:
        return "no pool: responses do not decline over the train"
    words = []
    if not steady.hi < 1.0:
        words.append("the decline over the train is within noise")
    if steady_p < _STILL_CHANGING:
        falling = complete[:, -1].mean() < late_mean
        words.append(f"no steady state: late responses still {'fall' if falling else 'rise'}")
    if steady.value > _MUCH_LEFT and late_mean > 2.0 * noise_se:
        words.append(
            f"late responses are {100 * steady.value:.0f} % of the first: refilling or low release probability hides "
            "part of the pool"
        )
    if np.max(complete.mean(axis=0)) > 1.2 * complete[:, 0].mean():
        words.append("responses rise before they decline: facilitation mixes with depletion")
    return "; ".join(words)


def _too_few(n_pulses: int, n_late: int, n_trials: int) -> PulseTrain:
    reason = f"no pool: {n_trials} complete trials, 3 or more are needed"
    unknown = Estimate(value=np.nan, lo=np.nan, hi=np.nan, method=f"none: {reason}")
    nothing = np.full(n_pulses, np.nan)
    return PulseTrain(
        mean=nothing,
        mean_lo=nothing,
        mean_hi=nothing,
        cumulative=nothing,
        cumulative_se=nothing,
        steady_ratio=unknown,
        pool=unknown,
        replenished=unknown,
        steady_p=np.nan,
        n_late=n_late,
        n_trials=n_trials,
        reason=reason,
    )
