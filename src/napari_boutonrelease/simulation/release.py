"""Release drawn site by site and vesicle by vesicle, and the exact chances that the draws follow."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from .recipe import Recipe


@dataclass(frozen=True, slots=True, kw_only=True)
class ReleaseChances:
    """What is to be expected of stimuli that arrive, given the recipe.

    Attributes
    ----------
    p_vesicle : (n_boutons, n_trials, n_pulses) ndarray
        Chance that one site releases at a stimulus, whatever happened before; NaN where there is no such pulse.
    p_release : (n_boutons, n_pulses) ndarray
        Chance that at least one site releases, mean over trials.
    mean_vesicles : (n_boutons, n_pulses) ndarray
        Vesicles a stimulus, mean over trials.
    p2_given_release, p2_given_failure : (n_boutons,) ndarray
        Chance that pulse 2 releases after a release or a failure at pulse 1, mean over trials; NaN without pulse 2.
    """

    p_vesicle: NDArray[np.float64]
    p_release: NDArray[np.float64]
    mean_vesicles: NDArray[np.float64]
    p2_given_release: NDArray[np.float64]
    p2_given_failure: NDArray[np.float64]


@dataclass(frozen=True, slots=True, kw_only=True)
class Vesicles:
    """Vesicles that fused, in order of bouton, trial and pulse.

    Attributes
    ----------
    bouton, trial, pulse : (n_vesicles,) ndarray of int
        Whose they are; trial and pulse are -1 for a spontaneous one.
    time_s : (n_vesicles,) ndarray
        Moment of fusion on the same clock as the stimuli, in s.
    size_dff : (n_vesicles,) ndarray
        Response to each (dF/F at its peak).
    """

    bouton: NDArray[np.int64]
    trial: NDArray[np.int64]
    pulse: NDArray[np.int64]
    time_s: NDArray[np.float64]
    size_dff: NDArray[np.float64]


def site_probability(
    *, p_site: NDArray[np.float64], stimulus_s: NDArray[np.float64], recipe: Recipe
) -> NDArray[np.float64]:
    """Chance that a site that holds a vesicle releases it at each stimulus.

    Every trial starts from rest. A pulse raises u by `facilitation` x p x (1 - u), p being the value at rest, and the
    rise wears off with `facilitation_s` (Tsodyks & Markram 1997).

    Returns
    -------
    (n_boutons, n_trials, n_pulses) ndarray
        NaN where `stimulus_s` is.
    """
    n_trials, n_pulses = stimulus_s.shape
    faded = 1.0 - recipe.rundown * (np.arange(n_trials) / max(n_trials - 1, 1))
    rest = p_site[:, None] * faded
    probability = np.full((p_site.size, n_trials, n_pulses), np.nan)
    current = rest
    for pulse in range(n_pulses):
        if pulse:
            left = np.exp(-(stimulus_s[:, pulse] - stimulus_s[:, pulse - 1]) / recipe.facilitation_s)
            raised = np.minimum(current + recipe.facilitation * rest * (1.0 - current), 1.0)
            current = rest + (raised - rest) * left
        probability[:, :, pulse] = np.where(np.isfinite(stimulus_s[:, pulse]), current, np.nan)
    return probability


def refill_chance(*, stimulus_s: NDArray[np.float64], recipe: Recipe) -> NDArray[np.float64]:
    """Chance that an empty site is full again by the next pulse, (n_trials, n_pulses - 1)."""
    gaps = np.diff(stimulus_s, axis=1)
    return np.ones_like(gaps) if recipe.recovery_s == 0 else -np.expm1(-gaps / recipe.recovery_s)


def release_chances(
    *, n_sites: NDArray[np.int64], p_site: NDArray[np.float64], stimulus_s: NDArray[np.float64], recipe: Recipe
) -> ReleaseChances:
    """Exact chances of release for stimuli that all arrive: each site is a chain of two states, full and empty."""
    fires = site_probability(p_site=p_site, stimulus_s=stimulus_s, recipe=recipe)
    refill = refill_chance(stimulus_s=stimulus_s, recipe=recipe)
    full = np.ones(fires.shape)
    for pulse in range(1, fires.shape[2]):
        kept = full[:, :, pulse - 1] * (1.0 - fires[:, :, pulse - 1])
        full[:, :, pulse] = kept + (1.0 - kept) * refill[:, pulse - 1]
    p_vesicle = full * fires
    sites = n_sites[:, None, None]
    p_any = 1.0 - (1.0 - p_vesicle) ** sites
    after_release = after_failure = np.full(n_sites.size, np.nan)
    if fires.shape[2] > 1:
        # After a failure every site is full; what remains of the total belongs to the trials with a release.
        given_failure = 1.0 - (1.0 - fires[:, :, 1]) ** n_sites[:, None]
        first, second = p_any[:, :, 0], p_any[:, :, 1]
        both = second - given_failure * (1.0 - first)
        paired = np.isfinite(second)
        released = np.where(paired, first, 0.0).sum(axis=1)
        failed = np.where(paired, 1.0 - first, 0.0).sum(axis=1)
        with np.errstate(invalid="ignore", divide="ignore"):
            after_release = np.nansum(both, axis=1) / released
            after_failure = np.nansum(given_failure * (1.0 - first), axis=1) / failed
    return ReleaseChances(
        p_vesicle=p_vesicle,
        p_release=_mean_over_trials(p_any),
        mean_vesicles=_mean_over_trials(p_vesicle) * n_sites[:, None],
        p2_given_release=after_release,
        p2_given_failure=after_failure,
    )


def draw_evoked(
    *,
    n_sites: NDArray[np.int64],
    p_site: NDArray[np.float64],
    q_dff: NDArray[np.float64],
    stimulus_s: NDArray[np.float64],
    arrived: NDArray[np.bool_],
    recipe: Recipe,
    rng: np.random.Generator,
) -> Vesicles:
    """Draw every vesicle that the stimuli release.

    Parameters
    ----------
    n_sites, p_site, q_dff : (n_boutons,) ndarray
        Sites, their release probability at rest, and the mean response to one vesicle.
    stimulus_s : (n_trials, n_pulses) ndarray
        When the stimuli arrive, in s; NaN where there is no such pulse.
    arrived : (n_trials, n_pulses) ndarray of bool
        False where a stimulus reached no bouton.
    """
    n_trials, n_pulses = stimulus_s.shape
    fires = site_probability(p_site=p_site, stimulus_s=stimulus_s, recipe=recipe)
    refill = refill_chance(stimulus_s=stimulus_s, recipe=recipe)
    bouton, trial, pulse = [], [], []
    for b, sites in enumerate(n_sites):
        full = np.ones((n_trials, int(sites)), dtype=bool)
        for j in range(n_pulses):
            if j:
                full |= rng.random(full.shape) < np.nan_to_num(refill[:, j - 1])[:, None]
            chance = np.where(arrived[:, j], np.nan_to_num(fires[b, :, j]), 0.0)
            released = full & (rng.random(full.shape) < chance[:, None])
            full &= ~released
            which = np.nonzero(released)[0]
            bouton.append(np.full(which.size, b))
            trial.append(which)
            pulse.append(np.full(which.size, j))
    of_bouton, of_trial, of_pulse = (np.concatenate([*parts, np.zeros(0, int)]) for parts in (bouton, trial, pulse))
    delay = recipe.latency_s + rng.exponential(recipe.jitter_s, of_bouton.size)
    return Vesicles(
        bouton=of_bouton,
        trial=of_trial,
        pulse=of_pulse,
        time_s=stimulus_s[of_trial, of_pulse] + delay,
        size_dff=draw_sizes(mean_dff=q_dff[of_bouton], recipe=recipe, rng=rng),
    )


def draw_spontaneous(
    *,
    releases: NDArray[np.bool_],
    q_dff: NDArray[np.float64],
    duration_s: float,
    recipe: Recipe,
    rng: np.random.Generator,
) -> Vesicles:
    """Draw the vesicles that boutons lose without stimulus: a Poisson process at each bouton that can release."""
    counts = rng.poisson(recipe.spontaneous_per_s * duration_s * releases)
    bouton = np.repeat(np.arange(releases.size), counts)
    nobody = np.full(bouton.size, -1)
    return Vesicles(
        bouton=bouton,
        trial=nobody,
        pulse=nobody,
        time_s=rng.uniform(0.0, duration_s, bouton.size),
        size_dff=draw_sizes(mean_dff=q_dff[bouton], recipe=recipe, rng=rng),
    )


def draw_sizes(*, mean_dff: NDArray[np.float64], recipe: Recipe, rng: np.random.Generator) -> NDArray[np.float64]:
    """Draw the response to single vesicles around their means: gamma, or normal without what falls below zero."""
    if recipe.q_cv == 0:
        return mean_dff.copy()
    if recipe.q_shape == "gamma":
        shape = 1.0 / recipe.q_cv**2
        return mean_dff * rng.standard_gamma(shape, mean_dff.size) / shape
    relative = rng.normal(1.0, recipe.q_cv, mean_dff.size)
    while np.any(below := relative <= 0):
        relative[below] = rng.normal(1.0, recipe.q_cv, int(below.sum()))
    return mean_dff * relative


def _mean_over_trials(values: NDArray[np.float64]) -> NDArray[np.float64]:
    present = np.isfinite(values)
    mean: NDArray[np.float64] = np.where(present, values, 0.0).sum(axis=1) / present.sum(axis=1)
    return mean
