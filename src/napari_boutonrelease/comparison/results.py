"""All that a comparison has to say, ready to be shown or written."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    import pandas as pd

    from .joint_step import BoutonFits
    from .matching import Matches
    from .recording import ComparedRecording
    from .settings import CompareSettings


@dataclass(frozen=True, slots=True, kw_only=True)
class Comparison:
    """Tables, summary and provenance of a comparison.

    Attributes
    ----------
    name : str
        Names of the recordings, joined.
    recordings : tuple of ComparedRecording
        What was compared; ids of boutons are those of the first.
    matches : Matches
        Which bouton is which.
    fits : tuple of BoutonFits
        Joint fits and parabola of each bouton of the first recording.
    joint, conditions, changes, variance_mean, unmatched : DataFrame
        The tables that `comparison/columns.py` describes.
    intervals, recovery : DataFrame
        Pulse pairs at several intervals and what they follow; empty where all recordings have the same one.
    summary : mapping
        What holds for all boutons together, JSON-ready.
    provenance : mapping
        What is needed to repeat the comparison, JSON-ready.
    cautions : tuple of str
        Sentences that a reader must see beside the numbers.
    settings : CompareSettings
        All settings used.
    """

    name: str
    recordings: tuple[ComparedRecording, ...]
    matches: Matches
    fits: tuple[BoutonFits, ...]
    joint: pd.DataFrame
    conditions: pd.DataFrame
    changes: pd.DataFrame
    variance_mean: pd.DataFrame
    intervals: pd.DataFrame
    recovery: pd.DataFrame
    unmatched: pd.DataFrame
    summary: Mapping[str, Any]
    provenance: Mapping[str, Any]
    cautions: tuple[str, ...]
    settings: CompareSettings
