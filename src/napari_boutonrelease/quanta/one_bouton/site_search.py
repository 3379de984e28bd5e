"""Best release models of one bouton over several numbers of sites, and how far each quantity can be moved."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from scipy.special import expit

from .fit_inputs import BoutonData, ReleasePriors, make_problems, starting_points
from .mixture_fit import (
    NOISE,
    RELEASE,
    SIZE,
    VARIATION,
    Problems,
    log_likelihood,
    maximise,
)
from .profile_likelihood import profile_ends

if TYPE_CHECKING:
    from collections.abc import Sequence

    from numpy.typing import NDArray

    Floats = NDArray[np.float64]

MAX_STEPS = 200
TOLERANCE = 1e-5  # nats that one more Newton step promises
_PARAMETERS = ("p_site", "q", "q_cv", "noise_sd")


@dataclass(frozen=True, slots=True, kw_only=True)
class ReleaseModel:
    """The best parameters at one number of sites.

    Attributes
    ----------
    n_sites : int or None
        Number of sites; None for Poisson release.
    p_site : float
        Release probability of a site; NaN for Poisson release.
    mean_vesicles : float
        Mean number of vesicles a stimulus.
    p_release : float
        Probability of at least one vesicle.
    q, q_cv, noise_sd : float
        Mean response to one vesicle, its coefficient of variation, SD of the noise; unit of the amplitudes.
    log_likelihood : float
        Of evoked and null amplitudes, without priors, in nats.
    objective : float
        The same plus the log priors: what was maximised.
    bic : float
        Bayesian information criterion (Schwarz 1978), over the evoked amplitudes.
    converged : bool
        Whether the climb ended at a stationary point.
    at_limit : tuple of str
        Parameters that ended at a bound.
    """

    n_sites: int | None
    p_site: float
    mean_vesicles: float
    p_release: float
    q: float
    q_cv: float
    noise_sd: float
    log_likelihood: float
    objective: float
    bic: float
    converged: bool
    at_limit: tuple[str, ...]


@dataclass(frozen=True, slots=True)
class Family:
    """Fitted problems that share m_max."""

    problems: Problems
    parameters: Floats  # (B, 4)
    objective: Floats  # (B,)
    converged: NDArray[np.bool_]


def climb(data: BoutonData, n_sites: Floats, *, m_max: int, priors: ReleasePriors) -> Family:
    """Climb from every start of every problem and keep the best summit of each."""
    problems = make_problems(data, n_sites, m_max=m_max, priors=priors)
    starts = starting_points(problems, data, priors=priors)
    n_problems, n_starts, _ = starts.shape
    repeated = problems.take(np.repeat(np.arange(n_problems), n_starts))
    found = maximise(repeated, starts.reshape(-1, starts.shape[2]), max_steps=MAX_STEPS, tolerance=TOLERANCE)
    best = found.objective.reshape(n_problems, n_starts).argmax(axis=1) + n_starts * np.arange(n_problems)
    return Family(problems, found.parameters[best], found.objective[best], found.converged[best])


def release_models(family: Family) -> list[ReleaseModel]:
    """Read off what each fitted problem of a family says."""
    problems, theta = family.problems, family.parameters
    scores = log_likelihood(problems, theta)
    mean, p_site, p_release = release_numbers(problems.n_sites, theta[:, RELEASE])
    at_bound = problems.free & ((theta <= problems.lower) | (theta >= problems.upper))
    n_free = problems.free.sum(axis=1)
    q, q_cv, noise_sd = np.exp(theta[:, [SIZE, VARIATION, NOISE]]).T
    return [
        ReleaseModel(
            n_sites=None if np.isinf(n) else int(n),
            p_site=float(p_site[i]),
            mean_vesicles=float(mean[i]),
            p_release=float(p_release[i]),
            q=float(q[i]),
            q_cv=float(q_cv[i]),
            noise_sd=float(noise_sd[i]),
            log_likelihood=float(scores[i]),
            objective=float(family.objective[i]),
            bic=float(n_free[i] * np.log(problems.amplitudes.shape[1]) - 2.0 * family.objective[i]),
            converged=bool(family.converged[i]),
            at_limit=tuple(name for name, bound in zip(_PARAMETERS, at_bound[i], strict=True) if bound),
        )
        for i, n in enumerate(problems.n_sites)
    ]


def release_numbers(n_sites: Floats, release: Floats) -> tuple[Floats, Floats, Floats]:
    """Mean number of vesicles, p_site (NaN for Poisson) and p_release, from logit p_site or log mean."""
    poisson = np.isinf(n_sites)
    p_site = np.where(poisson, np.nan, expit(release))
    mean = np.where(poisson, np.exp(np.minimum(release, 20.0)), np.where(poisson, 0.0, n_sites) * expit(release))
    log_failure = np.where(poisson, -mean, -np.where(poisson, 0.0, n_sites) * np.logaddexp(0.0, release))
    return mean, p_site, -np.expm1(log_failure)


def likelihood_reach(families: Sequence[Family], *, level: float) -> dict[str, tuple[float, float]]:
    """Range of each quantity over all models, as far as their profile likelihoods stay above `level`."""
    ranges: dict[str, list[Floats]] = {"p_release": [], "p_site": [], "q": []}
    for family in families:
        inside = np.flatnonzero(family.objective >= level)
        if not inside.size:
            continue
        # four ends a model: release down and up, size down and up
        rows = np.repeat(inside, 4)
        parameter = np.tile([RELEASE, RELEASE, SIZE, SIZE], inside.size)
        side = np.tile([-1.0, 1.0], 2 * inside.size)
        problems, theta = family.problems.take(rows), family.parameters[rows]
        ends, is_open = profile_ends(problems, theta, level=np.full(rows.size, level), parameter=parameter, side=side)
        _, p_site, p_release = release_numbers(problems.n_sites, ends)
        nothing, everything = is_open & (side < 0), is_open & (side > 0) & np.isfinite(problems.n_sites)
        for name, values in (("p_release", p_release), ("p_site", p_site)):
            values = np.where(nothing, 0.0, np.where(everything, 1.0, values))
            ranges[name].append(values.reshape(-1, 4)[:, :2])
        sizes = np.where(is_open, np.where(side > 0, np.inf, 0.0), np.exp(np.minimum(ends, 700.0)))
        ranges["q"].append(sizes.reshape(-1, 4)[:, 2:])
    poisson_inside = any(np.isinf(f.problems.n_sites[0]) and f.objective[0] >= level for f in families)
    limits = {}
    for name, parts in ranges.items():
        both = np.concatenate(parts)
        known = both[~np.isnan(both).any(axis=1)]
        limits[name] = (float(known[:, 0].min()), float(known[:, 1].max())) if len(known) else (np.nan, np.nan)
    if poisson_inside:  # infinitely many sites of no probability
        limits["p_site"] = (0.0, limits["p_site"][1])
    return limits
