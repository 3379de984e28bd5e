"""The same boutons in two or more recordings: which is which, what changed, what all of them say together."""

from __future__ import annotations

from .matching import Matches, match_boutons, matches_from_ids, measure_shift
from .recording import ComparedRecording, recording_from_result, recording_from_tables
from .results import Comparison
from .run import compare_recordings
from .settings import CompareSettings

__all__ = [
    "CompareSettings",
    "ComparedRecording",
    "Comparison",
    "Matches",
    "compare_recordings",
    "match_boutons",
    "matches_from_ids",
    "measure_shift",
    "recording_from_result",
    "recording_from_tables",
]
