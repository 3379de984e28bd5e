"""Simulate a recording, analyse it, let the ideal observer look at it, and keep what both say beside the truth."""

from __future__ import annotations

import json
import time

import numpy as np
from observer import observe, p_release_if_all_else_known, released_if_all_known

from napari_boutonrelease.analysis.pipeline import Pipeline
from napari_boutonrelease.analysis.settings import PairSettings, QuantalSettings, Settings
from napari_boutonrelease.analysis.tables import bouton_flags
from napari_boutonrelease.quanta.whole_axon.pooled import fit_axon_release
from napari_boutonrelease.recording import movie_from_array
from napari_boutonrelease.simulation import preset_recipe, simulate_recording

MATCH_UM = 0.5

# The goodness of fit is not looked at here, and it costs time; everything else as for any recording.
SETTINGS = Settings(quanta=QuantalSettings(bootstrap=0), pairs=PairSettings(bootstrap=1000))

SCENARIOS = {
    "fast-pair": ("fast-pair", {"trials": 80, "n_boutons": 12, "width_px": 264, "p_release": (0.1, 0.9)}),
    "dim": ("dim", {"trials": 80, "n_boutons": 12, "width_px": 264, "p_release": (0.1, 0.9)}),
    "crowded": ("crowded", {"trials": 80, "n_boutons": 12, "width_px": 112, "p_release": (0.1, 0.9)}),
    "crowded-silent": (
        "crowded",
        {"trials": 80, "n_boutons": 12, "width_px": 112, "p_release": (0.2, 0.9), "silent_boutons": 4},
    ),
    "silent": ("silent", {"spontaneous_per_s": 0.0}),
    "mixed": (
        "fast-pair",
        {"trials": 80, "n_boutons": 12, "width_px": 264, "p_release": (0.1, 0.9), "silent_boutons": 4},
    ),
    "seldom": ("fast-single", {"trials": 80, "n_boutons": 12, "width_px": 264, "p_release": (0.02, 0.15)}),
    "slow-decay": (
        "fast-pair",
        {
            "trials": 80,
            "n_boutons": 12,
            "width_px": 264,
            "p_release": (0.1, 0.9),
            "slow_fraction": 0.2,
            "slow_decay_s": 0.4,
            "facilitation": 0.0,
            "recovery_s": 0.0,
        },
    ),
    "equal-25ms": (
        "fast-pair",
        {
            "trials": 80,
            "n_boutons": 12,
            "width_px": 264,
            "p_release": (0.1, 0.9),
            "decay_s": 0.1,
            "pulse_interval_s": 0.025,
            "facilitation": 0.0,
            "recovery_s": 0.0,
        },
    ),
}


def scenario_recipe(name, **changes):
    """The recipe of a scenario, with settings changed by name."""
    preset, own = SCENARIOS[name]
    return preset_recipe(preset, **{**own, **changes})


def study(recipe, *, seed, settings=SETTINGS, keep=None):
    """Run one recording; return numbers, lists and texts that JSON can hold.

    `keep`, a dict, receives the simulation and everything measured.
    """
    started = time.time()
    simulation = simulate_recording(recipe, rng=np.random.default_rng(seed))
    movie = movie_from_array(
        simulation.frames, frame_interval_s=recipe.frame_interval_s, pixel_size_um=recipe.pixel_size_um
    )
    simulated = time.time()
    measured = Pipeline(movie, simulation.protocol).measure(settings)
    analysed = time.time()
    # Where nothing ever releases there is nothing to observe.
    observed = observe(simulation, movie) if np.any(simulation.truth.p_site > 0) else None
    record = compare(simulation, measured, observed, settings=settings)
    record["seconds"] = [simulated - started, analysed - simulated, time.time() - analysed]
    record["seed"] = seed
    if keep is not None:
        keep.update(simulation=simulation, movie=movie, measured=measured, observed=observed)
    return record


def compare(simulation, measured, observed, *, settings=SETTINGS):
    """Set estimates of the analysis and of the observer beside the truth."""
    truth = simulation.truth
    recipe = truth.recipe
    row_of, stray = match(truth, measured)
    release, calls, fit = measured.release, measured.counts.calls, measured.amplitudes
    flags = bouton_flags(measured)
    ideal = None if observed is None else _infer(observed.fit, settings)
    spots = []
    for index, kind in enumerate(truth.kind):
        one = {
            "kind": kind,
            "p": truth.p_release_by_pulse[index],
            "n": int(truth.n_sites[index]),
            "q": float(truth.q_dff[index]),
            "ppr": float(truth.ppr[index]),
            "f0": float(recipe.gain * truth.f0_photons[index] * truth.light.mean()),
            "nearest_um": _nearest_um(truth, index),
        }
        if observed is not None and ideal is not None and kind != "speck":
            b = int(np.flatnonzero(observed.spots == index)[0])
            one["observer"] = _of_bouton(
                truth,
                index,
                fit=observed.fit,
                axon=ideal,
                b=b,
                sd=observed.limit_sd[b],
                pair=_pair_of(observed.fit, b, settings),
            )
            one["limit_sd"] = observed.limit_sd[b]
        if index in row_of:
            row = row_of[index]
            places = measured.places.footprints
            one["found_by"] = measured.places.found_by[row]
            one["error_um"] = [
                (places.y_px[row] - truth.y_px[index]) * recipe.pixel_size_um,
                (places.x_px[row] - truth.x_px[index]) * recipe.pixel_size_um,
            ]
            one["flags"] = flags[row]
            one["f0_found"] = float(np.nanmean(measured.responses.baseline.f0[row]))
            one["silent_probability"] = float(release.axon.silent_probability[row])
            one["evidence"] = release.axon.release_evidence[row]
            one["called"] = int(calls.n_called[row, 0])
            one["false_calls_expected"] = float(calls.false_calls_expected[row, 0])
            one["verdict"] = release.verdicts[row]
            one["ours"] = _of_bouton(truth, index, fit=fit, axon=release.axon, b=row, sd=None, pair=release.pairs[row])
        spots.append(plain(one))
    drift = measured.drift
    dy, dx = drift.dy_px - truth.dy_px, drift.dx_px - truth.dx_px
    shape = measured.responses.shape
    return {
        "spots": spots,
        "stray": plain(stray),
        "found": len(measured.places.bouton),
        "drift_rms_px": [float(np.std(dy[drift.used])), float(np.std(dx[drift.used]))],
        "shape": [shape.latency_s, shape.rise_s, shape.decay_s, shape.slow_fraction, shape.slow_decay_s],
        "sigma_px": float(measured.places.footprints.spot_sigma_px),
        "axon": [_of_axon(release.axon), None if ideal is None else _of_axon(ideal)],
    }


def match(truth, measured):
    """Pair found boutons with the spots of the truth, nearest first; what remains is stray."""
    places = measured.places.footprints
    # The reference is the mean of the frames as they were aligned; the truth counts from mean drift.
    used = measured.drift.used
    shift_y = float(np.mean(truth.dy_px[used] - measured.drift.dy_px[used]))
    shift_x = float(np.mean(truth.dx_px[used] - measured.drift.dx_px[used]))
    distance = np.hypot(
        places.y_px[:, None] - (truth.y_px + shift_y)[None, :], places.x_px[:, None] - (truth.x_px + shift_x)[None, :]
    )
    distance = distance * truth.recipe.pixel_size_um
    row_of = {}
    free = np.ones(len(places.y_px), dtype=bool)
    for flat in np.argsort(distance, axis=None):
        row, spot = np.unravel_index(flat, distance.shape)
        if distance[row, spot] > MATCH_UM:
            break
        if free[row] and int(spot) not in row_of:
            row_of[int(spot)] = int(row)
            free[row] = False
    axon = measured.release.axon
    stray = [
        {
            "found_by": measured.places.found_by[row],
            "nearest_um": float(distance[row].min()) if distance.shape[1] else np.nan,
            "silent_probability": float(axon.silent_probability[row]),
            "p_lo": float(axon.p_release_lo[row, 0]),
            "p": float(axon.p_release[row, 0]),
        }
        for row in np.flatnonzero(free)
    ]
    return row_of, stray


def _infer(fit, settings):
    """Release of the axon from amplitudes, as the analysis infers it."""
    return fit_axon_release(
        fit.amplitude,
        fit.amplitude_se,
        n_null=np.isfinite(fit.null_amplitude).sum(axis=1),
        n_max=settings.quanta.n_max,
        q_cv=settings.quanta.q_cv,
        q_cv_doubt=settings.quanta.q_cv_doubt,
    )


def _of_axon(axon):
    return plain({name: getattr(axon, name) for name in ("axon_q", "axon_q_lo", "axon_q_hi", "q_cv", "axon_q_spread")})


def _of_bouton(truth, index, *, fit, axon, b, sd, pair):
    """Estimates of one bouton beside what was true of it."""
    amplitude, true = fit.amplitude[b], truth.amplitude_dff[index]
    vesicles = truth.vesicles[index]
    known = np.isfinite(amplitude)
    scale = _scale(amplitude, true)
    one = {
        "scale": scale,
        "noise_sd": float(fit.noise_sd[b]),
        "p": axon.p_release[b],
        "p_lo": axon.p_release_lo[b],
        "p_hi": axon.p_release_hi[b],
        "n": int(axon.n_sites[b]),
        "n_set": list(axon.n_set[b]),
        "q": float(axon.q[b]),
        "q_lo": float(axon.q_lo[b]),
        "q_hi": float(axon.q_hi[b]),
        "silent_probability": float(axon.silent_probability[b]),
        "wrong_calls": np.sum((axon.p_released[b] > 0.5) != (vesicles > 0), axis=0, where=known),
        "calls": known.sum(axis=0),
        "amplitude": amplitude,
        "se": fit.amplitude_se[b],
        "n_null": int(np.isfinite(fit.null_amplitude[b]).sum()),
        "true_amplitude": true,
        "vesicles": vesicles,
    }
    if pair is not None:
        one["ppr"] = [pair.ppr.value, pair.ppr.lo, pair.ppr.hi]
    if sd is not None and truth.p_site[index] > 0:
        p_pulse = truth.p_release_by_pulse[index]
        n, q, cv = int(truth.n_sites[index]), float(truth.q_dff[index]), float(truth.q_cv[index])
        noise = np.broadcast_to(sd, amplitude.shape)
        one["p_if_known"] = [
            p_release_if_all_else_known(amplitude[:, j], noise[:, j], n_sites=n, q=q, q_cv=cv)
            for j in range(p_pulse.size)
        ]
        posterior = [
            released_if_all_known(amplitude[:, j], noise[:, j], n_sites=n, p_site=1 - (1 - p) ** (1 / n), q=q, q_cv=cv)
            for j, p in enumerate(p_pulse)
        ]
        one["wrong_calls_if_known"] = np.sum((np.column_stack(posterior) > 0.5) != (vesicles > 0), axis=0, where=known)
    return one


def _pair_of(fit, b, settings):
    from napari_boutonrelease.quanta import measure_pulse_pair

    if fit.amplitude.shape[2] < 2 or not np.isfinite(fit.noise_sd[b]):
        return None
    return measure_pulse_pair(
        fit.amplitude[b, :, 0],
        fit.amplitude[b, :, 1],
        noise_sd=fit.noise_sd[b],
        confidence=0.95,
        n_bootstrap=settings.pairs.bootstrap,
        rng=np.random.default_rng(b),
    )


def _scale(amplitude, true):
    """Factor between estimated and true amplitudes of a bouton: what an error of its F0 does."""
    known = np.isfinite(amplitude) & np.isfinite(true)
    total = np.sum(true[known] ** 2)
    return float(np.sum(amplitude[known] * true[known]) / total) if total > 0 else 1.0


def _nearest_um(truth, index):
    apart = np.hypot(truth.y_um - truth.y_um[index], truth.x_um - truth.x_um[index])
    apart[index] = np.inf
    return float(apart.min())


def plain(value):
    """Turn arrays into lists that JSON can hold, five digits kept."""
    if isinstance(value, dict):
        return {key: plain(entry) for key, entry in value.items()}
    if isinstance(value, list | tuple):
        return [plain(entry) for entry in value]
    if isinstance(value, np.ndarray):
        return plain(value.tolist())
    if isinstance(value, np.generic):
        value = value.item()
    return float(f"{value:.5g}") if isinstance(value, float) else value


def studied(name, *, seeds, folder, progress=None, **changes):
    """Records of a scenario; those that the folder holds as `scenario-seed.json` are not made again."""
    records = []
    for seed in seeds:
        path = folder / f"{name}-{seed}.json"
        if not path.exists():
            record = study(scenario_recipe(name, **changes), seed=seed)
            path.write_text(json.dumps(record), encoding="utf-8")
            if progress is not None:
                progress(name, seed)
        records.append(json.loads(path.read_text(encoding="utf-8")))
    return records
