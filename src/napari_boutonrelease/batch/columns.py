"""The data dictionary of a study: its two tables, which take over the manifest's further columns."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace

from ..analysis.column_types import (
    DFF,
    Column,
    TableDefinition,
    choice,
    column,
    count,
    number,
    probability,
    with_limits,
)
from ..analysis.columns import BOUTONS

_RECORDING = column("recording", "string", "", "name of the recording: its folder of results", required=True)
_CONDITION = column("condition", "string", "", "condition, as the manifest has it")

_OF_RECORDING = (
    choice("status", "done, failed (see failure), or skipped: stopped before its turn", "done", "failed", "skipped"),
    column("failure", "string", "", "why it failed"),
    count("n_boutons", "boutons of the recording"),
    count("n_by_responses", "of those, found by their responses"),
    count("n_trials", "trials of the protocol"),
    count("n_pulses", "pulses of a trial"),
    count("n_frames", "frames of the movie"),
    number("duration_s", "s", "length of the recording", minimum=0),
    count("p_release_boutons", "boutons that the mean p_release rests on"),
    *with_limits(probability("p_release", "mean p_release of those boutons, silent ones included")),
    *with_limits(number("ppr", "", "second over first amplitude, both summed over boutons; limits over trials")),
    *with_limits(number("q", DFF, "median response to one vesicle among the axon's boutons", minimum=0)),
    column("analysed", "string", "", "when it was analysed (UTC, ISO 8601)"),
    column("version", "string", "", "version of the program that analysed it"),
    number("seconds", "s", "time that the analysis took", minimum=0),
    number("cpu_s", "s", "processor time that it took", minimum=0),
    number(
        "peak_memory_mb",
        "MB",
        "most memory that it held at once (10⁶ bytes), the movie's file not counted under Linux",
        minimum=0,
    ),
    column("movie", "string", "", "movie, from the manifest's folder"),
    column("folder", "string", "", "folder of its results, from the folder of the study"),
)


def study_table(further: Sequence[str]) -> TableDefinition:
    """Describe `study.csv` for a manifest with these further columns."""
    return TableDefinition(
        name="study",
        meaning="a row a bouton of every recording that was analysed",
        key=("recording", "bouton"),
        columns=(_RECORDING, _CONDITION, *_carried(further), *map(_not_unique, BOUTONS.columns)),
    )


def recordings_table(further: Sequence[str]) -> TableDefinition:
    """Describe `recordings.csv` for a manifest with these further columns."""
    return TableDefinition(
        name="recordings",
        meaning="a row a recording of the manifest, in its order",
        key=("recording",),
        columns=(_RECORDING, _CONDITION, *_carried(further), *_OF_RECORDING),
    )


def reserved_names() -> frozenset[str]:
    """Names that no further column of a manifest may have."""
    return frozenset({*study_table(()).names, *recordings_table(()).names})


def _carried(further: Sequence[str]) -> tuple[Column, ...]:
    return tuple(column(name, "string", "", f"{name}, as the manifest has it") for name in further)


def _not_unique(of: Column) -> Column:
    return replace(of, constraints={key: value for key, value in of.constraints.items() if key != "unique"})
