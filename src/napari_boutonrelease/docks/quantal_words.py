"""What the quantal fit of one bouton says, and every reason to doubt it, in sentences."""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np
import pandas as pd

from ..analysis.measured import Measured
from ..flags import FLAGS
from ..reports.words import MISSING, fixed, p_words, ranges, short, with_limits

QUANTITIES = {
    "p_release": "p_release",
    "m": "m (vesicles)",
    "n_sites": "n_sites",
    "p_site": "p_site",
    "q": "q (dF/F)",
}
"""Quantities of the table of estimates in their order, and their names with units."""

_DECIMALS = {"n_sites": 0, "q": 3}


def headline(measured: Measured, row: int) -> str:
    """Say in a sentence or two what a bouton releases, or why that cannot be said."""
    axon = measured.release.axon
    if not np.isfinite(axon.p_release[row, 0]):
        return "This bouton could not be fitted: it has no usable amplitude."
    p = with_limits(axon.p_release[row, 0], axon.p_release_lo[row, 0], axon.p_release_hi[row, 0])
    if axon.silent_probability[row] >= 0.5:
        return (
            f"Silent: no release was seen; p_release is at most {fixed(axon.p_release_hi[row, 0])} (95 %). "
            "Its own vesicles and sites cannot be known."
        )
    q = with_limits(axon.q[row], axon.q_lo[row], axon.q_hi[row], decimals=3)
    members = axon.n_set[row]
    if len(members) > 1:
        sites = f"The number of release sites is unresolved: {ranges(members)} all fit."
    else:
        sites = f"It has {members[0]} release site{'' if members[0] == 1 else 's'}."
    return f"p_release {p}. One vesicle gives {q} dF/F. {sites}"


def doubts(flags: str) -> list[tuple[str, str, str]]:
    """Return code, meaning and advice of each flag in a cell of the table of boutons."""
    return [(code, FLAGS[code].meaning, FLAGS[code].advice) for code in flags.split(";") if code]


def estimate_rows(estimates: pd.DataFrame) -> list[tuple[str, str, str]]:
    """Write the estimates of one bouton as rows of quantity, value with its 95 % interval, and method."""
    rows = []
    for quantity, name in QUANTITIES.items():
        mine = estimates[estimates["quantity"] == quantity]
        for method, value, low, high in zip(mine["method"], mine["value"], mine["lo"], mine["hi"], strict=True):
            decimals = _DECIMALS.get(quantity, 2)
            exact = value == low == high
            text = fixed(value, decimals=decimals) if exact else with_limits(value, low, high, decimals=decimals)
            rows.append((name, text, str(method)))
    return rows


def pair_rows(measured: Measured, row: int) -> list[tuple[str, str]]:
    """Write the pulse pair of one bouton, its ratios and what the first release leaves behind, as names and values."""
    pair, history, axon = measured.release.pairs[row], measured.counts.histories[row], measured.release.axon
    rows: list[tuple[str, str]] = []
    if pair is not None:
        ratio = with_limits(pair.ppr.value, pair.ppr.lo, pair.ppr.hi) if np.isfinite(pair.ppr.value) else "undefined"
        rows += [
            ("paired-pulse ratio of amplitudes", ratio),
            ("verdict, corrected for the number of boutons", measured.release.verdicts[row] or MISSING),
            ("plain ratio of the means", fixed(pair.ratio_of_means)),
        ]
    if axon.p_release.shape[1] > 1:
        rows += [
            (
                f"p_release, pulse {pulse + 1}",
                with_limits(axon.p_release[row, pulse], axon.p_release_lo[row, pulse], axon.p_release_hi[row, pulse]),
            )
            for pulse in range(2)
        ]
    if history is not None:
        after, failed = history.after_release, history.after_failure
        rows += [
            ("ratio of called fractions", fixed(history.ppr_called)),
            ("P(release 2 | release 1)", with_limits(after.value, after.lo, after.hi)),
            ("P(release 2 | failure 1)", with_limits(failed.value, failed.lo, failed.hi)),
            ("does pulse 2 depend on pulse 1 (Fisher)", _p(history.history_p)),
            ("both pulses called", short(history.both)),
            ("pulse 1 only", short(history.only_first)),
            ("pulse 2 only", short(history.only_second)),
            ("neither", short(history.neither)),
        ]
    return rows


def train_rows(train: Mapping[str, float], note: str) -> list[tuple[str, str]]:
    """Write a bouton's row of the table of trains as names and values, with what to doubt."""
    if not train:
        return []
    rows = [
        (name, with_limits(*(train[f"{key}{end}"] for end in ("", "_lo", "_hi")), decimals=decimals))
        for key, name, decimals in (
            ("steady_ratio", "late over first amplitude", 2),
            ("pool", "releasable pool (dF/F)", 2),
            ("pool_vesicles", "releasable pool (vesicles)", 1),
            ("replenished", "comes back from pulse to pulse (dF/F)", 3),
            ("u", "share that pulse 1 uses, u", 2),
            ("tau_rec_s", "recovery of resources (s)", 3),
            ("tau_facil_s", "facilitation wears off (s)", 3),
            ("resources", "all resources at once (dF/F)", 2),
        )
    ]
    rows += [("fit of the model", _p(train["model_p"])), ("complete trials", f"{train['trials']:g}")]
    return rows + ([("note", note)] if note else [])


def recovery_rows(recovery: Mapping[str, float], words: Mapping[str, str]) -> list[tuple[str, str]]:
    """Write a bouton's row of the table of recovery as names and values, with what to doubt."""
    if not recovery:
        return []
    rows = [("time course", words.get("model", MISSING))]
    rows += [
        (name, with_limits(*(recovery[f"{key}{end}"] for end in ("", "_lo", "_hi")), decimals=decimals))
        for key, name, decimals in (
            ("facilitation", "facilitation at interval 0", 2),
            ("facilitation_s", "facilitation wears off (s)", 3),
            ("depression", "depression at interval 0", 2),
            ("depression_s", "depression recovers (s)", 3),
        )
    ]
    rows += [("ratio 1 at every interval", _p(recovery["constant_p"])), ("fit of the course", _p(recovery["model_p"]))]
    return rows + ([("note", words["note"])] if words.get("note") else [])


def _p(value: float) -> str:
    return p_words(value) if np.isfinite(value) else MISSING
