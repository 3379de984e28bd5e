"""The tables of one analysis, column by column as the data dictionary has them."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np

from ..boutons import crosstalk_matrix
from ..flags import join_flags
from ..quanta import wilson_interval
from ..responses import measure_rundown
from .axon_step import SUSPECTED
from .columns import TABLES
from .quantal_step import CONFIDENCE

if TYPE_CHECKING:
    import pandas as pd
    from numpy.typing import NDArray

    from .pipeline import Measured

_FEW_TRIALS = 20
_LOW_SIGNAL = 2.0
_POOR_FIT = 0.01
_RUNDOWN = 0.01
_CROSSTALK = 0.1
_COMPRESSED = 0.01
_OWN_SHARE = 0.5


def _frame(name: str, rows: dict[str, Any]) -> pd.DataFrame:
    import pandas as pd

    table = TABLES[name]
    frame = pd.DataFrame(rows)
    return frame.reindex(columns=list(table.names))


def bouton_table(measured: Measured) -> pd.DataFrame:
    """Return a row a bouton."""
    places, histories = measured.places, measured.counts.histories
    fit, axon, calls = measured.amplitudes, measured.release.axon, measured.counts.calls
    footprints = places.footprints
    scale = measured.timing.pixel_size_um
    n = len(places.bouton)
    first_release = fit.amplitude[:, :, 0] if n else np.empty((0, 1))
    limit = photon_limit_sd(measured)
    lo, hi = wilson_interval(calls.n_called[:, 0], calls.n_trials[:, 0], confidence=CONFIDENCE)
    with np.errstate(invalid="ignore", divide="ignore"):
        p_called = calls.n_called[:, 0] / calls.n_trials[:, 0]
        snr = axon.q / fit.noise_sd
        p2 = axon.p_release[:, 1] if axon.p_release.shape[1] > 1 else np.full(n, np.nan)
        ppr_release = np.where(axon.p_release[:, 0] > 0, p2 / axon.p_release[:, 0], np.nan)
        excess = fit.noise_sd / limit
    known = np.isfinite(axon.p_release[:, 0])
    releases = known & (axon.silent_probability < 0.5)
    pairs = measured.release.pairs
    mean, se = _mean_and_se(first_release)
    shared = crosstalk(measured)
    return _frame(
        "boutons",
        {
            "bouton": places.bouton,
            "y_px": footprints.y_px,
            "x_px": footprints.x_px,
            "y_um": footprints.y_px * scale if scale else np.full(n, np.nan),
            "x_um": footprints.x_px * scale if scale else np.full(n, np.nan),
            "axon_um": np.maximum(places.axon_um, 0.0),
            "axon_offset_um": np.abs(places.axon_offset_um),
            "footprint_px": footprints.footprint_px,
            "found_by": list(places.found_by),
            "f0": _finite_mean(measured.responses.baseline.f0),
            "noise_sd": fit.noise_sd,
            "noise_from": list(fit.noise_from),
            "noise_n": fit.n_null_effective,
            "snr": snr,
            "threshold": calls.threshold,
            "trials": calls.n_trials[:, 0],
            "p_called": p_called,
            "p_called_lo": lo,
            "p_called_hi": hi,
            "false_calls_expected": np.where(known, calls.false_calls_expected[:, 0], np.nan),
            "p_release": axon.p_release[:, 0],
            "p_release_lo": axon.p_release_lo[:, 0],
            "p_release_hi": axon.p_release_hi[:, 0],
            "amplitude_mean": mean,
            "amplitude_se": se,
            "potency": _potency(fit.amplitude, axon.p_released)[:, 0],
            "p2_release": p2,
            "ppr": [np.nan if pair is None else pair.ppr.value for pair in pairs],
            "ppr_lo": [np.nan if pair is None else pair.ppr.lo for pair in pairs],
            "ppr_hi": [np.nan if pair is None else pair.ppr.hi for pair in pairs],
            "ppf": [np.nan if pair is None else pair.ppf for pair in pairs],
            "ppr_release": ppr_release,
            "paired_pulse": list(measured.release.verdicts),
            "p2_given_release": [
                np.nan if one is None else one.after_release.value for one in measured.counts.histories
            ],
            "p2_given_failure": [
                np.nan if one is None else one.after_failure.value for one in measured.counts.histories
            ],
            "history_p": [np.nan if one is None else one.history_p for one in histories],
            "n_sites": np.where(releases, axon.n_sites, np.nan),
            "n_sites_lo": np.where(releases, axon.n_sites_lo, np.nan),
            "n_sites_hi": np.where(releases, axon.n_sites_hi, np.nan),
            "p_site": np.where(releases, axon.p_site[:, 0], np.nan),
            "p_site_lo": np.where(releases, axon.p_site_lo[:, 0], np.nan),
            "p_site_hi": np.where(known, axon.p_site_hi[:, 0], np.nan),
            "q": axon.q,
            "q_lo": axon.q_lo,
            "q_hi": axon.q_hi,
            "q_from": _choice(known, np.where(axon.q_own > _OWN_SHARE, "own", "axon")),
            "q_cv": np.where(known, axon.q_cv, np.nan),
            "quantal_model": np.where(known, "binomial", "none"),
            "fit_p": [one.fit_p for one in measured.release.own],
            "spontaneous_per_min": measured.spontaneous.per_min,
            "crosstalk": shared,
            "p_corrected": [one.value for one in measured.counts.corrected],
            "p_corrected_lo": [one.lo for one in measured.counts.corrected],
            "p_corrected_hi": [one.hi for one in measured.counts.corrected],
            "noise_photon_limit_sd": limit,
            "noise_excess": excess,
            "n_set": _choice(releases, np.array([";".join(map(str, members)) for members in axon.n_set], dtype=object)),
            "q_own": [one.q.value for one in measured.release.own],
            "p_release_own": [one.p_release.value for one in measured.release.own],
            "p_release_shrunk": measured.axon_statistics.heterogeneity.shrunken,
            "p_release_shrunk_lo": measured.axon_statistics.heterogeneity.shrunken_lo,
            "p_release_shrunk_hi": measured.axon_statistics.heterogeneity.shrunken_hi,
            "flags": _flags(measured, shared),
        },
    )


def pulse_table(measured: Measured) -> pd.DataFrame:
    """Return a row a bouton and pulse."""
    fit, axon, calls = measured.amplitudes, measured.release.axon, measured.counts.calls
    n, _, n_pulses = fit.amplitude.shape
    lo, hi = wilson_interval(calls.n_called, calls.n_trials, confidence=CONFIDENCE)
    statistics = [_mean_and_se(fit.amplitude[:, :, j]) for j in range(n_pulses)]
    cumulative = np.cumsum(fit.amplitude, axis=2)
    summed = [_mean_and_se(cumulative[:, :, j]) for j in range(n_pulses)]
    with np.errstate(invalid="ignore", divide="ignore"):
        p_called = calls.n_called / calls.n_trials
    spread = np.array([_sd(fit.amplitude[:, :, j]) for j in range(n_pulses)]).reshape(n_pulses, n).T
    return _frame(
        "pulses",
        {
            "bouton": np.repeat(measured.places.bouton, n_pulses),
            "pulse": np.tile(np.arange(1, n_pulses + 1), n),
            "trials": calls.n_trials.ravel(),
            "called": calls.n_called.ravel(),
            "p_called": p_called.ravel(),
            "p_called_lo": np.asarray(lo).ravel(),
            "p_called_hi": np.asarray(hi).ravel(),
            "p_release": axon.p_release.ravel(),
            "p_release_lo": axon.p_release_lo.ravel(),
            "p_release_hi": axon.p_release_hi.ravel(),
            "amplitude_mean": np.array([mean for mean, _ in statistics]).reshape(n_pulses, n).T.ravel(),
            "amplitude_se": np.array([se for _, se in statistics]).reshape(n_pulses, n).T.ravel(),
            "amplitude_sd": spread.ravel(),
            "potency": _potency(fit.amplitude, axon.p_released).ravel(),
            "cumulative_mean": np.array([mean for mean, _ in summed]).reshape(n_pulses, n).T.ravel(),
            "cumulative_se": np.array([se for _, se in summed]).reshape(n_pulses, n).T.ravel(),
        },
    )


def response_table(measured: Measured) -> pd.DataFrame:
    """Return a row a bouton, trial and pulse of the protocol."""
    fit = measured.amplitudes
    stimulus = np.broadcast_to(measured.timing.stimulus_s, fit.amplitude.shape)
    bouton, trial, pulse = np.nonzero(np.isfinite(stimulus))
    at = (bouton, trial, pulse)
    # Excluded trials keep their amplitude, so that a reader sees what was left out.
    amplitude = measured.responses.amplitudes.amplitude[at]
    used = np.isfinite(fit.amplitude[at])
    reason = np.where(measured.responses.baseline.usable[bouton], "frames missing", "f0 unusable").astype(object)
    if measured.failed.excluded:
        reason[measured.failed.suspected[trial, pulse]] = SUSPECTED
    for excluded, why in measured.edits.excluded:
        reason[trial == excluded - 1] = why
    return _frame(
        "responses",
        {
            "bouton": measured.places.bouton[bouton],
            "trial": trial + 1,
            "pulse": pulse + 1,
            "stimulus_s": stimulus[at],
            "amplitude": amplitude,
            "amplitude_se": fit.amplitude_se[at],
            "called": measured.counts.calls.called[at],
            "p_released": measured.release.axon.p_released[at],
            "used": used.astype(np.int64),
            "reason": np.where(used, "", reason),
        },
    )


def spontaneous_table(measured: Measured) -> pd.DataFrame:
    """Return a row a release without stimulus."""
    found = measured.spontaneous
    return _frame(
        "spontaneous",
        {
            "bouton": measured.places.bouton[found.bouton],
            "time_s": found.time_s,
            "amplitude": found.amplitude,
            "amplitude_se": found.amplitude_se,
            "score": found.score,
        },
    )


def drift_table(measured: Measured) -> pd.DataFrame:
    """Return a row a frame."""
    drift = measured.drift
    return _frame(
        "drift",
        {
            "frame": np.arange(len(drift.used)),
            "time_s": measured.timing.frame_start_s,
            "dy_px": drift.dy_px,
            "dx_px": drift.dx_px,
            "match": drift.match,
            "used": drift.used.astype(np.int64),
        },
    )


def photon_limit_sd(measured: Measured) -> NDArray[np.float64]:
    """Return the noise_sd that photon and read noise alone would give each bouton, dF/F."""
    fit, baseline = measured.amplitudes, measured.responses.baseline
    variance = measured.recording.optics.variance_image
    limit = np.full(len(measured.places.bouton), np.nan)
    footprints = measured.places.footprints
    patches = zip(footprints.y0, footprints.x0, footprints.weights, strict=True)
    for b, (y0, x0, weights) in enumerate(patches):
        height, width = weights.shape
        pixels = variance[y0 : y0 + height, x0 : x0 + width]
        frame_sd = float(np.sqrt(np.sum(weights**2 * pixels)))
        known = fit.frame_sd[b][np.isfinite(fit.frame_sd[b])]
        measured_sd = np.median(known) * np.nanmean(baseline.f0[b]) if baseline.usable[b] and known.size else np.nan
        if measured_sd > 0 and fit.noise_ratio[b] > 0:
            limit[b] = fit.noise_sd[b] / fit.noise_ratio[b] * frame_sd / measured_sd
    return limit


def crosstalk(measured: Measured) -> NDArray[np.float64]:
    """Return the share of each bouton's mean amplitude that its neighbours would give it, were they not separated."""
    fit = measured.amplitudes
    mean, _ = _mean_and_se(fit.amplitude_counts[:, :, 0]) if len(measured.places.bouton) else (np.empty(0), None)
    response = np.maximum(np.nan_to_num(mean), 0.0)
    leak = crosstalk_matrix(measured.places.footprints)
    np.fill_diagonal(leak, 0.0)
    from_others = np.maximum(leak, 0.0) @ response
    with np.errstate(invalid="ignore", divide="ignore"):
        return np.asarray(np.where(response + from_others > 0, from_others / (response + from_others), 0.0))


def bouton_flags(measured: Measured) -> list[str]:
    """Say why to doubt each bouton."""
    return _flags(measured, crosstalk(measured))


def _flags(measured: Measured, shared: NDArray[np.float64]) -> list[str]:
    fit, axon = measured.amplitudes, measured.release.axon
    usable = measured.responses.baseline.usable
    rundown = measure_rundown(fit.amplitude, called=measured.counts.calls.called)
    all_silent = bool(np.all(axon.silent_probability > 0.5)) if len(shared) else False
    flags = []
    for b, found in enumerate(measured.places.footprints.flags):
        codes = set(found)
        if not usable[b]:
            codes.add("f0_unusable")
        if measured.counts.calls.n_trials[b, 0] < _FEW_TRIALS:
            codes.add("few_trials")
        if axon.q[b] < _LOW_SIGNAL * fit.noise_sd[b]:
            codes.add("low_signal")
        if axon.silent_probability[b] > 0.5:
            codes.add("silent")
        elif len(axon.n_set[b]) > 1 and np.isfinite(axon.p_release[b, 0]):
            codes.add("n_unresolved")
        if all_silent:
            codes.add("q_assumed")
        if measured.release.own[b].fit_p < _POOR_FIT:
            codes.add("poor_fit")
        if measured.release.compression[b].p < _COMPRESSED:
            codes.add("compressed")
        if shared[b] > _CROSSTALK:
            codes.add("crosstalk")
        if rundown.release_p[b] < _RUNDOWN or rundown.amplitude_p[b] < _RUNDOWN:
            codes.add("rundown")
        pair = measured.release.pairs[b]
        if pair is not None:
            codes |= pair.flags
        if fit.noise_from[b] == "residuals":
            codes.add("noise_from_residuals")
        if measured.responses.shape_from == "assumed":
            codes.add("shape_assumed")
        if measured.release.own[b].n_spontaneous > 0.05 * max(measured.release.own[b].n_null, 1):
            codes.add("spontaneous_in_noise")
        flags.append(join_flags(codes))
    return flags


def _mean_and_se(amplitude: NDArray[np.float64]) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    count = np.isfinite(amplitude).sum(axis=1)
    mean = _finite_mean(amplitude)
    with np.errstate(invalid="ignore", divide="ignore"):
        return mean, _sd(amplitude) / np.sqrt(np.where(count > 1, count, np.nan))


def _finite_mean(values: NDArray[np.float64]) -> NDArray[np.float64]:
    known = np.isfinite(values)
    count = known.sum(axis=1)
    with np.errstate(invalid="ignore", divide="ignore"):
        return np.asarray(np.where(known, values, 0.0).sum(axis=1) / np.where(count > 0, count, np.nan))


def _sd(amplitude: NDArray[np.float64]) -> NDArray[np.float64]:
    known = np.isfinite(amplitude)
    count = known.sum(axis=1)
    from_mean = np.where(known, amplitude - _finite_mean(amplitude)[:, None], 0.0)
    with np.errstate(invalid="ignore", divide="ignore"):
        return np.asarray(np.sqrt(np.sum(from_mean**2, axis=1) / np.where(count > 1, count - 1, np.nan)))


def _potency(amplitude: NDArray[np.float64], p_released: NDArray[np.float64]) -> NDArray[np.float64]:
    """Mean amplitude of the pulses that released, each weighted by the probability that it did.

    Picking the called ones instead would pick large noise with them.
    """
    known = np.isfinite(amplitude) & np.isfinite(p_released)
    weight = np.where(known, p_released, 0.0)
    total = weight.sum(axis=1)
    with np.errstate(invalid="ignore", divide="ignore"):
        mean = np.sum(weight * np.where(known, amplitude, 0.0), axis=1) / total
    return np.where(total >= 1.0, mean, np.nan)


def _choice(known: NDArray[np.bool_], values: NDArray[Any]) -> list[Any]:
    return [value if there else None for there, value in zip(known, values, strict=True)]
