"""Boutons recorded in several conditions, drawn without a movie, and what the joint fit says of them."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from napari_boutonrelease.analysis.settings import Settings
from napari_boutonrelease.quanta import JointData, fit_joint


@dataclass(frozen=True, slots=True, kw_only=True)
class Conditions:
    """What boutons are drawn from; the noise of an amplitude is 1.

    Attributes
    ----------
    p_site : tuple of tuple of float
        Of each recording and pulse.
    trials, nulls : int
        Of each recording; its noise is estimated from so many null amplitudes.
    q, q_spread, q_cv : float
        Typical vesicle, SD of its logarithm between boutons, variation of one vesicle's size (gamma distributed).
    q_ratio : tuple of float
        Vesicle of each recording over that of the first.
    n_sites : tuple of int
        Range, drawn from evenly.
    """

    p_site: tuple[tuple[float, ...], ...]
    trials: int = 80
    nulls: int = 300
    q: float = 4.4
    q_spread: float = 0.1
    q_cv: float = 0.3
    q_ratio: tuple[float, ...] = (1.0, 1.0, 1.0)
    n_sites: tuple[int, int] = (1, 4)


LOW_AND_HIGH = Conditions(p_site=((0.15, 0.22), (0.6, 0.45)))


def draw_bouton(conditions, *, rng):
    """Return n_sites, q of the first recording, and the recordings."""
    one = conditions
    n_sites = int(rng.integers(one.n_sites[0], one.n_sites[1], endpoint=True))
    q = one.q * np.exp(one.q_spread * rng.standard_normal())
    recordings = []
    for p_site, ratio in zip(one.p_site, one.q_ratio, strict=False):
        vesicles = rng.binomial(n_sites, p_site, (one.trials, len(p_site)))
        sizes = rng.standard_gamma(np.maximum(vesicles, 1) / one.q_cv**2) * one.q_cv**2 * (vesicles > 0)
        amplitude = ratio * q * sizes + rng.standard_normal(vesicles.shape)
        noise_sd = np.sqrt(rng.chisquare(one.nulls) / one.nulls)
        recordings.append(
            JointData(amplitude=amplitude, amplitude_sd=np.full(vesicles.shape, noise_sd), n_null=one.nulls)
        )
    return n_sites, q, recordings


def fit(recordings, *, q_prior=None):
    """Fit as the analysis does, with its settings."""
    quanta = Settings().quanta
    return fit_joint(
        recordings,
        n_max=quanta.n_max,
        q_cv=quanta.q_cv,
        q_cv_doubt=quanta.q_cv_doubt,
        q_prior=q_prior,
        confidence=0.95,
    )


def study_conditions(conditions, *, boutons, rng, singly=False):
    """Draw and fit boutons; one row a bouton, and one column a recording and pulse where there are many."""
    rows = {name: [] for name in _COLUMNS}
    p = np.array([value for pulses in conditions.p_site for value in pulses])
    for _ in range(boutons):
        n, q, recordings = draw_bouton(conditions, rng=rng)
        found = fit(recordings)
        site = [one for pulses in found.p_site for one in pulses]
        release = [one for pulses in found.p_release for one in pulses]
        p_release = 1.0 - (1.0 - p) ** n
        own_q = q * np.array(conditions.q_ratio[: len(recordings)])
        alone = [fit([one]) for one in recordings] if singly else []
        values = {
            "n": n,
            "n_estimate": found.n_sites,
            "n_in_set": n in found.n_set,
            "set_size": len(found.n_set),
            "n_alone": [one.n_sites for one in alone],
            "set_size_alone": [len(one.n_set) for one in alone],
            "q_ratio": found.q.value / q,
            "q_inside": found.q.lo <= q <= found.q.hi,
            "own_q_inside": [a.lo <= b <= a.hi for a, b in zip(found.q_by_recording, own_q, strict=True)],
            "site_inside": [a.lo <= b <= a.hi for a, b in zip(site, p, strict=True)],
            "release_inside": [a.lo <= b <= a.hi for a, b in zip(release, p_release, strict=True)],
            "release_error": [a.value - b for a, b in zip(release, p_release, strict=True)],
            "p_changed_p": found.p_changed_p,
            "q_changed_p": found.q_changed_p,
            "changed_p": found.changed_p,
            "changed": found.changed,
        }
        for name, value in values.items():
            rows[name].append(value)
    return {name: np.asarray(values) for name, values in rows.items()}


def summarise_conditions(found):
    """Shares of boutons and of intervals in one dictionary of numbers."""
    n = found["n"]
    right = found["n_estimate"] == n
    return {
        "boutons": n.size,
        "n_right": right.mean(),
        "n_right_by_n": [round(float(right[n == k].mean()), 3) for k in np.unique(n)],
        "within_one": np.mean(np.abs(found["n_estimate"] - n) <= 1),
        "n_in_set": found["n_in_set"].mean(),
        "n_in_set_by_n": [round(float(found["n_in_set"][n == k].mean()), 3) for k in np.unique(n)],
        "set_size": found["set_size"].mean(),
        "n_right_alone": (found["n_alone"] == n[:, None]).mean(axis=0).tolist(),
        "set_size_alone": found["set_size_alone"].mean(axis=0).tolist(),
        "q_bias": found["q_ratio"].mean() - 1.0,
        "q_coverage": found["q_inside"].mean(),
        "own_q_coverage": found["own_q_inside"].mean(axis=0).tolist(),
        "site_coverage": found["site_inside"].mean(axis=0).tolist(),
        "release_coverage": found["release_inside"].mean(axis=0).tolist(),
        "release_bias": found["release_error"].mean(axis=0).tolist(),
        "release_rms": np.sqrt(np.mean(found["release_error"] ** 2, axis=0)).tolist(),
        "p_changed": np.mean(found["p_changed_p"] < 0.05),
        "q_changed": np.mean(found["q_changed_p"] < 0.05),
        "any_changed": np.mean(found["changed_p"] < 0.05),
        "changed": {kind: float(np.mean(found["changed"] == kind)) for kind in ("none", "p", "q", "both")},
    }


_COLUMNS = (
    "n",
    "n_estimate",
    "n_in_set",
    "set_size",
    "n_alone",
    "set_size_alone",
    "q_ratio",
    "q_inside",
    "own_q_inside",
    "site_inside",
    "release_inside",
    "release_error",
    "p_changed_p",
    "q_changed_p",
    "changed_p",
    "changed",
)
