"""From the records of simulated recordings to the numbers that say how good the analysis is."""

from __future__ import annotations

import numpy as np

from napari_boutonrelease.responses.noise import robust_sd

BY_RESPONSES = ("responses", "both")
CLEAR_SNR, CLEAR_P = 3.0, 0.1


def releasing(records, *, near_um=None):
    """Boutons that release and whose release was estimated, perhaps only those with a neighbour so near."""
    return [
        spot
        for spot in _spots(records, "releasing")
        if _measured(spot) and (near_um is None or near_um[0] <= spot["nearest_um"] <= near_um[1])
    ]


def detection(records):
    """Recall, false discoveries, positions, and what became of spots that never release."""
    all_releasing = _spots(records, "releasing")
    clear = [spot for spot in all_releasing if _is_clear(spot)]
    never = _spots(records, "silent") + _spots(records, "speck")
    stray = [one for record in records for one in record["stray"]]
    by_responses = [spot for spot in all_releasing if spot.get("found_by") in BY_RESPONSES]
    wrong = [spot for spot in never if spot.get("found_by") in BY_RESPONSES]
    wrong += [one for one in stray if one["found_by"] in BY_RESPONSES]
    error = np.array([spot["error_um"] for spot in clear if "error_um" in spot]).reshape(-1, 2)
    drift = np.array([record["drift_rms_px"] for record in records])
    never_found = [spot for spot in never if "ours" in spot]
    return {
        "movies": len(records),
        "clear": len(clear),
        "recall": _share(sum("ours" in spot for spot in clear), len(clear)),
        "releasing": len(all_releasing),
        "recall_all": _share(sum("ours" in spot for spot in all_releasing), len(all_releasing)),
        "false_by_responses": len(wrong),
        "false_share": _share(len(wrong), len(wrong) + len(by_responses)),
        "movies_with_false": sum(_has_false(record) for record in records),
        "stray": len(stray),
        "position_rms_um": float(np.sqrt(np.mean(np.sum(error**2, axis=1)))) if len(error) else np.nan,
        "never": len(never_found),
        "never_called_releasing": sum(not _said_silent(spot) for spot in never_found),
        "releasing_called_silent": sum(_said_silent(spot) for spot in clear if "ours" in spot),
        "drift_rms_px": float(np.sqrt(np.mean(drift**2))),
    }


def amplitudes(boutons):
    """Errors of amplitudes against the Cramér-Rao limit, and whether the stated noise is the true one.

    The scale of each bouton's amplitudes, which an error of its F0 changes, is taken out first.
    """
    result = {
        "boutons": len(boutons),
        "snr": float(np.median([spot["q"] / spot["limit_sd"][0] for spot in boutons])),
    }
    for who in ("ours", "observer"):
        spread = {"error_over_limit": [], "failure_over_limit": [], "failure_over_stated": []}
        for spot in boutons:
            one = spot[who]
            amplitude, true, se = (np.array(one[key], dtype=float) for key in ("amplitude", "true_amplitude", "se"))
            known, failed = np.isfinite(amplitude), np.array(one["vesicles"]) == 0
            error = amplitude - one["scale"] * true
            relative = error / (one["scale"] * np.array(spot["limit_sd"]))
            spread["error_over_limit"].append(robust_sd(relative[known]))
            spread["failure_over_limit"].append(robust_sd(relative[known & failed]))
            spread["failure_over_stated"].append(robust_sd((error / se)[known & failed]))
        scale = _each(boutons, who, "scale")
        result[who] = {name: _rms(values) for name, values in spread.items()}
        result[who] |= {"scale": float(np.mean(scale)), "scale_sd": float(np.std(scale))}
    return result


def release(boutons, *, pulse=None):
    """Bias, error and coverage of p_release, relative to the observer who knows everything but p_release."""
    columns = slice(None) if pulse is None else slice(pulse, pulse + 1)
    true = np.array([spot["p"] for spot in boutons])[:, columns]
    ours = _each(boutons, "ours", "p")[:, columns]
    lo, hi = _each(boutons, "ours", "p_lo")[:, columns], _each(boutons, "ours", "p_hi")[:, columns]
    known = _each(boutons, "observer", "p_if_known")[:, columns]
    same = _each(boutons, "observer", "p")[:, columns]
    error = ours - true
    return {
        "values": error.size,
        "bias": float(error.mean()),
        "bias_se": float(error.std() / np.sqrt(error.size)),
        "bias_known": float(np.mean(known - true)),
        "rms": _rms(error),
        "rms_same": _rms(same - true),
        "rms_known": _rms(known - true),
        "ratio": _rms(error) / _rms(known - true),
        "ratio_interval": _ratio_interval(error, known - true),
        "coverage": float(np.mean((lo <= true) & (true <= hi))),
        "coverage_se": float(np.sqrt(0.95 * 0.05 / error.size)),
    }


def calls(boutons):
    """Share of pulses that were taken for the wrong thing, ours and the observer's."""
    total = {who: sum(np.sum(spot[who]["calls"]) for spot in boutons) for who in ("ours", "observer")}
    wrong = {who: sum(np.sum(spot[who]["wrong_calls"]) for spot in boutons) for who in total}
    known = sum(np.sum(spot["observer"]["wrong_calls_if_known"]) for spot in boutons)
    return {
        "ours": float(wrong["ours"] / total["ours"]),
        "observer": float(wrong["observer"] / total["observer"]),
        "known": float(known / total["observer"]),
    }


def sites(boutons):
    """How often the number of sites is right, and in its set."""
    true = np.array([spot["n"] for spot in boutons])
    result = {"boutons": len(boutons)}
    for who in ("ours", "observer"):
        held = [n in spot[who]["n_set"] for n, spot in zip(true, boutons, strict=True)]
        result[who] = {
            "right": float(np.mean(_each(boutons, who, "n") == true)),
            "in_set": float(np.mean(held)),
            "unresolved": float(np.mean([len(spot[who]["n_set"]) > 1 for spot in boutons])),
        }
    return result


def pulse_pairs(boutons):
    """Bias and coverage of the paired-pulse ratio."""
    result = {}
    for who in ("ours", "observer"):
        value, lo, hi = np.array([spot[who]["ppr"] for spot in boutons], dtype=float).T
        true = np.array([spot["ppr"] for spot in boutons])
        first, second = (
            np.array([np.nansum(np.array(spot[who]["amplitude"], dtype=float)[:, j]) for spot in boutons])
            for j in (0, 1)
        )
        known = np.isfinite(value)
        error = value[known] - true[known]
        result[who] = {
            "boutons": int(known.sum()),
            "undefined": int(np.sum(~known)),
            "bias": float(error.mean()),
            "bias_se": float(error.std() / np.sqrt(error.size)),
            "coverage": float(np.mean((lo <= true)[known] & (true <= hi)[known])),
            "pooled": float(second.sum() / first.sum()),
            "pooled_true": float(
                sum(np.nansum(np.array(spot[who]["true_amplitude"], dtype=float)[:, 1]) for spot in boutons)
                / sum(np.nansum(np.array(spot[who]["true_amplitude"], dtype=float)[:, 0]) for spot in boutons)
            ),
        }
    verdicts = [spot["verdict"] for spot in boutons]
    result["verdicts"] = {name: verdicts.count(name) for name in sorted(set(verdicts))}
    return result


def _spots(records, kind):
    return [spot for record in records for spot in record["spots"] if spot["kind"] == kind]


def _measured(spot):
    return "ours" in spot and bool(np.all(np.isfinite(spot["ours"]["p"])))


def _is_clear(spot):
    return spot["q"] / spot["limit_sd"][0] >= CLEAR_SNR and spot["p"][0] >= CLEAR_P


def _said_silent(spot):
    return "silent" in spot["flags"] or spot["ours"]["p_lo"][0] == 0


def _has_false(record):
    named = [spot for spot in record["spots"] if spot["kind"] != "releasing"] + record["stray"]
    return any(one.get("found_by") in BY_RESPONSES for one in named)


def _each(boutons, who, key):
    return np.array([spot[who][key] for spot in boutons], dtype=float)


def _share(part, whole):
    return part / whole if whole else np.nan


def _rms(values):
    return float(np.sqrt(np.nanmean(np.square(values))))


def _ratio_interval(error, ideal):
    """95 % interval of the ratio of two root mean squares, by resampling boutons."""
    rng = np.random.default_rng(1)
    picks = rng.integers(0, len(error), (2000, len(error)))
    of_error, of_ideal = (np.sum(np.square(values), axis=1) for values in (error, ideal))
    ratio = np.sqrt(of_error[picks].sum(axis=1) / of_ideal[picks].sum(axis=1))
    return [float(value) for value in np.quantile(ratio, [0.025, 0.975])]
