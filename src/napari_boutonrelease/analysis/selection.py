"""Which boutons the detection would have missed in this very recording, and the mean p_release corrected for it.

Boutons of known p_release are planted in the noise of the recording and looked for with the cut that was used. It takes
no part in finding or measuring boutons, so that it is done once, when results are put together, and no window waits.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from ..boutons import PlantedBoutons, plant_boutons
from ..quanta import (
    DetectionCurve,
    Estimate,
    SelectionCorrection,
    correct_for_detection,
    fit_detection_curve,
    saturate,
    wilson_interval,
)
from .columns import TABLES
from .quantal_step import CONFIDENCE
from .response_maps import seen_through

if TYPE_CHECKING:
    import pandas as pd
    from numpy.typing import NDArray

    from ..boutons import QuietPlaces
    from .pipeline import Measured

P_RELEASE = (0.005, 0.01, 0.015, 0.02, 0.03, 0.045, 0.07, 0.1, 0.15, 0.2, 0.3, 0.45, 0.7, 1.0)
_LEAST_SHARE = 0.1
_HALF, _MOST = 0.5, 0.95
_DRAWS = 100
_FEWEST_PLACES = 5


@dataclass(frozen=True, slots=True, kw_only=True)
class Selection:
    """How the boutons found by their responses were selected.

    Attributes
    ----------
    curve : DetectionCurve or None
        Share found against p_release; None where it was not measured.
    planted : int
        Boutons planted at each p_release.
    found : (n_p,) ndarray of int
        How many of them were found.
    correction : SelectionCorrection or None
        The mean corrected for it.
    why_not : str
        Why there is none of this; empty where there is.
    """

    curve: DetectionCurve | None
    planted: int
    found: NDArray[np.int64]
    correction: SelectionCorrection | None
    why_not: str


def measure_selection(measured: Measured) -> Selection:
    """Plant boutons like those found in the recording's own noise, and correct the mean p_release for those missed."""
    places, chosen = measured.places, measured.settings.selection
    quiet = places.quiet
    if chosen.planted == 0:
        return _nothing("left out by the settings")
    if "file" in places.found_by:
        return _nothing("the boutons were given")
    if quiet is None or not np.isfinite(quiet.cut):
        return _nothing("no bouton was looked for by its responses")
    selected = np.array([way in ("responses", "both") for way in places.found_by], dtype=np.bool_)
    models = _models(measured, selected)
    if not models.size:
        return _nothing("no bouton was found by its responses, so there is none to simulate")
    if len(quiet.y_px) < _FEWEST_PLACES:
        return _nothing("found boutons leave no room for simulated ones")
    rng = np.random.default_rng([measured.settings.seed, 3])
    found = plant_boutons(
        quiet,
        _like_found(measured, models, quiet, selected=selected),
        p_release=P_RELEASE,
        n_planted=chosen.planted,
        rng=rng,
    )
    planted = np.full(len(P_RELEASE), chosen.planted)
    curve = fit_detection_curve(P_RELEASE, found, planted, n_draws=_DRAWS, rng=rng)
    axon = measured.release.axon
    correction = correct_for_detection(
        axon.p_release_mass[selected, 0],
        axon.p_release_grid,
        real=1.0 - axon.silent_probability[selected],
        curve=curve,
        least_share=_LEAST_SHARE,
        confidence=CONFIDENCE,
    )
    return Selection(curve=curve, planted=chosen.planted, found=found, correction=correction, why_not="")


def _nothing(why: str) -> Selection:
    return Selection(curve=None, planted=0, found=np.empty(0, dtype=np.int64), correction=None, why_not=why)


def _models(measured: Measured, selected: NDArray[np.bool_]) -> NDArray[np.intp]:
    """Boutons that simulated ones are to be like: found by their responses, and measured."""
    axon, baseline = measured.release.axon, measured.responses.baseline
    measurable = np.isfinite(axon.q) & (axon.q > 0) & np.isfinite(axon.p_release[:, 0]) & baseline.usable
    clipped = np.array(["saturated" in flags for flags in measured.places.footprints.flags], dtype=np.bool_)
    return np.flatnonzero(selected & measurable & ~clipped & (axon.silent_probability < 0.5))


def _like_found(
    measured: Measured, models: NDArray[np.intp], quiet: QuietPlaces, *, selected: NDArray[np.bool_]
) -> PlantedBoutons:
    """Take brightness, vesicles, sites and the course over pulses and time from boutons that were found."""
    axon, timing, reporter = measured.release.axon, measured.timing, measured.settings.reporter
    baseline, optics = measured.responses.baseline, measured.recording.optics
    stimulus_s = timing.stimulus_s[quiet.evoked_trial, quiet.evoked_pulse]
    frame = np.clip(np.searchsorted(timing.frame_start_s, stimulus_s), 0, len(timing.frame_start_s) - 1)
    f0 = baseline.f0[models][:, frame]
    first = axon.p_release[models, 0].sum()
    ratio = np.nansum(axon.p_release[models], axis=0) / first if first > 0 else np.ones(axon.p_release.shape[1])
    gain, light_share = seen_through(measured.recording, looked_for=quiet.shape, true=measured.responses.shape)
    seen = np.isfinite(quiet.pixel_variance)
    resampled = float(np.median(quiet.pixel_variance[seen] / optics.variance_image[seen])) if seen.any() else 1.0
    light = measured.recording.light.gain

    def shown(dff: NDArray[np.float64]) -> NDArray[np.float64]:
        if reporter.max_dff is None:
            return dff
        return saturate(dff, max_dff=reporter.max_dff, hill=reporter.hill, rest_share=reporter.rest_share)

    return PlantedBoutons(
        n_sites=axon.n_sites[models],
        q=axon.q[models],
        f0_counts=f0.mean(axis=1),
        q_cv=axon.q_cv,
        pulse_ratio=np.where(np.isfinite(ratio), ratio, 1.0),
        brightness=np.mean(f0 / f0.mean(axis=1, keepdims=True), axis=0),
        shown=shown,
        gain=gain,
        spot_sigma_px=measured.places.spot_sigma_px,
        variance_per_count=light * resampled if np.isfinite(light) else 0.0,
        light_share=light_share,
        spot_share=float(np.mean([way == "both" for way in np.array(measured.places.found_by)[selected]])),
    )


def detection_table(selection: Selection) -> pd.DataFrame:
    """Return a row a release probability; none where no bouton was planted."""
    import pandas as pd

    from .column_types import empty_table

    definition = TABLES["detection"]
    if selection.curve is None:
        return empty_table(definition)
    lo, hi = wilson_interval(selection.found, np.full(len(P_RELEASE), selection.planted), confidence=CONFIDENCE)
    rows = {
        "p_release": P_RELEASE,
        "planted": selection.planted,
        "found": selection.found,
        "found_share": selection.found / selection.planted,
        "found_share_lo": lo,
        "found_share_hi": hi,
        "found_share_fit": selection.curve.share,
    }
    return pd.DataFrame(rows).reindex(columns=list(definition.names))


def selection_summary(selection: Selection) -> dict[str, Any]:
    """Put together what was found of the selection, JSON-ready; the keys are described in the data dictionary."""
    if selection.curve is None or selection.correction is None:
        return {"method": f"none: {selection.why_not}"}
    correction = selection.correction
    return {
        **_limits("p_found_half", selection.curve.smallest(_HALF, confidence=CONFIDENCE)),
        **_limits("p_found_most", selection.curve.smallest(_MOST, confidence=CONFIDENCE)),
        "smallest_p_release": _number(correction.smallest),
        "boutons": correction.n_boutons,
        "p_release_found": _number(correction.mean_found),
        **_limits("p_release", correction.mean),
        **_limits("missed_per_found", correction.missed_per_found),
        "method": correction.mean.method,
    }


def selection_cautions(selection: Selection) -> list[str]:
    """Say which boutons the detection cannot have found."""
    if selection.curve is None or selection.correction is None:
        return []
    smallest = selection.correction.smallest
    if not np.isfinite(smallest):
        return ["Even boutons that always release would mostly have been missed: those found are a selection."]
    return [
        f"Boutons with p_release below {smallest:.2g} are hardly ever found by their responses in this recording, and "
        "silent ones never: no mean here includes them unless they were found by shape."
    ]


def _limits(name: str, estimate: Estimate) -> dict[str, float | None]:
    return {
        name: _number(estimate.value),
        f"{name}_lo": _number(estimate.lo),
        f"{name}_hi": _number(estimate.hi),
    }


def _number(value: float) -> float | None:
    return float(value) if np.isfinite(value) else None
