"""What a comparison says of all boutons together."""

from __future__ import annotations

from itertools import combinations
from typing import TYPE_CHECKING, Any

import numpy as np

from ..analysis.quantal_step import CONFIDENCE
from ..quanta import Estimate, measure_paired_change

if TYPE_CHECKING:
    from collections.abc import Sequence

    import pandas as pd

    from .matching import Matches
    from .recording import ComparedRecording

_PERMUTATIONS = 20_000
_FALSE_DISCOVERIES = 0.05
_PLAINLY_ALIKE = 0.7  # correlation of two images of one field


def summarise(
    recordings: Sequence[ComparedRecording],
    matches: Matches,
    *,
    joint: pd.DataFrame,
    changes: pd.DataFrame,
    rng: np.random.Generator,
) -> dict[str, Any]:
    """Put together the results of all boutons, JSON-ready."""
    return {
        "recordings": [
            {
                "name": recording.name,
                "source": recording.source,
                "boutons": len(recording.bouton),
                "matched": int(np.sum(matches.row[:, k] >= 0)),
                "shift_y_px": _number(matches.shift_px[k, 0]),
                "shift_x_px": _number(matches.shift_px[k, 1]),
                "likeness": _number(matches.likeness[k]),
            }
            for k, recording in enumerate(recordings)
        ],
        "boutons_in_all": int(np.sum((matches.row >= 0).all(axis=1))),
        "n_resolved": int(np.sum(joint["n_sites"].notna() & (joint["n_sites_lo"] == joint["n_sites_hi"]))),
        "pairs": [
            _pair(changes, recordings[a].name, recordings[b].name, rng)
            for a, b in combinations(range(len(recordings)), 2)
        ],
    }


def cautions_of(summary: dict[str, Any], *, joint: pd.DataFrame) -> tuple[str, ...]:
    """Return the sentences that a reader must see beside the numbers."""
    cautions = []
    unlike = [
        one["name"]
        for one in summary["recordings"][1:]
        if one["likeness"] is not None and (one["likeness"] < _PLAINLY_ALIKE or 2 * one["matched"] < one["boutons"])
    ]
    if unlike:
        cautions.append(
            f"The image of {', '.join(unlike)} is little like the first, or few boutons were found again: look at the "
            "matches before anything else."
        )
    lost = [one["name"] for one in summary["recordings"][1:] if one["matched"] < summary["recordings"][0]["boutons"]]
    if lost:
        cautions.append(
            f"Some boutons were not found again in {', '.join(lost)}: if those are the silent ones, the mean change is "
            "that of a selection. Analyse all recordings at the same positions (--boutons) to avoid it."
        )
    if any(pair["p_release_change_n"] < 6 for pair in summary["pairs"]):
        cautions.append(
            "With fewer than six boutons the test over boutons cannot reach p = 0.05, whatever the change: quote each "
            "bouton's own interval."
        )
    if (joint["changed"] == "both").any() or (joint["changed"] == "q").any():
        cautions.append(
            "Where q changed, a common q and number of sites were not assumed; a change of the reporter's state or of "
            "F0 looks like one of q."
        )
    return (
        *cautions,
        "1/CV² against mean holds if sites are alike and the reporter is linear.",
        "Boutons of one axon are no independent experiments: a p over boutons says nothing of other axons.",
        "For research, not for diagnosis.",
    )


def _pair(changes: pd.DataFrame, a: str, b: str, rng: np.random.Generator) -> dict[str, Any]:
    rows = changes[(changes["recording_a"] == a) & (changes["recording_b"] == b)]
    result: dict[str, Any] = {"recording_a": a, "recording_b": b}
    for column, transformed in (("p_release_change", False), ("q_ratio", True), ("ppr_ratio", True)):
        values = rows[column].to_numpy(dtype=np.float64)
        if transformed:
            values = np.log(np.where(values > 0, values, np.nan))
        change = measure_paired_change(values, confidence=CONFIDENCE, n_permutations=_PERMUTATIONS, rng=rng)
        mean = _exponential(change.mean) if transformed else change.mean
        result |= {
            column: _number(mean.value),
            f"{column}_lo": _number(mean.lo),
            f"{column}_hi": _number(mean.hi),
            f"{column}_p": _number(change.p_none),
            f"{column}_n": change.n,
        }
    for test in ("p_changed_p_adjusted", "q_changed_p_adjusted"):
        result[f"boutons_{test.removesuffix('_p_adjusted')}"] = int(
            np.sum(rows[test].to_numpy(dtype=np.float64) <= _FALSE_DISCOVERIES)
        )
    return result


def _exponential(estimate: Estimate) -> Estimate:
    value, lo, hi = (float(np.exp(number)) for number in (estimate.value, estimate.lo, estimate.hi))
    return Estimate(value=value, lo=lo, hi=hi, method=estimate.method)


def _number(value: float) -> float | None:
    return float(value) if np.isfinite(value) else None
