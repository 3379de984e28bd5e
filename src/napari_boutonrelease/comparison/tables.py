"""The tables of a comparison."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np

from ..quanta import Estimate, benjamini_hochberg, difference_of_estimates, ratio_of_estimates
from .columns import CHANGES, CONDITIONS, JOINT, UNMATCHED, VARIANCE_MEAN

if TYPE_CHECKING:
    from collections.abc import Sequence

    import pandas as pd

    from ..analysis.column_types import TableDefinition
    from .joint_step import BoutonFits
    from .matching import Matches
    from .recording import ComparedRecording

_LOCUS = {"presynaptic": "release", "postsynaptic": "quantal_size", "mixed": "mixed", "neither": "neither"}


def table_of(definition: TableDefinition, rows: list[dict[str, Any]]) -> pd.DataFrame:
    """Return rows as the table that the data dictionary describes; what a row leaves out is empty."""
    import pandas as pd

    types = {"integer": "Int64", "number": "float64", "string": "string"}
    frame = pd.DataFrame(rows, columns=list(definition.names))
    return frame.astype({column.name: types[column.type] for column in definition.columns})


def joint_table(first: ComparedRecording, fits: Sequence[BoutonFits]) -> pd.DataFrame:
    """Return a row a bouton: sites and vesicles from all recordings together."""
    rows = []
    for row, one in enumerate(fits):
        fit = one.joint
        rows.append(
            {
                "bouton": first.bouton[row],
                "recordings": len(one.there),
                "n_sites": fit.n_sites,
                "n_sites_lo": fit.n_sites_lo,
                "n_sites_hi": fit.n_sites_hi,
                **limits("q", fit.q),
                "q_cv": fit.q_cv if fit.n_sites else np.nan,
                "changed": fit.changed,
                "changed_p": fit.changed_p,
                "p_changed_p": fit.p_changed_p,
                "q_changed_p": fit.q_changed_p,
                "n_set": ";".join(map(str, fit.n_set)) or None,
                "n_sites_alone": first.boutons["n_sites"].iloc[row],
                "note": fit.reason or None,
            }
        )
    return table_of(JOINT, rows)


def conditions_table(
    recordings: Sequence[ComparedRecording], matches: Matches, fits: Sequence[BoutonFits]
) -> pd.DataFrame:
    """Return a row a bouton and recording."""
    rows = []
    for row, one in enumerate(fits):
        for at, k in enumerate(one.there):
            recording, there = recordings[k], int(matches.row[row, k])
            own = recording.boutons.iloc[there]
            rows.append(
                {
                    "bouton": recordings[0].bouton[row],
                    "recording": recording.name,
                    "bouton_there": recording.bouton[there],
                    "distance_px": matches.distance_px[row, k],
                    "trials": own["trials"],
                    **limits("p_site", one.joint.p_site[at][0]),
                    **limits("p_release", one.joint.p_release[at][0]),
                    **limits("p_release_own", estimate_of(recording, "p_release", there)),
                    **limits("ppr", estimate_of(recording, "ppr", there)),
                    **limits("q_own", _own_q(recording, there)),
                    "amplitude_mean": own["amplitude_mean"],
                    "amplitude_se": own["amplitude_se"],
                    "noise_sd": own["noise_sd"],
                }
            )
    return table_of(CONDITIONS, rows)


def changes_table(
    recordings: Sequence[ComparedRecording], matches: Matches, fits: Sequence[BoutonFits]
) -> pd.DataFrame:
    """Return a row a bouton and pair of recordings; p-values are adjusted over the boutons of a pair."""
    rows: list[dict[str, Any]] = []
    for row, one in enumerate(fits):
        for (a, b), fit in one.pairs.items():
            at = [(recordings[k], int(matches.row[row, k])) for k in (a, b)]
            p_release, ppr = (
                [estimate_of(recording, column, there) for recording, there in at] for column in ("p_release", "ppr")
            )
            cv2 = one.inverse_cv2.get((a, b))
            rows.append(
                {
                    "bouton": recordings[0].bouton[row],
                    "recording_a": recordings[a].name,
                    "recording_b": recordings[b].name,
                    **limits("p_release_change", difference_of_estimates(p_release[1], p_release[0])),
                    "p_changed_p": fit.p_changed_p,
                    **limits("q_ratio", fit.q_ratio),  # each own analysis leans towards the axon's q
                    "q_changed_p": fit.q_changed_p,
                    **limits("ppr_ratio", ratio_of_estimates(ppr[1], ppr[0])),
                    **({} if cv2 is None else limits("amplitude_ratio", cv2.mean_ratio)),
                    **({} if cv2 is None else limits("inverse_cv2_ratio", cv2.inverse_cv2_ratio)),
                    "locus": None if cv2 is None else _LOCUS.get(str(cv2.locus), "unresolved"),
                }
            )
    table = table_of(CHANGES, rows)
    for test in ("p_changed_p", "q_changed_p"):
        for _, group in table.groupby(["recording_a", "recording_b"], sort=False):
            p = group[test].to_numpy(dtype=np.float64)
            if np.isfinite(p).any():
                table.loc[group.index, f"{test}_adjusted"] = benjamini_hochberg(p)
    return table


def variance_mean_table(first: ComparedRecording, fits: Sequence[BoutonFits]) -> pd.DataFrame:
    """Return a row a bouton: the parabola of variance against mean."""
    rows = []
    for row, one in enumerate(fits):
        fit = one.variance_mean
        rows.append(
            {
                "bouton": first.bouton[row],
                "conditions": int(fit.used.sum()),
                **limits("q", fit.q),
                "n_sites": fit.n_sites,
                "n_sites_lo": fit.n_sites_lo,
                "n_sites_hi": fit.n_sites_hi,
                "bend_p": fit.bend_p,
                "fit_p": fit.fit_p,
                "note": fit.reason or None,
            }
        )
    return table_of(VARIANCE_MEAN, rows)


def unmatched_table(recordings: Sequence[ComparedRecording], matches: Matches) -> pd.DataFrame:
    """Return a row a bouton without a partner: in the first recording, or of another one."""
    rows = []
    for k, recording in enumerate(recordings):
        if k == 0:
            alone = {row: np.flatnonzero(matches.row[row] < 0) for row in range(len(recording.bouton))}
        else:
            alone = {int(row): np.array([0]) for row in matches.unmatched(k, len(recording.bouton))}
        for row, missing in alone.items():
            if missing.size:
                rows.append(
                    {
                        "recording": recording.name,
                        "bouton_there": recording.bouton[row],
                        "y_px": recording.position_px[row, 0],
                        "x_px": recording.position_px[row, 1],
                        "missing_in": ";".join(recordings[int(one)].name for one in missing),
                    }
                )
    return table_of(UNMATCHED, rows)


def limits(name: str, estimate: Estimate) -> dict[str, float]:
    """Return an estimate as the cells of a column and its two limits."""
    return {name: estimate.value, f"{name}_lo": estimate.lo, f"{name}_hi": estimate.hi}


def estimate_of(recording: ComparedRecording, column: str, row: int) -> Estimate:
    """Return a column of a recording's table of boutons with its limits."""
    value, lo, hi = (float(recording.column(f"{column}{end}")[row]) for end in ("", "_lo", "_hi"))
    # an empty upper limit beside a value is one that the data did not set
    hi = np.inf if np.isfinite(value) and np.isnan(hi) else hi
    return Estimate(value=value, lo=lo, hi=hi, method="the recording's own analysis")


def _own_q(recording: ComparedRecording, row: int) -> Estimate:
    """Vesicle of a bouton that releases; of a silent one it is only what the others have."""
    if "silent" in str(recording.boutons["flags"].iloc[row]).split(";"):
        return Estimate(value=np.nan, lo=np.nan, hi=np.nan, method="none: silent")
    return estimate_of(recording, "q", row)
