"""The data dictionary of what the detection would have missed."""

from __future__ import annotations

from .column_types import TableDefinition, column, count, probability

DETECTION = TableDefinition(
    name="detection",
    meaning="a row a release probability: simulated boutons planted in the recording's own noise",
    key=("p_release",),
    columns=(
        column("p_release", "number", "", "p_release of the planted boutons", minimum=0, maximum=1, required=True),
        count("planted", "boutons planted"),
        count("found", "of those, found by the cut that the detection used"),
        probability("found_share", "found over planted"),
        probability("found_share_lo", "lower end of its 95 % interval (Wilson)"),
        probability("found_share_hi", "upper end of its 95 % interval"),
        probability("found_share_fit", "share found, fitted so that it never falls with p_release"),
    ),
)


def _limits(path: str, meaning: str) -> dict[str, str]:
    return {
        path: meaning,
        f"{path}_lo": "lower end of its 95 % interval",
        f"{path}_hi": "upper end of its 95 % interval; null where the data set none",
    }


SELECTION_SUMMARY: dict[str, str] = {
    **_limits("selection.p_found_half", "smallest p_release of which the detection finds 50 %"),
    **_limits("selection.p_found_most", "smallest p_release of which the detection finds 95 %"),
    "selection.smallest_p_release": "boutons of a lower p_release are not inferred: fewer than 10 % are found",
    "selection.boutons": "boutons found by their responses that the correction rests on",
    "selection.p_release_found": "mean p_release of these",
    **_limits("selection.p_release", "mean p_release of all boutons above smallest_p_release, corrected for detection"),
    **_limits("selection.missed_per_found", "boutons above smallest_p_release that were missed, for each one found"),
    "selection.method": "how the mean was corrected, or why it was not",
}
"""Keys of the summary."""
