"""Axons of boutons drawn at random, their amplitudes without a movie, and how well their release is estimated."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from observer import p_release_if_all_else_known, released_if_all_known

from napari_boutonrelease.analysis.settings import Settings
from napari_boutonrelease.quanta import measure_pulse_pair
from napari_boutonrelease.quanta.whole_axon.pooled import fit_axon_release


@dataclass(frozen=True, slots=True, kw_only=True)
class Population:
    """What axons are drawn from; the noise of an amplitude is 1.

    Attributes
    ----------
    q : float
        Typical vesicle over noise.
    boutons, trials, pulses, nulls : int
        Of each axon; the noise of each bouton is estimated from so many null amplitudes.
    silent : int
        How many of the boutons never release.
    p_release, n_sites : tuple
        Ranges, drawn from evenly, pulse by pulse.
    q_spread, q_cv : float
        SD of log q between boutons; variation of one vesicle's size, gamma distributed.
    """

    q: float
    boutons: int = 8
    trials: int = 80
    pulses: int = 1
    nulls: int = 300
    silent: int = 0
    p_release: tuple[float, float] = (0.1, 0.9)
    n_sites: tuple[int, int] = (1, 4)
    q_spread: float = 0.1
    q_cv: float = 0.3


@dataclass(frozen=True, slots=True, kw_only=True)
class Axon:
    """One drawn axon: amplitudes, the noise as estimated, and the truth."""

    amplitude: np.ndarray
    noise_sd: np.ndarray
    vesicles: np.ndarray
    n_sites: np.ndarray
    p_release: np.ndarray
    q: np.ndarray


def draw_axon(population, *, rng):
    """Draw boutons, vesicles and noise of one axon."""
    one = population
    n_sites = rng.integers(one.n_sites[0], one.n_sites[1], one.boutons, endpoint=True)
    p_release = rng.uniform(*one.p_release, (one.boutons, one.pulses))
    p_release[: one.silent] = 0.0
    q = one.q * np.exp(one.q_spread * rng.standard_normal(one.boutons))
    p_site = 1.0 - (1.0 - p_release) ** (1.0 / n_sites[:, None])
    shape = (one.boutons, one.trials, one.pulses)
    vesicles = rng.binomial(n_sites[:, None, None], p_site[:, None, :], shape)
    sizes = rng.standard_gamma(np.maximum(vesicles, 1) / one.q_cv**2) * one.q_cv**2 * (vesicles > 0)
    amplitude = sizes * q[:, None, None] + rng.standard_normal(shape)
    noise_sd = np.sqrt(rng.chisquare(one.nulls, one.boutons) / one.nulls)
    return Axon(amplitude=amplitude, noise_sd=noise_sd, vesicles=vesicles, n_sites=n_sites, p_release=p_release, q=q)


def estimate(population, axon):
    """Estimate release as the analysis does, with its settings."""
    quanta = Settings().quanta
    sd = np.broadcast_to(axon.noise_sd[:, None, None], axon.amplitude.shape)
    return fit_axon_release(
        axon.amplitude,
        sd,
        n_null=np.full(population.boutons, population.nulls),
        n_max=quanta.n_max,
        q_cv=quanta.q_cv,
        q_cv_doubt=quanta.q_cv_doubt,
    )


def study_axons(population, *, axons, rng):
    """Draw and estimate axons; each array has one row a bouton (and one column a pulse)."""
    rows = {name: [] for name in _COLUMNS}
    for _ in range(axons):
        axon = draw_axon(population, rng=rng)
        fit = estimate(population, axon)
        sd = np.ones(population.trials)
        for b in range(population.boutons):
            n, q = int(axon.n_sites[b]), float(axon.q[b])
            a, p = axon.amplitude[b], axon.p_release[b]
            released = axon.vesicles[b] > 0
            best = [p_release_if_all_else_known(a[:, j], sd, n_sites=n, q=q, q_cv=population.q_cv) for j in _range(p)]
            posterior = [
                released_if_all_known(
                    a[:, j], sd, n_sites=n, p_site=1.0 - (1.0 - p[j]) ** (1.0 / n), q=q, q_cv=population.q_cv
                )
                for j in _range(p)
            ]
            values = {
                "p": p,
                "estimate": fit.p_release[b],
                "lo": fit.p_release_lo[b],
                "hi": fit.p_release_hi[b],
                "if_known": best,
                "wrong": np.mean((fit.p_released[b] > 0.5) != released, axis=0),
                "wrong_if_known": np.mean((np.column_stack(posterior) > 0.5) != released, axis=0),
                "n": n,
                "n_estimate": fit.n_sites[b],
                "n_in_set": n in fit.n_set[b],
                "n_unresolved": len(fit.n_set[b]) > 1,
                "q": q,
                "q_estimate": fit.q[b],
                "q_inside": fit.q_lo[b] <= q <= fit.q_hi[b],
                "silent_probability": fit.silent_probability[b],
            }
            for name, value in values.items():
                rows[name].append(value)
    return {name: np.asarray(values) for name, values in rows.items()}


def study_pairs(population, *, axons, rng):
    """Paired-pulse ratio of each bouton: truth, estimate, interval, and the true p_release of pulse 1."""
    rows = []
    for _ in range(axons):
        axon = draw_axon(population, rng=rng)
        p_site = 1.0 - (1.0 - axon.p_release) ** (1.0 / axon.n_sites[:, None])
        for b in range(population.boutons):
            pair = measure_pulse_pair(
                axon.amplitude[b, :, 0],
                axon.amplitude[b, :, 1],
                noise_sd=axon.noise_sd[b],
                confidence=0.95,
                n_bootstrap=Settings().pairs.bootstrap,
                rng=rng,
            )
            ratio = pair.ppr
            rows.append([p_site[b, 1] / p_site[b, 0], ratio.value, ratio.lo, ratio.hi, axon.p_release[b, 0]])
    return dict(zip(("true", "estimate", "lo", "hi", "p_first"), np.array(rows).T, strict=True))


def summarise_pairs(found, *, p_first):
    """Bias and coverage of the ratios of boutons whose first release probability lies in a range."""
    meant = (found["p_first"] >= p_first[0]) & (found["p_first"] < p_first[1])
    known = meant & np.isfinite(found["estimate"])
    true, estimate, lo, hi = (found[name][known] for name in ("true", "estimate", "lo", "hi"))
    relative = (estimate - true) / true
    return {
        "boutons": int(meant.sum()),
        "undefined": int((meant & ~known).sum()),
        "bias": relative.mean(),
        "bias_se": relative.std() / np.sqrt(relative.size),
        "coverage": np.mean((lo <= true) & (true <= hi)),
    }


def summarise(found):
    """Bias, errors relative to the observer, coverage and the rest in one dictionary of numbers."""
    error, ideal = found["estimate"] - found["p"], found["if_known"] - found["p"]
    inside = (found["lo"] <= found["p"]) & (found["p"] <= found["hi"])
    return {
        "values": error.size,
        "bias": error.mean(),
        "bias_se": error.std() / np.sqrt(error.size),
        "rms": np.sqrt(np.mean(error**2)),
        "rms_if_known": np.sqrt(np.mean(ideal**2)),
        "ratio": np.sqrt(np.mean(error**2) / np.mean(ideal**2)),
        "coverage": inside.mean(),
        "wrong": found["wrong"].mean(),
        "wrong_if_known": found["wrong_if_known"].mean(),
        "n_right": np.mean(found["n_estimate"] == found["n"]),
        "n_in_set": found["n_in_set"].mean(),
        "n_unresolved": found["n_unresolved"].mean(),
        "q_ratio": np.mean(found["q_estimate"] / found["q"]),
        "q_coverage": found["q_inside"].mean(),
    }


def _range(values):
    return range(len(values))


_COLUMNS = (
    "p",
    "estimate",
    "lo",
    "hi",
    "if_known",
    "wrong",
    "wrong_if_known",
    "n",
    "n_estimate",
    "n_in_set",
    "n_unresolved",
    "q",
    "q_estimate",
    "q_inside",
    "silent_probability",
)

AXONS = {
    "q4.5": (Population(q=4.5), 40),
    "q2.1": (Population(q=2.1), 40),
    "q3": (Population(q=3.0), 30),
    "pair4.5": (Population(q=4.5, pulses=2), 25),
    "pair2.1": (Population(q=2.1, pulses=2), 25),
    "lowp": (Population(q=4.5, p_release=(0.02, 0.15)), 30),
    "lowp2.1": (Population(q=2.1, p_release=(0.02, 0.15)), 25),
    "mixed": (Population(q=4.5, silent=4), 30),
    "alone4.5": (Population(q=4.5, boutons=1), 150),
    "alone2.1": (Population(q=2.1, boutons=1), 100),
    "trials20": (Population(q=4.5, trials=20), 40),
    "trials300": (Population(q=4.5, trials=300), 8),
    "silent": (Population(q=4.5, silent=8), 25),
}
"""Populations of the validation, and how many axons of each."""
