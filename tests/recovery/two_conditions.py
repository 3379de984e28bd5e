"""The same boutons filmed at a low and at a high release probability, compared as two recordings are, beside the truth.

The ideal observer reads the amplitudes of the same movies and hands them to the same comparison.
"""

from __future__ import annotations

import json

import numpy as np
from comparisons import CHANGES, recording_of_amplitudes
from observer import observe
from study import SETTINGS, match, plain

from napari_boutonrelease.analysis.pipeline import Pipeline
from napari_boutonrelease.analysis.run import put_together
from napari_boutonrelease.comparison import CompareSettings, compare_recordings, recording_from_result
from napari_boutonrelease.recording import movie_from_array
from napari_boutonrelease.simulation import BoutonRecipe, preset_recipe, simulate_recording

P_SITE = {"low": 0.15, "high": 0.6}
Q_DFF = 0.38
SPACING_PX, MARGIN_PX, HEIGHT_PX = 14.0, 16.0, 48


def field_recipes(seed, *, boutons=12, trials=80):
    """Recipes of one axon in both conditions; one vesicle is 4.4 noise SDs in the median bouton."""
    rng = np.random.default_rng([seed, 0])
    n_sites = rng.permutation(np.resize([1, 2, 3, 4], boutons))
    x_px = MARGIN_PX + SPACING_PX * np.arange(boutons) + rng.uniform(-1.5, 1.5, boutons)
    y_px = HEIGHT_PX / 2 + 5.0 * np.sin(x_px / 25.0 + rng.uniform(0, 6)) + rng.uniform(-0.5, 0.5, boutons)
    preset = preset_recipe("fast-pair")
    q_dff = Q_DFF * np.exp(preset.q_spread * rng.standard_normal(boutons))
    f0_photons = preset.photons * np.exp(preset.photons_cv * rng.standard_normal(boutons))
    recipes = []
    for p_site in P_SITE.values():
        spots = tuple(
            BoutonRecipe(y_px=y, x_px=x, n_sites=int(n), p_site=p_site, q_dff=q, f0_photons=f0)
            for y, x, n, q, f0 in zip(y_px, x_px, n_sites, q_dff, f0_photons, strict=True)
        )
        width = int(x_px.max() + MARGIN_PX)
        plain = {"height_px": HEIGHT_PX, "width_px": width, "specks_on_axon": 0, "specks_off_axon": 0}
        recipes.append(preset_recipe("fast-pair", boutons=spots, trials=trials, trial_interval_s=0.7, **plain))
    return recipes


def study_field(seed, *, boutons=12, trials=80):
    """Film, analyse and compare one axon; numbers, lists and texts that JSON can hold, a row a bouton of the truth."""
    truths, places, found, observed = [], [], [], []
    rng = np.random.default_rng([seed, 3])
    for k, (name, recipe) in enumerate(zip(P_SITE, field_recipes(seed, boutons=boutons, trials=trials), strict=True)):
        simulation = simulate_recording(recipe, rng=np.random.default_rng([seed, k + 1]))
        movie = movie_from_array(
            simulation.frames, frame_interval_s=recipe.frame_interval_s, pixel_size_um=recipe.pixel_size_um
        )
        pipeline = Pipeline(movie, simulation.protocol)
        measured = pipeline.measure(SETTINGS)
        places.append(match(simulation.truth, measured)[0])
        found.append(recording_from_result(put_together(measured, pipeline=pipeline), name=name))
        fit = observe(simulation, movie).fit
        observed.append(
            recording_of_amplitudes(
                fit.amplitude,
                fit.noise_sd,
                nulls=fit.n_null_effective,
                name=name,
                rng=rng,
                amplitude_sd=fit.amplitude_se,
            )
        )
        truths.append(simulation.truth)
    ours = compare_recordings(found, settings=CompareSettings())
    same = np.repeat(np.arange(1, boutons + 1)[:, None], 2, axis=1)
    ideal = compare_recordings(observed, settings=CompareSettings(), pairs=same)
    spots = []
    for index in range(boutons):
        one = {**_truth(truths, index), "observer": _said(ideal, index)}
        one["snr"] = float(truths[0].q_dff[index] / observed[0].column("noise_sd")[index])
        row = places[0].get(index)
        if row is not None and ours.matches.row[row, 1] == places[1].get(index, -2):
            one["ours"] = _said(ours, row)
        spots.append(plain(one))
    there = ours.matches.row[:, 1]
    wrong = sum(there[row] >= 0 and there[row] != places[1].get(index) for index, row in places[0].items())
    return {"seed": seed, "spots": spots, "wrong_matches": int(wrong)}


def _truth(truths, index):
    low, high = truths
    n, cv = int(low.n_sites[index]), float(low.q_cv[index])
    p = [float(truth.p_site[index]) for truth in truths]
    inverse_cv2 = [n * one / (1.0 - one + cv**2) for one in p]
    release = [truth.p_release_by_pulse[index] for truth in truths]
    return {
        "n": n,
        "q": float(low.q_dff[index]),
        "p_release": [one[0] for one in release],
        "changes": {
            "p_release_change": release[1][0] - release[0][0],
            "q_ratio": 1.0,
            "ppr_ratio": float(high.ppr[index] / low.ppr[index]),
            "amplitude_ratio": p[1] / p[0],
            "inverse_cv2_ratio": inverse_cv2[1] / inverse_cv2[0],
        },
    }


def _said(comparison, row):
    """What a comparison says of a bouton of its first recording."""
    fit, own = comparison.fits[row].joint, comparison.joint.iloc[row]
    changes = comparison.changes
    change = changes[changes["bouton"] == own["bouton"]].iloc[0]
    return {
        "n": int(own["n_sites"]) if own["n_sites"] == own["n_sites"] else 0,
        "n_set": list(fit.n_set),
        "q": [fit.q.value, fit.q.lo, fit.q.hi],
        "p_release": [[one[0].value, one[0].lo, one[0].hi] for one in fit.p_release],
        "changed": None if fit.changed is None else str(fit.changed),
        "p_changed_p": fit.p_changed_p,
        "q_changed_p": fit.q_changed_p,
        "changes": {name: [float(change[f"{name}{end}"]) for end in ("", "_lo", "_hi")] for name in CHANGES},
    }


def studied_fields(*, seeds, folder, progress=None):
    """Records of axons; those that the folder holds as `conditions-seed.json` are not made again."""
    records = []
    for seed in seeds:
        path = folder / f"conditions-{seed}.json"
        if not path.exists():
            path.write_text(json.dumps(study_field(seed)), encoding="utf-8")
            if progress is not None:
                progress("conditions", seed)
        records.append(json.loads(path.read_text(encoding="utf-8")))
    return records


def summarise_fields(records):
    """How often sites are right and in their set, what the changes' intervals hold, and what is said to change."""
    spots = [spot for record in records for spot in record["spots"]]
    both = [spot for spot in spots if "ours" in spot]
    n = np.array([spot["n"] for spot in both])
    result = {
        "boutons": len(both),
        "axons": len(records),
        "not_found_twice": len(spots) - len(both),
        "wrong_matches": sum(record["wrong_matches"] for record in records),
        "snr": float(np.median([spot["snr"] for spot in spots])),
    }
    for who in ("ours", "observer"):
        said = [spot[who] for spot in both]
        found = np.array([one["n"] for one in said])
        q = np.array([one["q"] for one in said]) / np.array([[spot["q"]] for spot in both])
        result[who] = {
            "right": float(np.mean(found == n)),
            "within_one": float(np.mean(np.abs(found - n) <= 1)),
            "in_set": float(np.mean([k in one["n_set"] for k, one in zip(n, said, strict=True)])),
            "unresolved": float(np.mean([len(one["n_set"]) > 1 for one in said])),
            "q_bias": float(q[:, 0].mean() - 1.0),
            "q_bias_se": float(q[:, 0].std() / np.sqrt(len(q))),
            "q_coverage": float(np.mean((q[:, 1] <= 1.0) & (q[:, 2] >= 1.0))),
            "p_changed": float(np.mean([one["p_changed_p"] < 0.05 for one in said])),
            "q_changed": float(np.mean([one["q_changed_p"] < 0.05 for one in said])),
            "changes": {name: _coverage(both, who, name) for name in CHANGES},
        }
    return result


def _coverage(spots, who, name):
    """Share of the intervals of a change that hold the truth, and how many intervals there are."""
    true = np.array([spot["changes"][name] for spot in spots])
    value, lo, hi = np.array([spot[who]["changes"][name] for spot in spots], dtype=float).T
    known = np.isfinite(value)
    return {"coverage": float(np.mean(((lo <= true) & (true <= hi))[known])), "boutons": int(known.sum())}
