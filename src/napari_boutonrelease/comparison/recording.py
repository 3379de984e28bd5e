"""What a comparison needs to know of one analysed recording."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from ..analysis.grids import response_grid

if TYPE_CHECKING:
    from collections.abc import Mapping

    import pandas as pd
    from numpy.typing import NDArray

    from ..analysis.results import AnalysisResult

    Floats = NDArray[np.float64]


NEEDED_OF_BOUTONS = (
    *("bouton", "y_px", "x_px", "noise_sd", "noise_n", "trials", "flags"),
    *(f"{name}{end}" for name in ("p_release", "ppr", "q", "n_sites") for end in ("", "_lo", "_hi")),
    *("amplitude_mean", "amplitude_se"),
)
"""Columns of the table of boutons without which there is nothing to compare."""

NEEDED_OF_RESPONSES = ("bouton", "trial", "pulse", "stimulus_s", "amplitude", "amplitude_se", "used")


@dataclass(frozen=True, slots=True, kw_only=True)
class ComparedRecording:
    """One recording of the boutons that are compared.

    Attributes
    ----------
    name : str
        What it is called in tables and figures.
    source : str
        Where it was read from; the name where it was not read.
    boutons : DataFrame
        Its table of boutons.
    amplitude, amplitude_sd : (n_boutons, n_trials, n_pulses) ndarray
        Responses that count, and the noise of each (dF/F); NaN elsewhere.
    null_amplitude : (n_boutons, n_null) ndarray
        Amplitudes (dF/F) where nothing was stimulated.
    stimulus_s : (n_trials, n_pulses) ndarray
        Time of each stimulus; NaN where there is none.
    mean_image : (height, width) ndarray
        Mean of the frames, counts.
    pixel_size_um : float or None
        Side of a pixel.
    summary : mapping
        Results of the whole axon.
    """

    name: str
    source: str
    boutons: pd.DataFrame
    amplitude: Floats
    amplitude_sd: Floats
    null_amplitude: Floats
    stimulus_s: Floats
    mean_image: Floats
    pixel_size_um: float | None
    summary: Mapping[str, Any]

    @property
    def bouton(self) -> NDArray[np.int64]:
        """Ids of its boutons."""
        return self.boutons["bouton"].to_numpy(dtype=np.int64)

    @property
    def position_px(self) -> Floats:
        """Positions of its boutons, (n_boutons, 2), (y, x)."""
        return self.boutons[["y_px", "x_px"]].to_numpy(dtype=np.float64)

    def column(self, name: str) -> Floats:
        """Return a column of the table of boutons, NaN where it is missing."""
        return self.boutons[name].to_numpy(dtype=np.float64, na_value=np.nan)


def recording_from_tables(
    *,
    name: str,
    source: str,
    boutons: pd.DataFrame,
    responses: pd.DataFrame,
    null_amplitude: Floats,
    mean_image: Floats,
    summary: Mapping[str, Any],
) -> ComparedRecording:
    """Put together a recording from the tables and arrays of its analysis."""
    return ComparedRecording(
        name=name,
        source=source,
        boutons=boutons,
        amplitude=response_grid(responses, "amplitude", bouton=boutons["bouton"]),
        amplitude_sd=response_grid(responses, "amplitude_se", bouton=boutons["bouton"]),
        null_amplitude=np.asarray(null_amplitude, dtype=np.float64),
        stimulus_s=_stimulus_s(responses),
        mean_image=np.asarray(mean_image, dtype=np.float64),
        pixel_size_um=summary.get("recording", {}).get("pixel_size_um"),
        summary=summary,
    )


def recording_from_result(result: AnalysisResult, *, name: str | None = None) -> ComparedRecording:
    """Take what a comparison needs from an analysis that was not written yet."""
    return recording_from_tables(
        name=name or result.name,
        source=result.name,
        boutons=result.boutons,
        responses=result.responses,
        null_amplitude=result.null_amplitude,
        mean_image=result.mean_image,
        summary=result.summary,
    )


def _stimulus_s(responses: pd.DataFrame) -> Floats:
    if not len(responses):
        return np.empty((0, 0))
    trial, pulse = (responses[name].to_numpy(dtype=np.int64) for name in ("trial", "pulse"))
    times = np.full((trial.max(), pulse.max()), np.nan)
    times[trial - 1, pulse - 1] = responses["stimulus_s"].to_numpy(dtype=np.float64)
    return times
