"""Reading back a folder of results, for comparisons."""

from __future__ import annotations

import json
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np

from ..analysis.columns import BOUTONS, RESPONSES
from ..comparison.recording import (
    NEEDED_OF_BOUTONS,
    NEEDED_OF_RESPONSES,
    ComparedRecording,
    recording_from_tables,
)
from ..errors import SavedAnalysisError
from .folder import MARK
from .tables import read_table

if TYPE_CHECKING:
    from numpy.typing import NDArray


def read_recording(path: str | Path, *, name: str | None = None) -> ComparedRecording:
    """Read what a comparison needs from the results of an analysis.

    Parameters
    ----------
    path : path
        Folder of results, or the `analysis.json` in it.
    name : str, optional
        What to call the recording; the folder's name without `.release`, where left out.

    Returns
    -------
    ComparedRecording

    Raises
    ------
    SavedAnalysisError
        If there are no results, a file of them is missing or damaged, or an older version wrote them.
    """
    folder = results_folder(path)
    try:
        summary = json.loads((folder / "summary.json").read_text(encoding="utf-8"))
    except (OSError, ValueError) as error:
        raise SavedAnalysisError(
            f"{folder / 'summary.json'} cannot be read ({error}); analyse the movie again."
        ) from error
    return recording_from_tables(
        name=name or folder.resolve().name.removesuffix(".release"),
        source=str(folder),
        boutons=read_table(folder / "boutons.csv", table=BOUTONS, needed=NEEDED_OF_BOUTONS),
        responses=read_table(folder / "responses.csv", table=RESPONSES, needed=NEEDED_OF_RESPONSES),
        null_amplitude=_null_amplitude(folder / "traces.npz"),
        mean_image=_mean_image(folder / "mean_image.tif"),
        summary=summary,
    )


def results_folder(path: str | Path) -> Path:
    """Return the folder of results that a path names.

    Raises
    ------
    SavedAnalysisError
        If there is none.
    """
    path = Path(path)
    folder = path.parent if path.name == MARK else path
    if not (folder / MARK).is_file():
        raise SavedAnalysisError(f"{path} holds no results of an analysis: give a folder in which {MARK} lies.")
    return folder


def _null_amplitude(path: Path) -> NDArray[np.float64]:
    try:
        with np.load(path, allow_pickle=False) as traces:
            return np.asarray(traces["null_amplitude"], dtype=np.float64)
    except (OSError, ValueError, KeyError) as error:
        raise SavedAnalysisError(
            f"{path} holds no null amplitudes ({error}): repeat the analysis with --from {path.parent / MARK}."
        ) from error


def _mean_image(path: Path) -> NDArray[np.float64]:
    import tifffile

    try:
        return np.asarray(tifffile.imread(path), dtype=np.float64)
    except (OSError, ValueError) as error:
        raise SavedAnalysisError(
            f"{path} cannot be read ({error}): repeat the analysis with --from {path.parent / MARK}."
        ) from error
