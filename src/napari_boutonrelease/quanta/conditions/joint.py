"""One bouton over the pulses of a trial and over recordings in several conditions, by joint maximum likelihood.

Sites, the size of a vesicle and its variation belong to the bouton; p_site differs between pulses and conditions
(calcium, a drug), the noise between recordings. Where one condition hardly tells n_sites, a low and a high release
probability together do: how variance grows with the mean sets q, where it turns sets n_sites. The same likelihood says
what changed between conditions, release probability or vesicle size.

Model of one amplitude as in `pooled`: Binomial(n_sites, p_site) vesicles of gamma-distributed size on normal noise
(Boyd & Martin 1956; del Castillo & Katz 1954). What is maximised is the likelihood with log-normal priors of q_cv and
of the noise, of q where one is given, and 1/n_sites.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from scipy.special import chdtrc, chdtri

from ...checks import check_fraction
from ...errors import InputError
from ..statistics.intervals import Estimate
from .joint_data import JointData, read_cells
from .joint_likelihood import p_bounds
from .joint_summits import CHANGES, Change, find_q_ratio, find_reach, find_summits, silent_objective

if TYPE_CHECKING:
    from collections.abc import Sequence

    from numpy.typing import NDArray

    from ..one_bouton.mixture_fit import LogPrior
    from .joint_likelihood import Cells
    from .joint_summits import Summits

    Floats = NDArray[np.float64]

_FEW_TRIALS = 20
_LOW_SIGNAL = 2.0
_SURE = 0.01
_METHOD = "joint profile likelihood"
_MISSING = Estimate(value=np.nan, lo=np.nan, hi=np.nan, method="none: no amplitude")
_ONE_RECORDING = Estimate(value=np.nan, lo=np.nan, hi=np.nan, method="none: one recording")
_NO_RELEASE = Estimate(value=np.nan, lo=np.nan, hi=np.nan, method="none: no release told apart from noise")


@dataclass(frozen=True, slots=True, kw_only=True)
class JointFit:
    """What the recordings of one bouton say together.

    Attributes
    ----------
    n_sites : int or None
        Most probable number of sites; None where nothing could be fitted or nothing is released.
    n_set : tuple of int
        Numbers of sites that are not excluded: their maximum lies within ``chi2(1) / 2`` nats of the best (1.92 at
        95 %), the prior 1/n_sites counted in.
    n_sites_lo, n_sites_hi : int or None
        Ends of `n_set`.
    n_unbounded : bool
        Whether the largest number tried is in the set.
    n_objective : (n_max,) ndarray
        Maximum at each number of sites below the best, in nats; NaN without a fit.
    q : Estimate
        Size of one vesicle (dF/F), the same in all recordings.
    q_by_recording : tuple of Estimate
        The same where each recording has its own; NaN without amplitudes.
    q_ratio : Estimate
        q of the last recording that has amplitudes over that of the first, where each has its own and n_sites is the
        same in all. NaN for one recording.
    q_cv : float
        Coefficient of variation of a vesicle's size.
    p_site, p_release : tuple of tuple of Estimate
        For each recording and pulse: release probability of a site, and probability of at least one vesicle. Intervals
        are profile likelihoods in which n_sites is a parameter like the others.
    noise_scale : (n_recordings,) ndarray
        Noise over the noise given; NaN without amplitudes.
    shared_q : bool
        Whether n_sites, p_site, p_release, q_cv and the noise rest on one q in all recordings; False where q changed
        beyond doubt (p < 0.01).
    log_likelihood : dict of str to float
        Maximum with priors, in nats, where between recordings nothing (`none`), p_site (`p`), q (`q`) or both (`both`)
        may differ.
    p_changed_p : float
        P-value of p_site being the same in all recordings, pulse by pulse, whatever q does.
    q_changed_p : float
        P-value of q being the same in all recordings, whatever p_site does.
    changed : {"none", "p", "q", "both"} or None
        Simplest of the four that the others do not reject; None where that cannot be asked.
    changed_p : float
        P-value of nothing having changed.
    release_evidence : float
        Maximum over that of no release at all, in nats.
    n_trials : tuple of int
        Trials with an amplitude, for each recording.
    reason : str
        In words, what was found about a change, or why that or the fit is missing.
    flags : frozenset of str
        Codes of the registry in `flags.py`.
    """

    n_sites: int | None
    n_set: tuple[int, ...]
    n_sites_lo: int | None
    n_sites_hi: int | None
    n_unbounded: bool
    n_objective: Floats
    q: Estimate
    q_by_recording: tuple[Estimate, ...]
    q_ratio: Estimate
    q_cv: float
    p_site: tuple[tuple[Estimate, ...], ...]
    p_release: tuple[tuple[Estimate, ...], ...]
    noise_scale: Floats
    shared_q: bool
    log_likelihood: dict[str, float]
    p_changed_p: float
    q_changed_p: float
    changed: Change | None
    changed_p: float
    release_evidence: float
    n_trials: tuple[int, ...]
    reason: str
    flags: frozenset[str]


def fit_joint(
    recordings: Sequence[JointData],
    *,
    n_max: int,
    q_cv: float,
    q_cv_doubt: float,
    q_prior: LogPrior | None,
    confidence: float,
) -> JointFit:
    """Fit one bouton's release over the pulses of a trial and over recordings.

    Parameters
    ----------
    recordings : sequence of JointData
        One for each condition; the same bouton in all.
    n_max : int
        Largest number of sites tried, at least 1.
    q_cv, q_cv_doubt : float
        Expected coefficient of variation of a vesicle's size, and SD of the logarithm of that expectation.
    q_prior : LogPrior or None
        What is known of q beforehand, as from the other boutons of the axon.
    confidence : float
        Coverage of intervals and of the set of n_sites; ``1 - confidence`` is the level of the tests that say what
        changed.

    Returns
    -------
    JointFit
        NaN and a `reason` where the amplitudes allow no fit, where there is but one recording, or no release.

    Raises
    ------
    InputError
        If there is no recording, shapes differ, or a parameter is out of range.

    Notes
    -----
    Tests are likelihood ratios referred to chi-squared (Wilks 1938), at the n_sites that both models together find most
    probable: the ratio of maxima at different n_sites was measured to be too large. Measured at 40 to 80 trials, 1 to 4
    sites, one vesicle 2.5 or 4.4 noise SDs, nominal level 5 %: p_site found changed in 4.6 % where it was not (1800
    boutons, q changed or not), q in 6.3 % (2550; in 7 % where p_site differed fourfold).

    The prior 1/n_sites chooses n_sites. With pairs of pulses at p_site 0.15, 0.22 and 0.6, 0.45, 80 trials each, 1 to 4
    sites alike often and q 4.4 noise SDs, it was exactly right in 75.5 % of 400 boutons, maximum likelihood alone in
    73.5 %; a steeper prior gains up to 2 % more, but only because no bouton had more than four.

    Examples
    --------
    >>> rng = np.random.default_rng(3)
    >>> def record(p_site):
    ...     vesicles = rng.binomial(2, p_site, (150, 1))
    ...     sizes = rng.gamma(np.maximum(vesicles, 1) / 0.09) * 0.09 * (vesicles > 0)
    ...     amplitude = 0.2 * sizes + rng.normal(0, 0.03, vesicles.shape)
    ...     return JointData(amplitude=amplitude, amplitude_sd=np.full(amplitude.shape, 0.03), n_null=300)
    >>> fit = fit_joint([record(0.15), record(0.7)], n_max=5, q_cv=0.3, q_cv_doubt=0.15, q_prior=None, confidence=0.95)
    >>> fit.n_sites, fit.n_set, fit.changed, fit.p_changed_p < 1e-6, fit.q_changed_p > 0.05
    (2, (2,), 'p', True, True)
    """
    if n_max < 1:
        raise InputError(f"n_max must be at least 1 (given {n_max}).")
    check_fraction("confidence", confidence)
    cells = read_cells(recordings, q_cv=q_cv, q_cv_doubt=q_cv_doubt, q_prior=q_prior)
    n_trials = tuple(_count_trials(one) for one in recordings)
    if cells is None:
        return _no_fit(recordings, n_trials, n_max=n_max)
    summits = find_summits(cells, n_max=n_max)
    margin = 0.5 * float(chdtri(1, 1.0 - confidence))
    evidence = max(one.best for one in summits.values()) - silent_objective(cells)
    # a vesicle's size and every p_site are what release adds to the noise
    silent = evidence < 0.5 * float(chdtri(len(cells.first) + 1, 1.0 - confidence))
    change = _compare(cells, summits, alpha=1.0 - confidence, silent=silent)
    # a q that only seems to have changed costs n_sites and p_site more than one that has not been noticed to
    shared_q = not (change.changed in ("q", "both") and change.q_changed_p < _SURE)
    base = summits["p" if shared_q else "both"]
    n_set, at = base.n_set(margin), base.at_best

    # without release every n_sites is possible, and one site of the smallest vesicle gives the largest upper limit
    looked_at = (1,) if silent else n_set
    p_site, p_release = _probabilities(recordings, cells, base, looked_at, margin=margin, silent=silent)
    q = _sizes(cells, summits["p"], margin=margin, silent=silent)[0]
    q_by_recording = [_MISSING] * len(recordings)
    own_q = _sizes(cells, summits["both"], margin=margin, silent=silent) if cells.n_recordings > 1 else [q]
    noise_scale = np.full(len(recordings), np.nan)
    for r, size, log_scale in zip(cells.recordings, own_q, at[cells.noise], strict=True):
        q_by_recording[r], noise_scale[r] = size, np.exp(log_scale)
    flags = {
        "few_trials": min(n_trials) < _FEW_TRIALS,
        "low_signal": not silent and float(np.exp(at[0])) < _LOW_SIGNAL * float(np.median(cells.sd)),
        "n_unresolved": not silent and len(n_set) > 1,
        "silent": silent,
    }
    if silent:
        n_set = tuple(range(1, n_max + 1))
    return JointFit(
        n_sites=None if silent else base.n_sites,
        n_set=n_set,
        n_sites_lo=n_set[0],
        n_sites_hi=n_set[-1],
        n_unbounded=n_max in n_set,
        n_objective=base.objective - base.best,
        q=q,
        q_by_recording=tuple(q_by_recording),
        q_ratio=_size_ratio(cells, summits["both"], margin=margin, silent=silent),
        q_cv=np.nan if silent else float(np.exp(at[cells.q_cv])),
        p_site=p_site,
        p_release=p_release,
        noise_scale=noise_scale,
        shared_q=shared_q,
        log_likelihood={kind: one.best for kind, one in summits.items()},
        p_changed_p=change.p_changed_p,
        q_changed_p=change.q_changed_p,
        changed=change.changed,
        changed_p=change.changed_p,
        release_evidence=evidence,
        n_trials=n_trials,
        reason=change.reason,
        flags=frozenset(code for code, raised in flags.items() if raised),
    )


@dataclass(frozen=True, slots=True, kw_only=True)
class _Comparison:
    p_changed_p: float
    q_changed_p: float
    changed: Change | None
    changed_p: float
    reason: str


def _compare(cells: Cells, summits: dict[Change, Summits], *, alpha: float, silent: bool) -> _Comparison:
    """Say what differs between the recordings.

    Each parameter is tested with the other free: against a model in which q cannot change, a change of q alone looks
    like one of p_site (measured: in 65 % of boutons whose vesicle shrank by 30 %, at 60 trials).
    """

    def p_value(richer: Change, simpler: Change) -> float:
        more, less = summits[richer], summits[simpler]
        n = int(np.argmax(more.objective + less.objective))
        ratio = max(2.0 * float(more.objective[n] - less.objective[n]), 0.0)
        return float(chdtrc(more.n_free - less.n_free, ratio)) if more.n_free > less.n_free else float("nan")

    unknown = "one recording: no change to ask about" if cells.n_recordings == 1 else ""
    if silent:
        unknown = "no release told apart from noise"
    elif not unknown and summits["p"].n_free == summits["none"].n_free:
        unknown = "no pulse was measured in two recordings: p_site has nothing to be compared with"
    if unknown:
        nan = float("nan")
        return _Comparison(p_changed_p=nan, q_changed_p=nan, changed=None, changed_p=nan, reason=unknown)
    changed_p, p_changed_p, q_changed_p = p_value("both", "none"), p_value("both", "q"), p_value("both", "p")
    changed: Change
    if changed_p >= alpha:
        changed, reason = "none", "no change told apart from chance"
    elif p_changed_p < alpha and q_changed_p < alpha:
        changed, reason = "both", "neither a change of p_site nor one of q alone explains the amplitudes"
    elif p_changed_p < alpha:
        changed, reason = "p", "a change of p_site explains the amplitudes, one of q alone does not"
    elif q_changed_p < alpha:
        changed, reason = "q", "a change of q explains the amplitudes, one of p_site alone does not"
    else:
        changed = "p" if summits["p"].best - summits["p"].n_free >= summits["q"].best - summits["q"].n_free else "q"
        likelier = "p_site" if changed == "p" else "q"
        reason = f"something changed; p_site or q alone would explain it, {likelier} a little better (Akaike 1974)"
    return _Comparison(
        p_changed_p=p_changed_p, q_changed_p=q_changed_p, changed=changed, changed_p=changed_p, reason=reason
    )


def _sizes(cells: Cells, summits: Summits, *, margin: float, silent: bool) -> list[Estimate]:
    """Vesicle size of each recording, or of all where they share it."""
    leaders = cells.q[summits.leader[cells.q] == cells.q]
    if silent:
        return [_NO_RELEASE] * cells.n_recordings
    lo, hi = find_reach(cells, summits, parameters=leaders, n_set=summits.n_set(margin), margin=margin)
    best, low, high = np.exp(summits.at_best[leaders]), np.exp(lo.min(axis=0)), np.exp(hi.max(axis=0))
    return [
        Estimate(value=float(value), lo=float(a), hi=float(b), method=_METHOD)
        for value, a, b in zip(best, low, high, strict=True)
    ]


def _size_ratio(cells: Cells, summits: Summits, *, margin: float, silent: bool) -> Estimate:
    """Vesicle size of the last recording over that of the first."""
    if silent or cells.n_recordings == 1:
        return _NO_RELEASE if silent else _ONE_RECORDING
    value = float(np.exp(summits.at_best[cells.q[-1]] - summits.at_best[cells.q[0]]))
    lo, hi = find_q_ratio(cells, summits, n_set=summits.n_set(margin), margin=margin)
    return Estimate(value=value, lo=float(np.exp(lo)), hi=float(np.exp(hi)), method=_METHOD)


def _probabilities(
    recordings: Sequence[JointData],
    cells: Cells,
    summits: Summits,
    n_set: tuple[int, ...],
    *,
    margin: float,
    silent: bool,
) -> tuple[tuple[tuple[Estimate, ...], ...], tuple[tuple[Estimate, ...], ...]]:
    """p_site and p_release of each recording and pulse."""
    lo, hi = find_reach(cells, summits, parameters=cells.p_site, n_set=n_set, margin=margin)
    least, largest = p_bounds()
    at_end = 0.01 * least  # rounding of a limit that reached its bound
    lo, hi = np.where(lo <= least + at_end, 0.0, lo), np.where(hi >= largest - at_end, 1.0, hi)
    value = summits.at_best[cells.p_site]
    tables = []
    for power in (np.ones(len(n_set)), np.array(n_set, dtype=np.float64)):
        rows = [[_MISSING] * np.shape(one.amplitude)[1] for one in recordings]
        ends = (1.0 - (1.0 - limit) ** power[:, None] for limit in (lo, hi))
        low, high = (next(ends).min(axis=0), next(ends).max(axis=0))
        best = 1.0 - (1.0 - value) ** (summits.n_sites if power[-1] > 1 else 1)
        for c, (r, j) in enumerate(zip(cells.recordings[cells.recording], cells.pulse, strict=True)):
            rows[r][j] = (
                Estimate(value=0.0, lo=0.0, hi=float(high[c]), method="upper limit: no release told apart from noise")
                if silent
                else Estimate(value=float(best[c]), lo=float(low[c]), hi=float(high[c]), method=_METHOD)
            )
        tables.append(tuple(tuple(row) for row in rows))
    return tables[0], tables[1]


def _no_fit(recordings: Sequence[JointData], n_trials: tuple[int, ...], *, n_max: int) -> JointFit:
    empty = tuple((_MISSING,) * np.shape(one.amplitude)[1] for one in recordings)
    nan = float("nan")
    return JointFit(
        n_sites=None,
        n_set=(),
        n_sites_lo=None,
        n_sites_hi=None,
        n_unbounded=False,
        n_objective=np.full(n_max, nan),
        q=_MISSING,
        q_by_recording=(_MISSING,) * len(recordings),
        q_ratio=_MISSING,
        q_cv=nan,
        p_site=empty,
        p_release=empty,
        noise_scale=np.full(len(recordings), nan),
        shared_q=True,
        log_likelihood=dict.fromkeys(CHANGES, nan),
        p_changed_p=nan,
        q_changed_p=nan,
        changed=None,
        changed_p=nan,
        release_evidence=nan,
        n_trials=n_trials,
        reason="too few amplitudes that differ",
        flags=frozenset({"few_trials"} if min(n_trials) < _FEW_TRIALS else ()),
    )


def _count_trials(one: JointData) -> int:
    return int(np.isfinite(np.asarray(one.amplitude, dtype=np.float64)).any(axis=1).sum())
