"""Stimuli at which nothing was stimulated: every bouton of the axon fails together, more often than chance allows.

Model: with probability `share` a stimulus reaches no bouton and every amplitude is noise alone; otherwise boutons
release independently, each with its own p_release at each pulse. All are fitted together by maximum likelihood, so that
p_release is that of stimuli that arrived, weighted by the probability that they did: leaving out every stimulus at
which all boutons failed would leave out chance failures too, and push p_release up. A drift of all boutons over the
trials is part of the model, or rundown would pass for failed stimuli at the end.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from scipy.special import chdtrc, chdtri, expit, gammaln, log1p, logit

from ...checks import check_array, check_positive
from ...errors import InputError
from ..one_bouton.vesicle_sizes import gamma_vesicles_logpdf
from ..statistics.intervals import Estimate

if TYPE_CHECKING:
    from numpy.typing import ArrayLike, NDArray

    Floats = NDArray[np.float64]

FEWEST = 2
"""Boutons below which a failed stimulus looks like a failed release."""

_FAR = 9.0  # of a logit: as good as never or always
_LEAST_SHARE = 1e-6
_PSEUDO_TRIALS = 0.02  # keeps p_release off 0 and 1, too light to matter
_MOST_RATIO = 50.0  # of log-likelihoods: one amplitude is never more certain than that
_SHARE_STEPS = 12  # of bisection at either end of the interval


@dataclass(frozen=True, slots=True, kw_only=True)
class StimulusFailures:
    """Suspected failures of stimulation.

    Attributes
    ----------
    share : Estimate
        Share of the stimuli that reached no bouton; NaN with `method` saying why. Interval by profile likelihood.
    p_none : float
        p that no stimulus failed (likelihood ratio at the boundary, Self & Liang 1987).
    probability : (n_trials, n_pulses) ndarray
        Posterior probability that nothing was stimulated; NaN without an amplitude.
    p_release : (n_boutons, n_pulses) ndarray
        Release probability at stimuli that arrived, mean over the trials.
    released : (n_boutons, n_trials, n_pulses) ndarray
        Posterior probability of release in this model; NaN without an amplitude.
    all_failed, all_failed_expected : float
        Stimuli at which no bouton released, as posterior expectation; and as many as independent boutons
        would show if every stimulus had arrived and each bouton released as often as it did on average.
    """

    share: Estimate
    p_none: float
    probability: Floats
    p_release: Floats
    released: Floats
    all_failed: float
    all_failed_expected: float


def release_log_ratio(
    amplitude: ArrayLike,
    amplitude_sd: ArrayLike,
    *,
    q: ArrayLike,
    q_cv: float,
    n_sites: ArrayLike,
    p_site: ArrayLike,
) -> Floats:
    """Log-likelihood ratio of at least one vesicle against noise alone, for each amplitude.

    Parameters
    ----------
    amplitude, amplitude_sd : (n_boutons, n_trials, n_pulses) array_like
        Responses and their noise, dF/F.
    q : (n_boutons,) array_like
        Size of one vesicle, dF/F.
    q_cv : float
        Its coefficient of variation.
    n_sites : (n_boutons,) array_like of int
        Release sites.
    p_site : (n_boutons, n_pulses) array_like
        Release probability of one site.

    Returns
    -------
    (n_boutons, n_trials, n_pulses) ndarray
        NaN where an amplitude or a parameter is.

    Examples
    --------
    >>> ratio = release_log_ratio(
    ...     [[[0.0], [0.1]]], [[[0.02], [0.02]]], q=[0.1], q_cv=0.3, n_sites=[1], p_site=[[0.4]]
    ... )
    >>> ratio.round(1).ravel()
    array([-5.7, 11.6])
    """
    a, sd = check_array("amplitude", amplitude, n_dims=3), check_array("amplitude_sd", amplitude_sd, n_dims=3)
    sizes, sites = check_array("q", q, n_dims=1), check_array("n_sites", n_sites, n_dims=1)
    p = check_array("p_site", p_site, n_dims=2)
    if a.shape != sd.shape or sizes.shape != a.shape[:1] or sites.shape != a.shape[:1] or p.shape != a.shape[::2]:
        raise InputError(
            f"amplitude {a.shape}, amplitude_sd {sd.shape}, q {sizes.shape}, n_sites {sites.shape} and p_site {p.shape}"
            " must describe the same boutons and pulses."
        )
    check_positive("q_cv", q_cv)
    ratio = np.full(a.shape, np.nan)
    for b in range(len(a)):
        if not (np.isfinite(sizes[b]) and sizes[b] > 0 and np.isfinite(sites[b])):
            continue
        m = np.arange(1, int(sites[b]) + 1)
        for j in np.flatnonzero(np.isfinite(p[b])):
            used = np.isfinite(a[b, :, j]) & (sd[b, :, j] > 0)
            one, noise = a[b, used, j], sd[b, used, j]
            silent = gamma_vesicles_logpdf(one, vesicles=0, q=1.0, q_cv=0.0, noise_sd=noise)
            each = gamma_vesicles_logpdf(one, vesicles=m[:, None], q=sizes[b], q_cv=q_cv, noise_sd=noise)
            weight = _log_share_of_releases(m, float(np.clip(p[b, j], 1e-4, 1.0 - 1e-4)))
            ratio[b, used, j] = np.logaddexp.reduce(weight[:, None] + each, axis=0) - silent
    return np.asarray(np.clip(ratio, -_MOST_RATIO, _MOST_RATIO))


def _log_share_of_releases(m: NDArray[np.int64], p: float) -> Floats:
    """Log probability of 1, 2, ... vesicles among releases."""
    n = m[-1]
    log_choose = gammaln(n + 1.0) - gammaln(m + 1.0) - gammaln(n - m + 1.0)
    log_weight = log_choose + m * np.log(p) + (n - m) * log1p(-p)
    return np.asarray(log_weight - np.log(-np.expm1(n * log1p(-p))))


def find_stimulus_failures(log_ratio: ArrayLike, *, confidence: float) -> StimulusFailures:
    """Find stimuli that reached no bouton.

    Parameters
    ----------
    log_ratio : (n_boutons, n_trials, n_pulses) array_like
        Log-likelihood ratio of release against noise (`release_log_ratio`); NaN where there is no amplitude.
    confidence : float
        Coverage of the interval of the share.

    Returns
    -------
    StimulusFailures
        Without two boutons there is no share: its method says so, and probabilities are NaN.

    References
    ----------
    Dempster, Laird & Rubin 1977 J R Stat Soc B 39:1 (mixtures); Self & Liang 1987 J Am Stat Assoc 82:605 (the test).

    Examples
    --------
    >>> rng = np.random.default_rng(1)
    >>> released = rng.random((10, 100, 1)) < 0.5
    >>> released[:, [7, 30, 41, 77, 90]] = False
    >>> found = find_stimulus_failures(np.where(released, 10.0, -8.0), confidence=0.95)
    >>> np.flatnonzero(found.probability[:, 0] > 0.5), round(found.share.value, 2)
    (array([ 7, 30, 41, 77, 90]), 0.05)
    """
    ratio = check_array("log_ratio", log_ratio, n_dims=3)
    telling = np.isfinite(ratio).any(axis=(1, 2))
    if telling.sum() < FEWEST:
        return _none(ratio, f"none: needs at least {FEWEST} boutons (given {int(telling.sum())})")
    model = _Model(ratio[telling])
    without = model.fit(share=0.0)
    starts = [model.fit(start_share=start) for start in (0.03, 0.2)]
    best = max((*starts, without), key=lambda one: one.log_likelihood)
    lr = max(2.0 * (best.log_likelihood - without.log_likelihood), 0.0)
    lo, hi = model.interval(best, confidence=confidence, without=without)
    probability, released, p_release = model.posterior(best)
    _, _, none_p = model.posterior(without)
    everyone, each = np.full(ratio.shape, np.nan), np.full((len(ratio), ratio.shape[2]), np.nan)
    everyone[telling], each[telling] = released, p_release
    used = np.isfinite(ratio[telling])
    _, given_arrival, _ = model.terms(best.level, best.drift)
    no_release = probability + (1.0 - probability) * np.prod(1.0 - given_arrival, axis=0)
    expected = np.prod(np.where(used, 1.0 - none_p[:, None], 1.0), axis=0)
    there = used.any(axis=0)
    return StimulusFailures(
        share=Estimate(value=best.share, lo=lo, hi=hi, method="mixture, profile likelihood"),
        p_none=0.5 * float(chdtrc(1.0, lr)) if lr > 0 else 1.0,
        probability=np.where(there, probability, np.nan),
        p_release=each,
        released=everyone,
        all_failed=float(no_release[there].sum()),
        all_failed_expected=float(expected[there].sum()),
    )


def _none(ratio: Floats, method: str) -> StimulusFailures:
    return StimulusFailures(
        share=Estimate(value=np.nan, lo=np.nan, hi=np.nan, method=method),
        p_none=np.nan,
        probability=np.full(ratio.shape[1:], np.nan),
        p_release=np.full((len(ratio), ratio.shape[2]), np.nan),
        released=np.full(ratio.shape, np.nan),
        all_failed=np.nan,
        all_failed_expected=np.nan,
    )


@dataclass(frozen=True, slots=True, kw_only=True)
class _Point:
    """Parameters: logits of p_release in mid-recording (bouton, pulse), common drift of them, share of failures."""

    level: Floats
    drift: float
    share: float
    log_likelihood: float


class _Model:
    """The likelihood of all amplitudes over that of noise alone."""

    def __init__(self, ratio: Floats) -> None:
        self.used = np.isfinite(ratio)
        self.ratio = np.where(self.used, ratio, 0.0)
        n_trials = ratio.shape[1]
        self.time = np.linspace(-0.5, 0.5, n_trials) if n_trials > 1 else np.zeros(1)
        rough = np.where(self.used, expit(self.ratio), 0.0).sum(axis=1) / np.maximum(self.used.sum(axis=1), 1)
        self.start = np.clip(logit(np.clip(rough, 0.02, 0.98)), -_FAR, _FAR)
        self.ever = self.used.any(axis=1)

    def terms(self, level: Floats, drift: float) -> tuple[Floats, Floats, Floats]:
        """Return p_release, posterior of release given arrival, and each stimulus's log ratio of arrival."""
        p = expit(level[:, None] + drift * self.time[None, :, None])
        log_mixture = np.logaddexp(np.log1p(-p), np.log(p) + self.ratio)
        released = np.where(self.used, expit(np.log(p) - np.log1p(-p) + self.ratio), 0.0)
        return p, released, np.where(self.used, log_mixture, 0.0).sum(axis=0)

    def log_likelihood(self, level: Floats, drift: float, share: float) -> tuple[float, Floats, Floats, float]:
        """Return the log-likelihood, its gradient by level and drift, and the expected number of failures."""
        p, released, arrived = self.terms(level, drift)
        if share > 0:
            both = np.logaddexp(np.log(share), np.log1p(-share) + arrived)
            failed = np.exp(np.log(share) - both)
        else:
            both, failed = arrived, np.zeros_like(arrived)
        there = self.used.any(axis=0)
        slope = np.where(self.used, (1.0 - failed) * (released - p), 0.0)
        middle = expit(level)
        penalty = _PSEUDO_TRIALS * float(np.sum(np.where(self.ever, np.log(middle) + np.log1p(-middle), 0.0)))
        gradient = slope.sum(axis=1) + _PSEUDO_TRIALS * np.where(self.ever, 1.0 - 2.0 * middle, 0.0)
        by_drift = np.array([np.sum(slope * self.time[None, :, None])])
        return float(both[there].sum()) + penalty, gradient, by_drift, float(failed[there].sum())

    def fit(self, *, share: float | None = None, start_share: float = 0.05, start: _Point | None = None) -> _Point:
        """Maximise over everything, or over all but a given share."""
        from scipy.optimize import minimize

        shape, n_stimuli = self.start.shape, int(self.used.any(axis=0).sum())
        level, drift = (self.start, 0.0) if start is None else (start.level, start.drift)
        first = np.concatenate([level.ravel(), [drift], [] if share is not None else [logit(start_share)]])

        def minus(x: Floats) -> tuple[float, Floats]:
            here = share if share is not None else float(expit(x[-1]))
            value, by_level, by_drift, failed = self.log_likelihood(x[: level.size].reshape(shape), x[level.size], here)
            by_share = [] if share is not None else [failed - here * n_stimuli]
            return -value, -np.concatenate([by_level.ravel(), by_drift, by_share])

        bounds = [(-_FAR, _FAR)] * level.size + [(-_FAR, _FAR)]
        bounds += [] if share is not None else [(float(logit(_LEAST_SHARE)), _FAR)]
        found = minimize(minus, first, jac=True, method="L-BFGS-B", bounds=bounds, options={"maxiter": 300})
        return _Point(
            level=found.x[: level.size].reshape(shape),
            drift=float(found.x[level.size]),
            share=share if share is not None else float(expit(found.x[-1])),
            log_likelihood=-float(found.fun),
        )

    def interval(self, best: _Point, *, confidence: float, without: _Point) -> tuple[float, float]:
        """Shares whose profile likelihood is near enough to the best."""
        drop = 0.5 * float(chdtri(1.0, 1.0 - confidence))

        def within(share: float) -> bool:
            return self.fit(share=share, start=best).log_likelihood > best.log_likelihood - drop

        lo = 0.0
        if without.log_likelihood < best.log_likelihood - drop:
            outside, inside = 0.0, best.share
            for _ in range(_SHARE_STEPS):
                middle = 0.5 * (outside + inside)
                inside, outside = (middle, outside) if within(middle) else (inside, middle)
            lo = inside
        inside, outside = max(best.share, _LEAST_SHARE), 1.0 - 1e-6
        for _ in range(_SHARE_STEPS + 4):
            middle = 0.5 * (outside + inside)
            inside, outside = (middle, outside) if within(middle) else (inside, middle)
        return lo, inside

    def posterior(self, point: _Point) -> tuple[Floats, Floats, Floats]:
        """Return the probability that nothing arrived, that each bouton released, and mean p_release on arrival."""
        p, released, arrived = self.terms(point.level, point.drift)
        failed = (
            np.exp(np.log(point.share) - np.logaddexp(np.log(point.share), np.log1p(-point.share) + arrived))
            if point.share > 0
            else np.zeros_like(arrived)
        )
        mean = np.where(self.ever, p.mean(axis=1), np.nan)
        return failed, np.where(self.used, (1.0 - failed) * released, np.nan), mean
