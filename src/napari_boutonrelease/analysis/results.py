"""All that one analysed recording has to say, ready to be shown, written or compared."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    import numpy as np
    import pandas as pd
    from numpy.typing import NDArray

    from ..boutons import Footprints
    from ..response_shape import ResponseShape
    from .settings import Settings


@dataclass(frozen=True, slots=True, kw_only=True)
class AnalysisResult:
    """Tables, arrays and provenance of one recording.

    Attributes
    ----------
    name : str
        Stem of the movie's file name.
    boutons, pulses, responses, spontaneous, drift, trials : DataFrame
    co_release, detection, trains, intervals, recovery : DataFrame
        The tables whose columns `reports/columns.py` describes.
    estimates : DataFrame
        Every estimate of the same quantity side by side: columns `bouton, quantity, method, value, lo, hi`, where
        quantity is `p_release`, `m`, `n_sites`, `p_site` or `q`.
    summary : dict
        Results of the whole axon and the recording's quality, JSON-ready.
    provenance : dict
        What is needed to repeat the analysis, JSON-ready: the content of `analysis.json`.
    cautions : tuple of str
        Sentences a reader must see beside the numbers.
    settings : Settings
        All settings used.
    time_s : (n_frames,) ndarray
        Start of each frame on the recording's clock.
    f, f0, dff : (n_boutons, n_frames) ndarray
        Background-free brightness (counts), its baseline, and dF/F; NaN in frames that were left out.
    stimulus_s : (n_trials, n_pulses) ndarray
        Stimulus times on the same clock; NaN where a trial has no such pulse.
    null_amplitude : (n_boutons, n_null) ndarray
        Amplitudes (dF/F) at pseudo-stimuli.
    mean_image, evidence : (height, width) ndarray
        Mean of the movement-corrected frames (counts); detection evidence (log-likelihood ratio).
    evidence_cut : float
        Evidence above which a maximum was accepted; NaN where positions were given.
    footprints : Footprints
        Places, extraction weights and the label image.
    shape : ResponseShape
        Time course used for the fits.
    shape_from : str
        `protocol`, `recording` or `assumed`.
    """

    name: str
    boutons: pd.DataFrame
    pulses: pd.DataFrame
    responses: pd.DataFrame
    spontaneous: pd.DataFrame
    drift: pd.DataFrame
    trials: pd.DataFrame
    co_release: pd.DataFrame
    detection: pd.DataFrame
    trains: pd.DataFrame
    intervals: pd.DataFrame
    recovery: pd.DataFrame
    estimates: pd.DataFrame
    summary: Mapping[str, Any]
    provenance: Mapping[str, Any]
    cautions: tuple[str, ...]
    settings: Settings
    time_s: NDArray[np.float64]
    f: NDArray[np.float64]
    f0: NDArray[np.float64]
    dff: NDArray[np.float64]
    stimulus_s: NDArray[np.float64]
    null_amplitude: NDArray[np.float64]
    mean_image: NDArray[np.float64]
    evidence: NDArray[np.float64]
    evidence_cut: float
    footprints: Footprints
    shape: ResponseShape
    shape_from: str
