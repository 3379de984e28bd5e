"""The same boutons drawn in two recordings, their amplitudes without a movie, and what a comparison says changed."""

from __future__ import annotations

import json
from dataclasses import dataclass

import numpy as np
import pandas as pd

from napari_boutonrelease.analysis.column_types import empty_table
from napari_boutonrelease.analysis.columns import BOUTONS
from napari_boutonrelease.analysis.settings import Settings
from napari_boutonrelease.comparison import ComparedRecording, CompareSettings, compare_recordings
from napari_boutonrelease.quanta import fit_axon_release, measure_pulse_pair

CHANGES = ("p_release_change", "q_ratio", "ppr_ratio", "amplitude_ratio", "inverse_cv2_ratio")
TESTS = ("p_changed_p", "q_changed_p")


@dataclass(frozen=True, slots=True, kw_only=True)
class Change:
    """What axons are drawn from; the noise of an amplitude is 1.

    Attributes
    ----------
    odds_ratio : float
        Odds of p_site in the second recording over those in the first, at both pulses.
    q_ratio : float
        Vesicle in the second recording over that in the first.
    p_site, n_sites : tuple
        Ranges in the first recording, drawn from evenly; p_site pulse by pulse.
    boutons, trials, nulls : int
        Of each axon; the noise of each bouton is estimated from so many null amplitudes.
    q, q_spread, q_cv : float
        Typical vesicle, SD of its logarithm between boutons, variation of one vesicle's size (gamma distributed).
    """

    odds_ratio: float = 1.0
    q_ratio: float = 1.0
    p_site: tuple[float, float] = (0.1, 0.6)
    n_sites: tuple[int, int] = (1, 4)
    boutons: int = 8
    trials: int = 80
    nulls: int = 300
    q: float = 4.4
    q_spread: float = 0.1
    q_cv: float = 0.3


SCENARIOS = {
    "nothing changes": Change(),
    "release changes": Change(odds_ratio=4.0),
    "vesicles change": Change(q_ratio=0.7),
    "both change": Change(odds_ratio=0.4, q_ratio=1.3),
    "vesicles change, q/noise 2.5": Change(q_ratio=0.8, q=2.5, p_site=(0.2, 0.6)),
}

# Scenarios in which each test has nothing to find.
WITHOUT_CHANGE = {
    "p_changed_p": [name for name, change in SCENARIOS.items() if change.odds_ratio == 1.0],
    "q_changed_p": [name for name, change in SCENARIOS.items() if change.q_ratio == 1.0],
}

AXONS = 15


def compare_axon(change, *, rng, own_release=True):
    """Draw one axon in two recordings and compare them; a row a bouton: truth and what the comparison says.

    Without `own_release` there is no change of p_release to compare, which spares most of the time.
    """
    one = change
    n = rng.integers(one.n_sites[0], one.n_sites[1], one.boutons, endpoint=True)
    q = one.q * np.exp(one.q_spread * rng.standard_normal(one.boutons))
    first = rng.uniform(*one.p_site, (one.boutons, 2))
    odds = one.odds_ratio * first / (1.0 - first)
    p_site = (first, odds / (1.0 + odds))
    vesicle = (q, q * one.q_ratio)
    recordings = [
        recording_of_amplitudes(
            *_draw(one, n, p, size, rng=rng), nulls=one.nulls, name=name, rng=rng, own_release=own_release
        )
        for name, p, size in zip(("a", "b"), p_site, vesicle, strict=True)
    ]
    ids = np.repeat(np.arange(1, one.boutons + 1)[:, None], 2, axis=1)
    found = compare_recordings(recordings, settings=CompareSettings(), pairs=ids).changes
    release = [1.0 - (1.0 - p[:, 0]) ** n for p in p_site]
    mean = [size[:, None] * n[:, None] * p for size, p in zip(vesicle, p_site, strict=True)]
    inverse_cv2 = [n * p[:, 0] / (1.0 - p[:, 0] + one.q_cv**2) for p in p_site]
    true = {
        "p_release_change": release[1] - release[0],
        "q_ratio": vesicle[1] / vesicle[0],
        "ppr_ratio": (mean[1][:, 1] / mean[1][:, 0]) / (mean[0][:, 1] / mean[0][:, 0]),
        "amplitude_ratio": mean[1][:, 0] / mean[0][:, 0],
        "inverse_cv2_ratio": inverse_cv2[1] / inverse_cv2[0],
    }
    rows = {"n": n, "p_site": p_site[0][:, 0], "p_release": release[0]}
    for name in CHANGES:
        rows[name] = np.column_stack(
            [true[name], *(found[f"{name}{end}"].to_numpy(dtype=float) for end in ("", "_lo", "_hi"))]
        )
    for name in TESTS:
        rows[name] = found[name].to_numpy(dtype=float)
    return rows


def _draw(one, n, p_site, q, *, rng):
    """Amplitudes (bouton, trial, pulse) and the noise as it would be known."""
    vesicles = rng.binomial(n[:, None, None], p_site[:, None, :], (one.boutons, one.trials, 2))
    sizes = rng.standard_gamma(np.maximum(vesicles, 1) / one.q_cv**2) * one.q_cv**2 * (vesicles > 0)
    noise_sd = np.sqrt(rng.chisquare(one.nulls, one.boutons) / one.nulls)
    return q[:, None, None] * sizes + rng.standard_normal(vesicles.shape), noise_sd


def recording_of_amplitudes(amplitude, noise_sd, *, nulls, name, rng, amplitude_sd=None, own_release=True):
    """Put amplitudes into a recording, its table filled by the project's own estimators.

    Parameters
    ----------
    amplitude : (n_boutons, n_trials, n_pulses) ndarray
    noise_sd : (n_boutons,) ndarray
    nulls : int or (n_boutons,) ndarray
        How many null amplitudes tell the noise.
    amplitude_sd : (n_boutons, n_trials, n_pulses) ndarray, optional
        Noise of each amplitude, where it is not the same for all of a bouton.
    own_release : bool
        Whether to estimate the recording's own release, too.
    """
    settings = Settings()
    boutons = len(amplitude)
    sd = np.broadcast_to(noise_sd[:, None, None], amplitude.shape) if amplitude_sd is None else amplitude_sd
    nulls = np.broadcast_to(nulls, boutons).astype(float)
    ratios = [
        measure_pulse_pair(
            one[:, 0], one[:, 1], noise_sd=noise, confidence=0.95, n_bootstrap=settings.pairs.bootstrap, rng=rng
        ).ppr
        for one, noise in zip(amplitude, noise_sd, strict=True)
    ]
    table = empty_table(BOUTONS).reindex(range(boutons))
    table["bouton"] = pd.array(np.arange(1, boutons + 1), dtype="Int64")
    table["y_px"], table["x_px"] = 0.0, 20.0 * np.arange(boutons)
    table["noise_sd"], table["noise_n"] = noise_sd, nulls
    table["ppr"], table["ppr_lo"], table["ppr_hi"] = np.array([(one.value, one.lo, one.hi) for one in ratios]).T
    vesicle = None
    if own_release:
        axon = fit_axon_release(
            amplitude,
            sd,
            n_null=nulls,
            n_max=settings.quanta.n_max,
            q_cv=settings.quanta.q_cv,
            q_cv_doubt=settings.quanta.q_cv_doubt,
        )
        vesicle = axon.axon_q
        for end, values in (("", axon.p_release), ("_lo", axon.p_release_lo), ("_hi", axon.p_release_hi)):
            table[f"p_release{end}"] = values[:, 0]
    trials, pulses = amplitude.shape[1:]
    return ComparedRecording(
        name=name,
        source=name,
        boutons=table,
        amplitude=amplitude,
        amplitude_sd=sd,
        null_amplitude=np.full((boutons, 0), np.nan),
        stimulus_s=np.arange(trials)[:, None] + 0.05 * np.arange(pulses),
        mean_image=np.zeros((16, 16)),
        pixel_size_um=None,
        summary={"population": {"q": vesicle}},
    )


def study_changes(change, *, axons, rng, own_release=True):
    """Draw and compare axons; each array has a row a bouton."""
    return pool(compare_axon(change, rng=rng, own_release=own_release) for _ in range(axons))


def pool(parts):
    """Put the rows of several studies under one another."""
    parts = list(parts)
    return {name: np.concatenate([one[name] for one in parts]) for name in parts[0]}


def studied_changes(name, *, blocks, folder, progress=None):
    """Boutons of a scenario, `AXONS` axons a block; blocks that the folder holds are not made again.

    Only the first block of each scenario estimates the recordings' own release.
    """
    found = []
    for block in blocks:
        path = record_path(folder, name, block)
        if not path.exists():
            rng = np.random.default_rng([block, *name.encode()])
            made = study_changes(SCENARIOS[name], axons=AXONS, rng=rng, own_release=block == 1)
            path.write_text(json.dumps({key: values.tolist() for key, values in made.items()}), encoding="utf-8")
            if progress is not None:
                progress(name, block)
        kept = json.loads(path.read_text(encoding="utf-8"))
        found.append({key: np.array(values, dtype=float) for key, values in kept.items()})
    return pool(found)


def record_path(folder, name, block):
    """Where a block of a scenario is kept."""
    plain = "".join(letter if letter.isalnum() else "-" for letter in name)
    return folder / f"changes-{plain}-{block}.json"


def summarise_changes(found):
    """Coverage of each interval, and how often each test says that something changed at the level of 5 %."""
    summary = {"boutons": len(found["n"])}
    for name in CHANGES:
        true, value, lo, hi = found[name].T
        known = np.isfinite(value)
        inside = ((lo <= true) & (true <= hi))[known]
        summary[name] = {
            "boutons": int(known.sum()),
            "undefined": int(np.sum(~known)),
            "coverage": float(inside.mean()) if known.any() else np.nan,
            "below": float(np.mean((hi < true)[known])) if known.any() else np.nan,
            "above": float(np.mean((lo > true)[known])) if known.any() else np.nan,
        }
    for name in TESTS:
        p = found[name][np.isfinite(found[name])]
        summary[name] = {"boutons": int(p.size), "found": float(np.mean(p < 0.05))}
    return summary
