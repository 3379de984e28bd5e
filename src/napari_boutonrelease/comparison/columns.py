"""The data dictionary of a comparison: every column of its tables."""

from __future__ import annotations

from ..analysis.column_types import (
    DFF,
    TableDefinition,
    choice,
    column,
    count,
    number,
    probability,
    with_limits,
)
from ..analysis.train_columns import INTERVALS, RECOVERY

_BOUTON = count("bouton", "bouton id in the first recording", minimum=1, required=True)
_RECORDING = column("recording", "string", "", "name of the recording", required=True)
_THERE = count("bouton_there", "the bouton's id in this recording", minimum=1)

JOINT = TableDefinition(
    name="joint",
    meaning="a row a bouton: what all recordings together say of its sites and vesicles",
    key=("bouton",),
    columns=(
        count("bouton", _BOUTON.meaning, minimum=1, required=True, unique=True),
        count("recordings", "recordings that it was found in", minimum=1),
        *with_limits(count("n_sites", "most likely number of release sites, the same in all recordings", minimum=1)),
        *with_limits(number("q", DFF, "response to one vesicle, the same in all recordings", minimum=0)),
        number("q_cv", "", "coefficient of variation of one vesicle's response", minimum=0),
        choice(
            "changed",
            "what differs between recordings, not corrected for the number of boutons",
            "none",
            "p",
            "q",
            "both",
        ),
        probability("changed_p", "likelihood-ratio p that nothing differs"),
        probability("p_changed_p", "likelihood-ratio p that p_site is the same in all recordings"),
        probability("q_changed_p", "likelihood-ratio p that q is the same in all recordings"),
        column("n_set", "string", "", "numbers of sites that the data cannot exclude", pattern=r"\d+(;\d+)*"),
        count("n_sites_alone", "number of sites from the first recording alone", minimum=1),
        column("note", "string", "", "why a number is missing or weak"),
    ),
)

CONDITIONS = TableDefinition(
    name="conditions",
    meaning="a row a bouton and recording",
    key=("bouton", "recording"),
    columns=(
        _BOUTON,
        _RECORDING,
        _THERE,
        number("distance_px", "px", "between its two positions, images laid on one another", minimum=0),
        count("trials", "usable trials for pulse 1"),
        *with_limits(probability("p_site", "release probability of one site at pulse 1, joint fit")),
        *with_limits(probability("p_release", "probability that pulse 1 releases, joint fit")),
        *with_limits(probability("p_release_own", "the same from this recording's own analysis")),
        *with_limits(number("ppr", "", "paired-pulse ratio of this recording")),
        *with_limits(number("q_own", DFF, "response to one vesicle from this recording's own analysis", minimum=0)),
        number("amplitude_mean", DFF, "mean amplitude of pulse 1, failures included"),
        number("amplitude_se", DFF, "standard error of amplitude_mean", minimum=0),
        number("noise_sd", DFF, "noise of one amplitude", minimum=0),
    ),
)

CHANGES = TableDefinition(
    name="changes",
    meaning="a row a bouton and pair of recordings",
    key=("bouton", "recording_a", "recording_b"),
    columns=(
        _BOUTON,
        column("recording_a", "string", "", "name of the earlier recording", required=True),
        column("recording_b", "string", "", "name of the later recording", required=True),
        *with_limits(number("p_release_change", "", "p_release in b minus that in a", minimum=-1, maximum=1)),
        probability("p_changed_p", "likelihood-ratio p that p_site is the same in both"),
        probability("p_changed_p_adjusted", "the same, adjusted for all boutons of the pair (Benjamini-Hochberg)"),
        *with_limits(number("q_ratio", "", "q in b over that in a, n_sites the same in both", minimum=0)),
        probability("q_changed_p", "likelihood-ratio p that q is the same in both"),
        probability("q_changed_p_adjusted", "the same, adjusted for all boutons of the pair (Benjamini-Hochberg)"),
        *with_limits(number("ppr_ratio", "", "paired-pulse ratio in b over that in a", minimum=0)),
        *with_limits(number("amplitude_ratio", "", "mean amplitude of pulse 1 in b over that in a")),
        *with_limits(number("inverse_cv2_ratio", "", "1/CV² of pulse 1 in b over that in a, noise taken out")),
        choice(
            "locus",
            "what 1/CV² against mean points to",
            *("release", "quantal_size", "mixed", "neither", "unresolved"),
        ),
    ),
)

VARIANCE_MEAN = TableDefinition(
    name="variance_mean",
    meaning="a row a bouton: variance against mean over the pulses of all recordings",
    key=("bouton",),
    columns=(
        count("bouton", _BOUTON.meaning, minimum=1, required=True, unique=True),
        count("conditions", "pulses and recordings that entered"),
        *with_limits(number("q", DFF, "mean response to one vesicle", minimum=0)),
        *with_limits(
            number("n_sites", "", "number of sites, not rounded; empty where the parabola is not bent enough")
        ),
        probability("bend_p", "one-sided p of a straight line against a bent one"),
        probability("fit_p", "goodness-of-fit p of the parabola"),
        column("note", "string", "", "why a number is missing or weak"),
    ),
)

UNMATCHED = TableDefinition(
    name="unmatched",
    meaning="a row a bouton that has no partner",
    key=("recording", "bouton_there"),
    columns=(
        _RECORDING,
        count("bouton_there", "the bouton's id in this recording", minimum=1, required=True),
        number("y_px", "px", "its row position in this recording"),
        number("x_px", "px", "its column position in this recording"),
        column("missing_in", "string", "", "recordings in which it was not found, joined by ;"),
    ),
)

TABLES: dict[str, TableDefinition] = {
    table.name: table for table in (JOINT, CONDITIONS, CHANGES, VARIANCE_MEAN, INTERVALS, RECOVERY, UNMATCHED)
}
