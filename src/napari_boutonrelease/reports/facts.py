"""What the reports look up in a result: facts of the summary, and numbers that may be missing."""

from __future__ import annotations

import math
from collections.abc import Mapping
from typing import TYPE_CHECKING, Any

import numpy as np

from ..analysis.columns import SUMMARY
from ..analysis.grids import response_grid

if TYPE_CHECKING:
    import pandas as pd
    from numpy.typing import NDArray

    from ..analysis.results import AnalysisResult


def fact(result: AnalysisResult, path: str) -> Any:
    """Return the summary's entry under a dotted path of `SUMMARY`, None where it is missing or not finite.

    Raises
    ------
    KeyError
        If the path is not one of `SUMMARY`.
    """
    if path not in SUMMARY:
        raise KeyError(path)
    entry: Any = result.summary
    for key in path.split("."):
        entry = entry.get(key) if isinstance(entry, Mapping) else None
    if isinstance(entry, float | np.floating) and not math.isfinite(entry):
        return None
    return entry


def number(result: AnalysisResult, path: str) -> float:
    """Return a fact as float, NaN where it is missing."""
    value = fact(result, path)
    return math.nan if value is None else float(value)


def pixel_size_um(result: AnalysisResult) -> float | None:
    """Side of a pixel in µm, None where unknown."""
    size = number(result, "recording.pixel_size_um")
    return size if size > 0 else None


def frame_interval_s(result: AnalysisResult) -> float:
    """Time from one frame to the next, s; NaN for less than two frames."""
    interval = number(result, "recording.frame_interval_s")
    if math.isnan(interval) and len(result.time_s) > 1:
        return float(np.median(np.diff(result.time_s)))
    return interval


def values(frame: pd.DataFrame, column: str) -> NDArray[np.float64]:
    """Return a column as float64 with NaN where it is missing."""
    return frame[column].to_numpy(dtype=np.float64, na_value=np.nan)


def texts(frame: pd.DataFrame, column: str) -> list[str]:
    """Return a column as text, empty where it is missing."""
    return [value if isinstance(value, str) else "" for value in frame[column].tolist()]


def amplitude_grid(result: AnalysisResult, column: str) -> NDArray[np.float64]:
    """Return a column of the responses as (bouton, trial, pulse), NaN where unused or missing."""
    return response_grid(result.responses, column, bouton=result.boutons["bouton"], shape=result.stimulus_s.shape)


def silent(result: AnalysisResult) -> NDArray[np.bool_]:
    """Return which boutons show no release: nothing can be said about their own quanta."""
    return np.array(["silent" in flags.split(";") for flags in texts(result.boutons, "flags")], dtype=bool)


def nothing_released(result: AnalysisResult) -> bool:
    """Whether boutons were measured, and none of them shows release: a mean of zeros would look exact."""
    measured = np.isfinite(values(result.boutons, "p_release"))
    return bool(measured.any() and silent(result)[measured].all())


def on_a_path(result: AnalysisResult) -> bool:
    """Whether the boutons' distances along the axon are known."""
    return bool(np.isfinite(values(result.boutons, "axon_um")).any())
