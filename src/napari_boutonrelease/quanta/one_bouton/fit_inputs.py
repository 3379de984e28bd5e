"""One bouton's amplitudes made ready for fitting, and where a fit should start."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from ...checks import check_array
from ...errors import InputError
from .likelihoods import component_logpdf
from .mixture_fit import (
    N_PARAMETERS,
    NOISE,
    RELEASE,
    SIZE,
    VARIATION,
    LogPrior,
    Problems,
    release_log_weights,
)

if TYPE_CHECKING:
    from numpy.typing import ArrayLike, NDArray

    Floats = NDArray[np.float64]

_SPONTANEOUS_SD = 4.0  # a null amplitude beyond this many SD is taken for a release without stimulus
_EDGE_LOGIT = 12.0  # p_site within 6e-6 of 0 or 1 counts as 0 or 1
_NOISE_FACTOR = 5.0  # the fitted noise may differ from the starting value this many times either way
_SMALLEST_Q_SD = 0.25  # a vesicle smaller than this share of the noise is indistinguishable from it
_Q_CV_RANGE = (0.02, 1.5)
_SHARP_Q_CV, _BROAD_Q_CV = 0.06, 0.9
_N_Q, _N_RELEASE, _N_STARTS = 64, 12, 3


@dataclass(frozen=True, slots=True, kw_only=True)
class ReleasePriors:
    """What is known before one bouton is looked at.

    Attributes
    ----------
    q : LogPrior or None
        What other boutons say about q; None leaves q to this bouton.
    q_cv : LogPrior
        What is known of q_cv. Freeing it costs one bouton alone much precision of p_release.
    noise : LogPrior or None
        What is known of noise_sd besides the null amplitudes; needed where there are none.
    """

    q: LogPrior | None
    q_cv: LogPrior
    noise: LogPrior | None


@dataclass(frozen=True, slots=True, kw_only=True)
class BoutonData:
    """Usable amplitudes of one bouton, and what stands for its noise.

    Attributes
    ----------
    amplitudes, relative_noise : (T,) ndarray
        Finite amplitudes and their noise SD over the common noise_sd.
    used : (n_trials,) ndarray of bool
        Which of the trials given these are.
    null_count, null_squares : float
        Null amplitudes used, and the sum of their squares.
    n_spontaneous : int
        Null amplitudes left out because they look like releases.
    noise_start : float
        First guess of noise_sd.
    """

    amplitudes: Floats
    relative_noise: Floats
    used: NDArray[np.bool_]
    null_count: float
    null_squares: float
    n_spontaneous: int
    noise_start: float

    @property
    def usable(self) -> bool:
        """Whether there is something to fit: two amplitudes that differ, and a noise above zero."""
        return self.amplitudes.size >= 2 and bool(np.ptp(self.amplitudes) > 0) and self.noise_start > 0


def read_bouton_data(
    amplitudes: ArrayLike,
    null_amplitudes: ArrayLike,
    *,
    relative_noise: ArrayLike | None,
    noise_prior: LogPrior | None,
) -> BoutonData:
    """Keep what can be used, and guess the noise from nulls, else from the prior, else from the amplitudes.

    Raises
    ------
    InputError
        If an array has more than one axis, or `relative_noise` does not fit or is not positive.
    """
    evoked = check_array("amplitudes", amplitudes, n_dims=1)
    nulls = check_array("null_amplitudes", null_amplitudes, n_dims=1)
    nulls = nulls[np.isfinite(nulls)]
    ratio = np.ones_like(evoked) if relative_noise is None else check_array("relative_noise", relative_noise, n_dims=1)
    if ratio.shape != evoked.shape:
        raise InputError(f"relative_noise must have one value an amplitude ({evoked.size}; given {ratio.size}).")
    used = np.isfinite(evoked)
    if not (ratio[used] > 0).all():
        raise InputError(f"relative_noise must be greater than 0 (smallest given {ratio[used].min():g}).")
    quiet = nulls <= _SPONTANEOUS_SD * _robust_sd(nulls) if nulls.size > 3 else np.ones(nulls.size, dtype=bool)
    return BoutonData(
        amplitudes=evoked[used],
        relative_noise=ratio[used],
        used=used,
        null_count=float(np.count_nonzero(quiet)),
        null_squares=float(np.sum(nulls[quiet] ** 2)),
        n_spontaneous=int(np.count_nonzero(~quiet)),
        noise_start=_first_noise(evoked[used], nulls[quiet], noise_prior),
    )


def make_problems(data: BoutonData, n_sites: Floats, *, m_max: int, priors: ReleasePriors) -> Problems:
    """One problem for each entry of `n_sites` (infinite: Poisson release), all on the same amplitudes."""
    n_problems = len(n_sites)
    noise = np.log(data.noise_start)
    q_top = np.log(2.0 * max(float(np.abs(data.amplitudes).max()), data.noise_start))
    release_top = np.where(np.isinf(n_sites), np.log(_largest_mean(m_max)), _EDGE_LOGIT)
    lower = np.tile([-_EDGE_LOGIT, noise + np.log(_SMALLEST_Q_SD), *np.log([_Q_CV_RANGE[0], 1.0])], (n_problems, 1))
    upper = np.column_stack([release_top, np.tile([q_top, np.log(_Q_CV_RANGE[1]), 0.0], (n_problems, 1))])
    lower[:, NOISE], upper[:, NOISE] = noise - np.log(_NOISE_FACTOR), noise + np.log(_NOISE_FACTOR)
    prior_mean, prior_precision = np.zeros((n_problems, N_PARAMETERS)), np.zeros((n_problems, N_PARAMETERS))
    free = np.ones((n_problems, N_PARAMETERS), dtype=bool)
    for parameter, prior in ((SIZE, priors.q), (VARIATION, priors.q_cv), (NOISE, priors.noise)):
        if prior is None:
            continue
        prior_mean[:, parameter] = np.log(prior.centre)
        if prior.log_sd == 0:
            free[:, parameter] = False
            lower[:, parameter] = upper[:, parameter] = np.log(prior.centre)
        else:
            prior_precision[:, parameter] = prior.log_sd**-2.0
    every = np.zeros(n_problems, dtype=np.intp)
    return Problems(
        amplitudes=data.amplitudes[None][every],
        relative_noise=data.relative_noise[None][every],
        missing=np.zeros((n_problems, data.amplitudes.size), dtype=bool),
        n_sites=np.asarray(n_sites, dtype=np.float64),
        null_count=np.full(n_problems, data.null_count),
        null_squares=np.full(n_problems, data.null_squares),
        prior_mean=prior_mean,
        prior_precision=prior_precision,
        free=free,
        lower=lower,
        upper=upper,
        m_max=m_max,
    )


def starting_points(problems: Problems, data: BoutonData, *, priors: ReleasePriors) -> Floats:
    """Best few starts of each problem, (B, S, 4): the ridges of a grid over q, release probability and q_cv.

    Besides the expected q_cv, one is tried that is so small that peaks of the histogram stand out if there are any,
    and one so large that a single broad cloud counts as one vesicle, as far as the prior lets q_cv go. The noise
    stands at its first guess; the climb that follows frees all.
    """
    expected = float(np.clip(priors.q_cv.centre, *_Q_CV_RANGE))
    leeway = np.exp(2.0 * priors.q_cv.log_sd)
    sharp, broad = (
        max(expected / leeway, min(_SHARP_Q_CV, expected)),
        min(expected * leeway, max(_BROAD_Q_CV, expected)),
    )
    q_cvs = np.unique([sharp, expected, broad])
    return np.concatenate([_ridges(problems, data, q_cv=q_cv) for q_cv in q_cvs], axis=1)


def _ridges(problems: Problems, data: BoutonData, *, q_cv: float) -> Floats:
    lower, upper = problems.lower[0, SIZE], problems.upper[0, SIZE]
    log_q = np.linspace(max(lower, np.log(0.5 * data.noise_start)), upper, _N_Q) if upper > lower else np.array([lower])
    components = component_logpdf(
        data.amplitudes,
        noise_sd=data.noise_start * data.relative_noise,
        q=np.exp(log_q)[:, None],
        q_cv=q_cv,
        m_max=problems.m_max,
    )  # (M, Q, T)
    peak = components.max(axis=0)
    density = np.exp(components - peak).reshape(problems.m_max + 1, -1)
    prior = -0.5 * problems.prior_precision[0, SIZE] * (log_q - problems.prior_mean[0, SIZE]) ** 2
    release = _release_grid(problems.n_sites, problems.upper[:, RELEASE])  # (B, P)
    n_problems, n_release = release.shape
    weights = np.exp(release_log_weights(np.repeat(problems.n_sites, n_release), release.ravel(), m_max=problems.m_max))
    likelihood = (weights @ density).reshape(n_problems, n_release, log_q.size, -1)
    score = np.log(np.maximum(likelihood, 1e-300)).sum(axis=3) + peak.sum(axis=1) + prior
    best_release = score.argmax(axis=1)  # (B, Q)
    ridge = score.max(axis=1)
    wide = np.pad(ridge, ((0, 0), (1, 1)), constant_values=-np.inf)
    summit = (ridge >= wide[:, :-2]) & (ridge >= wide[:, 2:])
    order = np.argsort(np.where(summit, ridge, ridge - 1e6), axis=1)[:, ::-1][:, :_N_STARTS]
    rows = np.arange(n_problems)[:, None]
    starts = np.empty((*order.shape, N_PARAMETERS))
    starts[..., RELEASE] = release[rows, best_release[rows, order]]
    starts[..., SIZE] = log_q[order]
    starts[..., VARIATION] = np.log(q_cv)
    starts[..., NOISE] = np.log(data.noise_start)
    return starts


def poisson_terms(n_max: int) -> int:
    """Vesicles needed for a Poisson whose mean may reach `n_max` (all but 1e-5 of its probability)."""
    return int(np.ceil(n_max + 5.0 * np.sqrt(n_max) + 4.0))


def _largest_mean(m_max: int) -> float:
    """Inverse of `poisson_terms`."""
    return float((np.sqrt(max(m_max - 4.0, 1.0) + 6.25) - 2.5) ** 2)


def _release_grid(n_sites: Floats, top: Floats) -> Floats:
    """Logit of p_site, or log of the mean number, on a grid that a Newton climb can start from."""
    p = np.linspace(0.0, 1.0, _N_RELEASE + 2)[1:-1]
    logit = np.log(p / (1.0 - p))
    log_mean = np.log(np.geomspace(0.03, 1.0, _N_RELEASE))
    return np.where(np.isinf(n_sites)[:, None], log_mean + top[:, None], logit)


def _robust_sd(values: Floats) -> float:
    return 1.482602 * float(np.median(np.abs(values - np.median(values)))) if values.size else float("nan")


def _first_noise(evoked: Floats, quiet_nulls: Floats, noise_prior: LogPrior | None) -> float:
    if quiet_nulls.size > 3:
        return float(np.sqrt(np.mean(quiet_nulls**2)))
    if noise_prior is not None:
        return noise_prior.centre
    if not evoked.size:
        return float("nan")
    return 0.3 * float(evoked.std())  # no other word on the noise: most of the spread is release
