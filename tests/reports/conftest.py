"""An invented recording with everything a report has to show: bright, silent and unusable boutons, a bad trial."""

from __future__ import annotations

from dataclasses import replace
from types import SimpleNamespace

import numpy as np
import pandas as pd
import pytest

from napari_boutonrelease.analysis.column_types import empty_table
from napari_boutonrelease.analysis.columns import TABLES
from napari_boutonrelease.analysis.results import AnalysisResult
from napari_boutonrelease.analysis.settings import Settings
from napari_boutonrelease.flags import join_flags
from napari_boutonrelease.quanta import wilson_interval
from napari_boutonrelease.reports import write_result
from napari_boutonrelease.response_shape import ResponseShape

INTERVAL_S, TRIAL_S, PIXEL_UM, NOISE_SD = 0.010, 1.0, 0.1, 0.022
SHAPE = ResponseShape(latency_s=0.001, rise_s=0.002, decay_s=0.06)
BRIGHT, SILENT, UNUSABLE = 1, 3, 6  # rows
AXON, ALONE = "whole axon, this bouton's amplitudes", "this bouton alone"


def _wilson(called, trials):
    z, rate = 1.96, called / trials
    middle = (rate + z**2 / (2 * trials)) / (1 + z**2 / trials)
    half = z / (1 + z**2 / trials) * np.sqrt(rate * (1 - rate) / trials + z**2 / (4 * trials**2))
    return rate, max(middle - half, 0.0), min(middle + half, 1.0)


def _frame(table, rows):
    """Rows as dicts, any column left out is empty."""
    if not rows:
        return empty_table(TABLES[table])
    return pd.DataFrame(rows).reindex(columns=TABLES[table].names)


def make_result(*, seed: int = 1, boutons: int = 9, trials: int = 60, pulses: int = 2) -> AnalysisResult:
    """Build an invented but plausible result."""
    rng = np.random.default_rng(seed)
    frames = int(trials * TRIAL_S / INTERVAL_S)
    time_s = np.arange(frames) * INTERVAL_S
    stimulus_s = 0.503 + np.arange(trials)[:, None] * TRIAL_S + 0.05 * np.arange(pulses)
    height, width = 96, 256
    x_px = np.linspace(18, width - 20, boutons) + rng.uniform(-4, 4, boutons)
    y_px = 48 + 22 * np.sin(x_px / 45) + rng.normal(0, 1, boutons)
    steps = np.hypot(np.diff(x_px), np.diff(y_px)) * PIXEL_UM
    axon_um = np.concatenate([[1.2], 1.2 + np.cumsum(steps)]) if boutons else np.empty(0)

    n_sites = rng.integers(1, 4, boutons)
    p_site = rng.uniform(0.12, 0.5, boutons)
    q = rng.lognormal(np.log(0.12), 0.15, boutons)
    f0_start = rng.uniform(60, 140, boutons)
    for rows, column, value in ((BRIGHT, p_site, 0.7), (BRIGHT, f0_start, 420.0), (SILENT, p_site, 0.0)):
        column[rows : rows + 1] = value
    p_pulse = np.clip(p_site[:, None] * (1 + 0.35 * np.arange(pulses)) * np.where(p_site > 0.6, 0.8, 1)[:, None], 0, 1)
    p_pulse[:, :1] = p_site[:, None]
    vesicles = rng.binomial(n_sites[:, None, None], p_pulse[:, None, :], (boutons, trials, pulses))
    truth = (
        vesicles
        * q[:, None, None]
        * np.maximum(1 + 0.3 * rng.normal(size=vesicles.shape) / np.sqrt(np.maximum(vesicles, 1)), 0.1)
    )
    amplitude = truth + rng.normal(0, NOISE_SD, truth.shape)
    null = rng.normal(0, NOISE_SD, (boutons, 3 * trials))

    f0 = f0_start[:, None] * np.exp(-time_s / (trials * TRIAL_S * 4))
    dff = rng.normal(0, 1.4 * NOISE_SD, (boutons, frames))
    for trial in range(trials):
        start, stop = trial * 100 + 40, min((trial + 1) * 100, frames)
        for pulse in range(pulses):
            course = SHAPE.frame_average(time_s[start:stop] - stimulus_s[trial, pulse], exposure_s=INTERVAL_S)
            dff[:, start:stop] += truth[:, trial, pulse, None] * course
    f = f0 * (1 + dff)
    bad_trial = min(16, trials - 1)
    bad_frames = slice(bad_trial * 100 + 40, bad_trial * 100 + 55)
    for array in (f, f0, dff):
        array[:, bad_frames] = np.nan
    if boutons > UNUSABLE:
        dff[UNUSABLE] = f0[UNUSABLE] = amplitude[UNUSABLE] = null[UNUSABLE] = np.nan

    responses, bouton_rows, pulse_rows, estimates, spontaneous = [], [], [], [], []
    threshold = 2.5 * NOISE_SD
    for b in range(boutons):
        usable = not np.isnan(amplitude[b]).all()
        used = np.arange(trials) != bad_trial if trials > 1 else np.array([True])
        for trial in range(trials):
            for pulse in range(pulses):
                a = amplitude[b, trial, pulse]
                good = usable and bool(used[trial])
                responses.append(
                    {
                        "bouton": b + 1,
                        "trial": trial + 1,
                        "pulse": pulse + 1,
                        "stimulus_s": stimulus_s[trial, pulse],
                        "amplitude": a if good else np.nan,
                        "amplitude_se": NOISE_SD if good else np.nan,
                        "called": int(a > threshold) if good else None,
                        "p_released": 1 / (1 + np.exp(-(a - 0.06) / 0.01)) if good else np.nan,
                        "used": int(good),
                        "reason": None if good else ("frames left out: focus jump" if usable else "no usable F0"),
                    }
                )
        row = {
            "bouton": b + 1,
            "y_px": y_px[b],
            "x_px": x_px[b],
            "y_um": y_px[b] * PIXEL_UM,
            "x_um": x_px[b] * PIXEL_UM,
            "axon_um": axon_um[b],
            "axon_offset_um": abs(rng.normal(0, 0.1)),
            "footprint_px": 29,
            "found_by": ("both", "responses", "both", "shape", "both", "hand", "shape", "responses", "file")[b % 9],
            "trials": int(used.sum()),
            "flags": None,
        }
        if not usable:
            bouton_rows.append(row | {"f0": 1.3, "trials": 0, "flags": join_flags(["f0_unusable", "edge"])})
            continue
        for pulse in range(pulses):
            a = amplitude[b, used, pulse]
            called = int((a > threshold).sum())
            rate, low, high = _wilson(called, len(a))
            pulse_rows.append(
                {
                    "bouton": b + 1,
                    "pulse": pulse + 1,
                    "trials": len(a),
                    "called": called,
                    "p_called": rate,
                    "p_called_lo": low,
                    "p_called_hi": high,
                    "p_release": rate,
                    "p_release_lo": low,
                    "p_release_hi": high,
                    "amplitude_mean": a.mean(),
                    "amplitude_se": a.std() / np.sqrt(len(a)),
                    "amplitude_sd": a.std(),
                    "potency": a[a > threshold].mean() if called else np.nan,
                }
            )
        first = pulse_rows[-pulses]
        rate, low, high = first["p_called"], first["p_called_lo"], first["p_called_hi"]
        silent = p_site[b] == 0
        row |= {
            "f0": f0_start[b],
            "noise_sd": NOISE_SD * rng.uniform(0.9, 1.1),
            "noise_from": "gaps",
            "snr": q[b] / NOISE_SD,
            "threshold": threshold,
            **{name: first[name] for name in ("p_called", "p_called_lo", "p_called_hi")},
            "false_calls_expected": 0.006 * trials,
            "p_release": 0.004 if silent else rate,
            "p_release_shrunk": 0.85 * rate + 0.06,
            "p_release_shrunk_lo": max(0.85 * rate - 0.03, 0.0),
            "p_release_shrunk_hi": min(0.85 * rate + 0.18, 1.0),
            "p_release_lo": 0.0 if silent else low,
            "p_release_hi": high,
            **{name: first[name] for name in ("amplitude_mean", "amplitude_se", "potency")},
            "n_sites": np.nan if silent else n_sites[b],
            "n_sites_lo": np.nan if silent else max(1, n_sites[b] - 1),
            "n_sites_hi": np.nan if silent else n_sites[b] + 1,
            "p_site": 0.004 if silent else p_site[b],
            "p_site_lo": 0.8 * p_site[b],
            "p_site_hi": min(1.25 * p_site[b] + 0.05, 1.0),
            "q": q[b],
            "q_lo": 0.88 * q[b],
            "q_hi": 1.12 * q[b],
            "q_from": "axon" if silent else "own",
            "q_cv": 0.3,
            "quantal_model": "none" if silent else "binomial",
            "fit_p": 0.02 + 0.9 * rng.random(),
            "spontaneous_per_min": 0.4,
            "crosstalk": 0.02,
            "p_corrected": max(rate - 0.006, 0.0),
            "p_corrected_lo": max(low - 0.006, 0.0),
            "p_corrected_hi": high,
            "noise_photon_limit_sd": NOISE_SD * 0.8,
            "noise_excess": 1.25,
            "noise_n": 200.0,
            "n_set": None if silent else ";".join(str(n) for n in range(max(1, n_sites[b] - 1), n_sites[b] + 2)),
            "q_own": np.nan if silent else q[b] * 1.04,
            "p_release_own": rate,
            "flags": join_flags(
                ["silent"]
                if silent
                else ["n_unresolved", "crosstalk", "rundown"]
                if b == 4
                else ["edge"]
                if b == 0
                else []
            )
            or None,
        }
        if pulses > 1:
            ratio = 1.0 if silent else pulse_rows[-pulses + 1]["amplitude_mean"] / first["amplitude_mean"]
            row |= {
                "p2_release": pulse_rows[-pulses + 1]["p_release"],
                "ppr": np.nan if silent else ratio,
                "ppr_lo": np.nan if silent else 0.8 * ratio,
                "ppr_hi": np.nan if silent else 1.24 * ratio,
                "ppf": np.nan if silent else ratio - 1,
                "ppr_release": np.nan if silent else ratio * 0.97,
                "paired_pulse": None
                if silent
                else "facilitation"
                if 0.8 * ratio > 1
                else "depression"
                if 1.24 * ratio < 1
                else "unresolved",
                "p2_given_release": np.nan if silent else 0.9 * rate,
                "p2_given_failure": np.nan if silent else min(1.1 * rate, 1),
                "history_p": np.nan if silent else rng.random(),
            }
        bouton_rows.append(row)
        m = -np.log(max(1 - rate, 1e-3))
        for quantity, method, value, spread in (
            ("p_release", AXON, row["p_release"], 0.25),
            ("p_release", ALONE, rate, 0.3),
            ("p_release", "counted, corrected", row["p_corrected"], 0.3),
            ("p_release", "counted", rate, 0.3),
            ("n_sites", AXON, row["n_sites"], 0.4),
            ("p_site", AXON, p_site[b], 0.25),
            ("q", AXON, q[b], 0.12),
            ("q", ALONE, 1.04 * q[b], 0.2),
            ("m", AXON, n_sites[b] * p_site[b], np.nan),
            ("m", "failures, Poisson", m, 0.3),
            ("m", "mean over q", m * 1.02, 0.3),
            ("m", "1/CV²", m * 1.1, 1e16 if b == 1 else 0.5),
            ("p_site", "failures", p_site[b] * 0.97, 0.3),
        ):
            low, high = value * (1 - min(spread, 0.9)), value * (1 + spread)
            high = min(high, 1.0) if quantity.startswith("p_") else high
            estimates.append(
                {"bouton": b + 1, "quantity": quantity, "method": method, "value": value, "lo": low, "hi": high}
            )
        if not silent:
            spontaneous.append(
                {
                    "bouton": b + 1,
                    "time_s": 0.2 + b,
                    "amplitude": q[b],
                    "amplitude_se": NOISE_SD,
                    "score": q[b] / NOISE_SD,
                }
            )

    drift = pd.DataFrame(
        {
            "frame": np.arange(frames),
            "time_s": time_s,
            "dy_px": np.cumsum(rng.normal(0, 0.02, frames)),
            "dx_px": 0.4 * np.sin(time_s / 9) + np.cumsum(rng.normal(0, 0.01, frames)),
            "match": np.clip(0.93 + rng.normal(0, 0.01, frames), 0, 1),
            "used": 1,
        }
    )
    drift.loc[bad_frames.start : bad_frames.stop - 1, ["match", "used"]] = [0.31, 0]
    drift["used"] = drift["used"].astype(int)

    rows, columns = np.mgrid[:height, :width]
    image = 100 + 14 * np.exp(-((rows - 48 - 22 * np.sin(columns / 45)) ** 2) / 8) + rng.normal(0, 0.8, (height, width))
    evidence = rng.gamma(1.0, 1.5, (height, width))
    for b in range(boutons):
        spot = np.exp(-((rows - y_px[b]) ** 2 + (columns - x_px[b]) ** 2) / (2 * 2.6**2))
        image += 0.25 * f0_start[b] * spot
        evidence += 400 * p_site[b] * spot
    return AnalysisResult(
        name="axon_07",
        boutons=_frame("boutons", bouton_rows),
        pulses=_frame("pulses", pulse_rows),
        responses=_frame("responses", responses),
        spontaneous=_frame("spontaneous", spontaneous),
        drift=drift,
        trials=_frame("trials", _trials(responses, stimulus_s, rng)),
        co_release=_frame("co_release", _pairs(bouton_rows, rng)),
        detection=empty_table(TABLES["detection"]),
        trains=empty_table(TABLES["trains"]),
        intervals=empty_table(TABLES["intervals"]),
        recovery=empty_table(TABLES["recovery"]),
        estimates=pd.DataFrame(estimates, columns=["bouton", "quantity", "method", "value", "lo", "hi"]),
        summary=_summary(frames, height, width, trials, pulses, bouton_rows) if boutons else {},
        provenance={
            "created": "2026-03-02T10:15:00Z",
            "format": 1,
            "settings": Settings().model_dump(),
            "movie": {"path": "axon_07.tif", "bytes": 294912000, "sha256": "0" * 64},
            "versions": {"napari-boutonrelease": "0.1.0", "numpy": "2.1.0", "scipy": "1.14.0"},
        },
        cautions=(
            "1 of 60 trials was left out: the focus jumped.",
            "The pixel size comes from the protocol and differs from the file's (0.11 µm).",
        )
        if boutons
        else ("No bouton was found.",),
        settings=Settings(),
        time_s=time_s,
        f=f,
        f0=f0,
        dff=dff,
        stimulus_s=stimulus_s,
        null_amplitude=null,
        mean_image=image,
        evidence=evidence,
        evidence_cut=22.0,
        footprints=make_footprints(y_px, x_px, (height, width)),
        shape=SHAPE,
        shape_from="recording",
    )


def _trials(responses, stimulus_s, rng):
    rows = []
    for (trial, pulse), time_s in np.ndenumerate(stimulus_s):
        inside = [row for row in responses if (row["trial"], row["pulse"]) == (trial + 1, pulse + 1) and row["used"]]
        known = bool(inside)
        rows.append(
            {
                "trial": trial + 1,
                "pulse": pulse + 1,
                "stimulus_s": time_s,
                "boutons": len(inside),
                "released": sum(row["p_released"] for row in inside) if known else np.nan,
                "released_expected": 0.4 * len(inside) if known else np.nan,
                "stimulus_failure_p": (0.97 if trial == 20 and pulse == 0 else 0.01 * rng.random())
                if known
                else np.nan,
                "used": int(known),
                "reason": None if known else "no bouton measured",
            }
        )
    return rows


def _pairs(bouton_rows, rng):
    measured = [row for row in bouton_rows if "p_release" in row]
    return [
        {
            "bouton": one["bouton"],
            "other_bouton": other["bouton"],
            "correlation": float(np.clip(rng.normal(0, 0.15), -1, 1)),
            "p": p,
            "p_adjusted": min(1.0, 4 * p),
            "together": 10.0,
            "together_expected": 9.0,
            "distance_um": other["axon_um"] - one["axon_um"],
        }
        for i, one in enumerate(measured)
        for other in measured[i + 1 :]
        for p in [rng.random()]
    ]


def make_footprints(y_px, x_px, shape):
    """Stand-in for the footprints: discs, and patches that reach over the border where a bouton is near it."""
    label = np.zeros(shape, dtype=int)
    rows, columns = np.mgrid[: shape[0], : shape[1]]
    corners = [(round(y) - 6, round(x) - 6) for y, x in zip(y_px, x_px, strict=True)]
    for number, (y, x) in enumerate(zip(y_px, x_px, strict=True), start=1):
        label[(rows - y) ** 2 + (columns - x) ** 2 < 3.1**2] = number
    patch = np.exp(-(np.add.outer(np.arange(-6, 7) ** 2, np.arange(-6, 7) ** 2)) / 12.0) - 0.02
    return SimpleNamespace(
        label=label,
        weights=tuple(patch * (1 + 0.01 * i) for i in range(len(corners))),
        y0=np.array([y for y, _ in corners], dtype=int),
        x0=np.array([x for _, x in corners], dtype=int),
        y_px=np.asarray(y_px),
        x_px=np.asarray(x_px),
    )


def _summary(frames, height, width, trials, pulses, bouton_rows):
    measured = np.array([row["p_release"] for row in bouton_rows if "p_release" in row])
    error = measured.std() / np.sqrt(len(measured)) if len(measured) else np.nan
    return {
        "recording": {
            "frames": frames,
            "height_px": height,
            "width_px": width,
            "duration_s": frames * INTERVAL_S,
            "frame_interval_s": INTERVAL_S,
            "exposure_s": INTERVAL_S,
            "row_time_s": 0.0,
            "pixel_size_um": PIXEL_UM,
            "trials": trials,
            "pulses": pulses,
            "pulse_interval_s": 0.05 if pulses > 1 else None,
        },
        "population": {
            "boutons": len(measured),
            "selection": "all boutons with a usable baseline, however found",
            "p_release": measured.mean(),
            "p_release_lo": measured.mean() - 1.96 * error,
            "p_release_hi": measured.mean() + 1.96 * error,
            "boutons_found_by_responses": len(measured) - 1,
            "p_release_found_by_responses": 1.1 * measured.mean(),
            "p_release_found_by_responses_lo": 1.1 * measured.mean() - 1.96 * error,
            "p_release_found_by_responses_hi": 1.1 * measured.mean() + 1.96 * error,
            "q": 0.121,
            "q_lo": 0.112,
            "q_hi": 0.131,
            "ppr": 1.18 if pulses > 1 else np.nan,
            "ppr_lo": 1.02,
            "ppr_hi": 1.36,
        },
        "heterogeneity": {"boutons": len(measured), "sd": 0.21, "sd_lo": 0.13, "sd_hi": 0.36, "p": 2e-7},
        "morans_i": {"value": -0.12, "expected": -0.14, "p": 0.41, "weighting": "binary"},
        "p_release_against_distance": {
            "slope_per_um": -0.004,
            "slope_per_um_lo": -0.012,
            "slope_per_um_hi": 0.004,
            "at_start": 0.5,
            "rank_correlation": -0.21,
            "p": 0.61,
        },
        "co_release": {
            "value": 0.02,
            "independent_lo": -0.04,
            "independent_hi": 0.04,
            "p": 0.37,
            "pairs": 28,
            "pairs_together": 1,
        },
        "stimulus_failures": {
            "trials": 2,
            "expected": 1.4,
            "p": 0.41,
            "share": 0.011,
            "share_lo": 0.0,
            "share_hi": 0.05,
            "suspected": 1,
            "excluded": False,
        },
        "quality": {
            "gain": 2.1,
            "read_noise_counts": 3.4,
            "bleaching": 0.22,
            "drift_max_px": 1.1,
            "frames_left_out": 15,
            "saturated_px": 0,
        },
    }


@pytest.fixture(scope="session")
def result() -> AnalysisResult:
    return make_result()


@pytest.fixture(scope="session")
def small_result() -> AnalysisResult:
    """Few boutons and trials, quick to draw."""
    return make_result(seed=2, boutons=2, trials=8)


@pytest.fixture(scope="session")
def selected_result() -> AnalysisResult:
    """Simulated boutons were planted: which ones would have been missed."""
    full = make_result(seed=6, boutons=5, trials=10)
    p = np.array([0.005, 0.01, 0.02, 0.045, 0.1, 0.2, 0.45, 1.0])
    found = np.array([2, 7, 20, 90, 170, 195, 200, 200])
    low, high = wilson_interval(found, np.full(p.size, 200), confidence=0.95)
    rows = {
        "p_release": p,
        "planted": 200,
        "found": found,
        "found_share": found / 200,
        "found_share_lo": low,
        "found_share_hi": high,
        "found_share_fit": found / 200,
    }
    selection = {
        "p_found_half": 0.05,
        "p_found_most": 0.18,
        "smallest_p_release": 0.02,
        "boutons": 4,
        "p_release_found": 0.41,
        "p_release": 0.33,
        "p_release_lo": 0.2,
        "p_release_hi": 0.5,
        "missed_per_found": 0.4,
        "missed_per_found_lo": 0.1,
        "missed_per_found_hi": 1.2,
        "method": "weights 1/D over beta-distributed p_release",
    }
    return replace(full, detection=pd.DataFrame(rows), summary={**full.summary, "selection": selection})


@pytest.fixture(scope="session")
def train_result() -> AnalysisResult:
    """Trains of six pulses at two intervals; the last bouton says nothing."""
    full = make_result(seed=8, boutons=3, trials=10, pulses=6)
    amplitude = np.array([1.0, 0.7, 0.5, 0.42, 0.4, 0.4])
    limits = {"": 1.0, "_lo": 0.8, "_hi": 1.3}

    def with_limits(**numbers):
        return {name + end: value * factor for name, value in numbers.items() for end, factor in limits.items()}

    known = {"pool": 0.4, "pool_vesicles": 3.5, "u": 0.3, "tau_rec_s": 0.4, "tau_facil_s": 0.1, "resources": 0.6}
    trains = [
        {"bouton": b, "pulses": 6, "interval_s": 0.05, "trials": 9, "steady_p": 0.4, "model_p": 0.5, "note": note}
        | (with_limits(**known) if b < 3 else {})
        for b, note in ((1, None), (2, "tau_rec_s has no upper limit"), (3, "no pool: first response within noise"))
    ]
    trains[1] |= {"u_hi": np.inf, "tau_rec_s": np.nan, "tau_rec_s_hi": np.inf}
    intervals = [
        {"bouton": b, "interval_s": gap, "trials": 5, "first_mean": 0.1, "second_mean": 0.1 * ratio}
        | (with_limits(ppr=ratio) if b < 3 else {})
        for b in (1, 2, 3)
        for gap, ratio in ((0.05, 0.5), (0.12, 0.7), (0.4, 0.95))
    ]
    recovery = [
        {"bouton": 1, "intervals": 3, "model": "depression", "constant_p": 0.01, "model_p": 0.6}
        | with_limits(depression=0.6, depression_s=0.2),
        {"bouton": 2, "intervals": 3, "model": "constant", "constant_p": 0.3, "model_p": 0.3, "note": "no time course"},
        {"bouton": 3, "intervals": 0, "model": "none", "note": "the first response is within noise of zero"},
    ]
    ratios = np.array([0.5, 0.7, 0.95])
    summary = {
        "train": {
            "pulses": 6,
            "trials": 9,
            "late_pulses": 4,
            "pulse_s": (0.05 * np.arange(6)).tolist(),
            "amplitude": amplitude.tolist(),
            "amplitude_lo": (0.8 * amplitude).tolist(),
            "amplitude_hi": (1.2 * amplitude).tolist(),
            "cumulative": np.cumsum(amplitude).tolist(),
            "cumulative_se": np.full(6, 0.05).tolist(),
            "note": "late responses are 41 % of the first",
            **with_limits(steady_ratio=0.41, pool=1.36, replenished=0.41, u=0.4, tau_rec_s=0.3, resources=2.5),
            "tau_facil_s": None,
        },
        "pulse_intervals": {
            "interval_s": [0.05, 0.12, 0.4],
            "ppr": ratios.tolist(),
            "ppr_lo": (0.7 * ratios).tolist(),
            "ppr_hi": [0.8, 1.1, None],
            "model": "depression",
            **with_limits(depression=0.6, depression_s=0.2),
        },
    }
    return replace(
        full,
        trains=_frame("trains", trains),
        intervals=_frame("intervals", intervals),
        recovery=_frame("recovery", recovery),
        summary={**full.summary, **summary},
    )


@pytest.fixture(scope="session")
def empty_result() -> AnalysisResult:
    """No bouton at all, and nothing known about the recording."""
    return make_result(seed=3, boutons=0, trials=3)


@pytest.fixture(scope="session")
def quiet_result() -> AnalysisResult:
    """Boutons of which none releases."""
    full = make_result(seed=5, boutons=3, trials=12)
    nothing = ["ppr", "ppr_lo", "ppr_hi", "ppf", "n_sites", "n_sites_lo", "n_sites_hi", "potency"]
    limits = {"p_release": 0.0, "p_release_lo": 0.0, "p_release_hi": [0.08, 0.11, 0.2], "flags": "silent"}
    boutons = full.boutons.assign(**dict.fromkeys(nothing, np.nan), **limits, n_set=None, found_by="shape")
    population = {"boutons": 3, "selection": "3 by shape alone", "p_release": 0.0, "p_release_lo": 0.0}
    summary = {**full.summary, "population": population}
    return replace(full, boutons=boutons, summary=summary)


@pytest.fixture(scope="session")
def blank_result() -> AnalysisResult:
    """Boutons of which nothing could be measured."""
    full = make_result(seed=4, boutons=3, trials=4)
    kept = ["bouton", "y_px", "x_px", "found_by"]
    boutons = full.boutons[kept].assign(flags="f0_unusable").reindex(columns=full.boutons.columns)
    responses = full.responses.assign(amplitude=np.nan, amplitude_se=np.nan, called=None, p_released=np.nan, used=0)
    nothing = np.full_like(full.dff, np.nan)
    return replace(
        full,
        boutons=boutons,
        responses=responses,
        pulses=empty_table(TABLES["pulses"]),
        estimates=full.estimates.iloc[:0],
        spontaneous=empty_table(TABLES["spontaneous"]),
        summary={},
        f=nothing,
        f0=nothing,
        dff=nothing,
        null_amplitude=np.full_like(full.null_amplitude, np.nan),
        evidence_cut=np.nan,
        mean_image=np.full_like(full.mean_image, np.nan),
        evidence=np.full_like(full.evidence, np.nan),
    )


@pytest.fixture(scope="session")
def written(small_result, tmp_path_factory):
    """A folder with everything of the small result; tests only read it."""
    return write_result(small_result, tmp_path_factory.mktemp("written") / "axon_07.release", overwrite=False)
