"""What one recording says as a whole: the population, the recording's quality, and what to beware of."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np

from ..quanta import binomial_failures, direct_vesicles, poisson_failures, vesicles_from_cv
from .axon_tables import axon_cautions, summarise_axon
from .pulse_intervals import interval_cautions, interval_summary
from .quantal_step import CONFIDENCE
from .trains import train_cautions, train_summary
from .variance_mean import fit_pulses

if TYPE_CHECKING:
    import pandas as pd
    from numpy.typing import NDArray

    from ..quanta import AxonRelease
    from .pipeline import Measured

_COMPRESSED = 0.01
_METHODS_FROM_AXON = "whole axon, this bouton's amplitudes"
_ALONE = "this bouton alone"
_PARABOLA = "variance against mean"


def summarise(measured: Measured) -> dict[str, Any]:
    """Put together the results of the whole axon, JSON-ready; the keys are described in the data dictionary."""
    timing, light, drift = measured.timing, measured.recording.light, measured.drift
    n_frames, height, width = measured.recording.movie.shape
    n_trials, n_pulses = timing.stimulus_s.shape
    found_by = measured.places.found_by
    return {
        "recording": {
            "frames": n_frames,
            "height_px": height,
            "width_px": width,
            "duration_s": n_frames * timing.frame_interval_s,
            "frame_interval_s": timing.frame_interval_s,
            "exposure_s": timing.exposure_s,
            "row_time_s": timing.row_time_s,
            "pixel_size_um": timing.pixel_size_um,
            "trials": n_trials,
            "pulses": n_pulses,
            "pulse_interval_s": _pulse_interval_s(timing.stimulus_s),
            "found_in": dict(timing.found_in),
        },
        "counts": {
            "boutons": len(found_by),
            **{way: found_by.count(way) for way in ("responses", "shape", "both", "file") if way in found_by},
            "expected_false_by_responses": _number(measured.places.expected_false),
        },
        "response_shape": {
            "from": measured.responses.shape_from,
            "latency_s": measured.responses.shape.latency_s,
            "rise_s": measured.responses.shape.rise_s,
            "decay_s": measured.responses.shape.decay_s,
            "slow_fraction": measured.responses.shape.slow_fraction,
            "slow_decay_s": measured.responses.shape.slow_decay_s if measured.responses.shape.slow_fraction else None,
        },
        "population": _population(measured),
        **summarise_axon(measured),
        **_several_pulses(measured),
        "quality": {
            "gain": _number(light.gain),
            "gain_lo": _number(light.gain_lo),
            "gain_hi": _number(light.gain_hi),
            "read_noise_counts": _number(light.read_noise_counts),
            "bleaching": _number(light.bleaching),
            "drift_max_px": float(np.hypot(drift.dy_px, drift.dx_px)[drift.used].max()) if drift.used.any() else None,
            "drift_noise_px": _number(drift.noise_px),
            "frames_left_out": int(np.sum(~drift.used)),
            "saturated_px": int(light.saturated.sum()),
            "dead_px": int(light.dead.sum()),
        },
    }


def _population(measured: Measured) -> dict[str, Any]:
    axon, pairs = measured.release.axon, measured.release.pairs
    known = np.isfinite(axon.p_release[:, 0])
    selected = np.array([way in ("responses", "both") for way in measured.places.found_by], dtype=bool) & known
    p_all, p_selected = _mean_with_interval(axon, known), _mean_with_interval(axon, selected)
    ratios = np.array([np.nan if pair is None else pair.ppr.value for pair in pairs])
    ppr = _population_ratio(measured, known)
    return {
        "boutons": int(known.sum()),
        "selection": _selection_in_words(measured, known),
        "p_release": p_all[0],
        "p_release_lo": p_all[1],
        "p_release_hi": p_all[2],
        "boutons_found_by_responses": int(selected.sum()),
        "p_release_found_by_responses": p_selected[0],
        "p_release_found_by_responses_lo": p_selected[1],
        "p_release_found_by_responses_hi": p_selected[2],
        "q": _number(axon.axon_q) if _any_release(measured) else None,
        "q_lo": _number(axon.axon_q_lo) if _any_release(measured) else None,
        "q_hi": _number(axon.axon_q_hi) if _any_release(measured) else None,
        "q_spread": _number(axon.axon_q_spread) if _any_release(measured) else None,
        "q_cv": _number(axon.q_cv),
        "q_cv_lo": _number(axon.q_cv_lo),
        "q_cv_hi": _number(axon.q_cv_hi),
        "ppr": ppr[0],
        "ppr_lo": ppr[1],
        "ppr_hi": ppr[2],
        "boutons_with_ppr": int(np.isfinite(ratios).sum()),
    }


def _several_pulses(measured: Measured) -> dict[str, Any]:
    """Trains and pulse intervals, where the protocol has them."""
    groups = {"train": train_summary(measured), "pulse_intervals": interval_summary(measured)}
    return {name: content for name, content in groups.items() if content}


def _any_release(measured: Measured) -> bool:
    return bool(np.any(measured.release.axon.silent_probability < 0.5))


def _selection_in_words(measured: Measured, known: NDArray[np.bool_]) -> str:
    found_by = [way for way, there in zip(measured.places.found_by, known, strict=True) if there]
    if not found_by:
        return "no bouton"
    if set(found_by) == {"file"}:
        return f"all {len(found_by)} boutons of the given file"
    by_shape = found_by.count("shape")
    by_response = len(found_by) - by_shape
    if not by_shape:
        return f"{by_response} boutons that were found by their responses: selection raises the mean"
    return f"{by_response} boutons found by their responses and {by_shape} by shape alone, silent ones among them"


def _mean_with_interval(
    axon: AxonRelease, chosen: NDArray[np.bool_]
) -> tuple[float | None, float | None, float | None]:
    """Mean p_release over boutons and its 95 % interval: Student's t; the mean of their limits if all are silent."""
    values = axon.p_release[chosen, 0]
    if values.size == 0:
        return None, None, None
    mean = float(values.mean())
    if np.all(axon.silent_probability[chosen] > 0.5):
        return mean, 0.0, float(axon.p_release_hi[chosen, 0].mean())
    if values.size < 2:
        return mean, None, None
    from scipy.special import stdtrit

    half = float(stdtrit(values.size - 1, 0.5 + CONFIDENCE / 2) * values.std(ddof=1) / np.sqrt(values.size))
    return mean, max(mean - half, 0.0), min(mean + half, 1.0)


def _population_ratio(measured: Measured, known: NDArray[np.bool_]) -> tuple[float | None, float | None, float | None]:
    """Second over first amplitude, summed over boutons: none need be left out. Interval over trials (Fieller 1954)."""
    from ..quanta import fieller_interval

    amplitude = measured.amplitudes.amplitude
    if amplitude.shape[2] < 2 or not known.any():
        return None, None, None
    first = np.nansum(amplitude[known, :, 0], axis=0)
    second = np.nansum(amplitude[known, :, 1], axis=0)
    there = np.isfinite(amplitude[known, :, :2]).all(axis=(0, 2))
    if there.sum() < 3 or first[there].mean() <= 0:
        return None, None, None
    estimate = fieller_interval(second[there], first[there], confidence=CONFIDENCE)
    if not estimate.bounded:
        return None, None, None
    return _number(estimate.ratio), _number(estimate.lo), _number(estimate.hi)


def _pulse_interval_s(stimulus_s: NDArray[np.float64]) -> float | None:
    if stimulus_s.shape[1] < 2:
        return None
    return _number(float(np.nanmedian(stimulus_s[:, 1] - stimulus_s[:, 0])))


def _number(value: float) -> float | None:
    return float(value) if np.isfinite(value) else None


def estimates_table(measured: Measured, *, row: int | None = None) -> pd.DataFrame:
    """Put every estimate of the same quantity side by side, of all boutons, or of that in one row.

    They are those of pulse 1; `q` and `n_sites` of variance against mean rest on all pulses, where there are three.
    """
    import pandas as pd

    axon, calls, fit = measured.release.axon, measured.counts.calls, measured.amplitudes
    rows: list[tuple[int, str, str, float, float, float]] = []
    for b, bouton in enumerate(measured.places.bouton):
        if row not in (None, b):
            continue
        own, corrected = measured.release.own[b], measured.counts.corrected[b]
        n_trials, n_called = int(calls.n_trials[b, 0]), int(calls.n_called[b, 0])

        def add(quantity: str, method: str, value: float, lo: float, hi: float, name: int = int(bouton)) -> None:
            rows.append((name, quantity, method, value, lo, hi))

        add("p_release", _METHODS_FROM_AXON, axon.p_release[b, 0], axon.p_release_lo[b, 0], axon.p_release_hi[b, 0])
        add("p_release", _ALONE, own.p_release.value, own.p_release.lo, own.p_release.hi)
        add("p_release", "counted, corrected", corrected.value, corrected.lo, corrected.hi)
        if n_trials == 0 or not np.isfinite(axon.p_site[b, 0]):
            continue
        table_row = _wilson(n_called, n_trials)
        add("p_release", "counted", n_called / n_trials, *table_row)
        n, p = axon.n_sites[b], axon.p_site[b, 0]
        add("n_sites", _METHODS_FROM_AXON, n, axon.n_sites_lo[b], axon.n_sites_hi[b])
        add("p_site", _METHODS_FROM_AXON, p, axon.p_site_lo[b, 0], axon.p_site_hi[b, 0])
        add("q", _METHODS_FROM_AXON, axon.q[b], axon.q_lo[b], axon.q_hi[b])
        if own.n_set:
            add("n_sites", _ALONE, float(own.n_sites or np.nan), min(own.n_set), max(own.n_set))
        add("p_site", _ALONE, own.p_site.value, own.p_site.lo, own.p_site.hi)
        add("q", _ALONE, own.q.value, own.q.lo, own.q.hi)
        failures = n_trials - n_called
        add("m", _METHODS_FROM_AXON, axon.vesicles[b, 0], axon.vesicles_lo[b, 0], axon.vesicles_hi[b, 0])
        for name, estimate in (
            ("failures, Poisson", poisson_failures(failures, n_trials, confidence=CONFIDENCE)),
            (
                "mean over q",
                direct_vesicles(
                    fit.amplitude[b, :, 0],
                    q=axon.q[b],
                    q_se=(axon.q_hi[b] - axon.q_lo[b]) / 3.92,
                    confidence=CONFIDENCE,
                ),
            ),
            (
                "1/CV²",
                vesicles_from_cv(
                    fit.amplitude[b, :, 0], noise_sd=fit.noise_sd[b], q_cv=axon.q_cv, confidence=CONFIDENCE
                ),
            ),
        ):
            add("m", name, estimate.value, estimate.lo, estimate.hi)
        by_failures = binomial_failures(failures, n_trials, n_sites=int(n), confidence=CONFIDENCE)
        add("p_site", "failures", by_failures.value, by_failures.lo, by_failures.hi)
        parabola = fit_pulses(measured, b)
        if parabola is not None and np.isfinite(parabola.q.value):
            add("q", _PARABOLA, parabola.q.value, parabola.q.lo, parabola.q.hi)
        if parabola is not None and parabola.n_sites is not None:
            add("n_sites", _PARABOLA, parabola.n_sites, parabola.n_sites_lo, parabola.n_sites_hi or np.nan)
    return pd.DataFrame(rows, columns=["bouton", "quantity", "method", "value", "lo", "hi"])


def _wilson(called: int, trials: int) -> tuple[float, float]:
    from ..quanta import wilson_interval

    lo, hi = wilson_interval(called, trials, confidence=CONFIDENCE)
    return float(lo), float(hi)


def cautions_of(measured: Measured) -> tuple[str, ...]:
    """Return the sentences that a reader must see beside the numbers."""
    found_by = measured.places.found_by
    cautions = []
    if not found_by:
        cautions.append("No bouton was found: check the stimulus times, the pixel size and the size of a bouton.")
    elif not _any_release(measured):
        cautions.append("No release was seen: each p_release is an upper limit, for responses of the assumed size.")
    if found_by.count("responses") + found_by.count("both") == len(found_by) and "file" not in found_by and found_by:
        cautions.append(
            "All boutons were found by their responses: silent ones are missing and mean p_release is too high."
        )
    if "shape" in found_by:
        cautions.append("Boutons found by shape alone may be silent boutons, or bright specks that are none.")
    if measured.timing.pixel_size_um is None:
        cautions.append("The pixel size is unknown: 0.16 µm was assumed for the size of a bouton.")
    cautions += axon_cautions(measured)
    cautions += train_cautions(measured) + interval_cautions(measured)
    if measured.responses.shape_from == "assumed":
        cautions.append("The response shape is assumed: too few responses were clear enough to measure it.")
    if not measured.drift.corrected and measured.settings.recording.correct_motion:
        cautions.append("The image has too little structure to follow its movement: none was corrected.")
    if (measured.recording.light.bleaching or 0) > 0.3:
        cautions.append(
            f"{100 * measured.recording.light.bleaching:.0f} % of the light was lost: noise grows over the recording."
        )
    cautions += _compression_cautions(measured)
    cautions += [
        "Reporter saturation compresses large responses and hides multivesicular release.",
        "A reporter's dF/F is not transmitter; n_sites is only as good as q over noise.",
        "For research, not for diagnosis.",
    ]
    return tuple(cautions)


def _compression_cautions(measured: Measured) -> list[str]:
    """Say whether the reporter looks saturated, and what the correction could not do."""
    reporter, pooled = measured.settings.reporter, measured.release.axon_compression
    above = int(measured.above_ceiling.sum())
    if reporter.max_dff is not None:
        if not above:
            return []
        return [f"{above} frames of boutons reach the reporter's ceiling, max_dff = {reporter.max_dff:g}: left out."]
    if not pooled.p < _COMPRESSED:
        return []
    return [
        f"Responses of several vesicles are smaller than their sum (p = {pooled.p:.2g}, {pooled.n_boutons} boutons), "
        f"as where one vesicle takes {100 * pooled.compression:.0f} % of the reporter's range: without max_dff, "
        "q, n_sites and p_site are biased."
    ]
