"""One recording from the movie to its tables."""

from __future__ import annotations

from typing import TYPE_CHECKING

from .axon_tables import co_release_table, trial_table
from .pipeline import Measured, Pipeline
from .pulse_intervals import interval_table, recovery_table
from .results import AnalysisResult
from .savefile import provenance_of
from .selection import detection_table, measure_selection, selection_cautions, selection_summary
from .summary import cautions_of, estimates_table, summarise
from .tables import bouton_table, drift_table, pulse_table, response_table, spontaneous_table
from .trains import train_table

if TYPE_CHECKING:
    from pathlib import Path

    import numpy as np
    from numpy.typing import NDArray

    from ..recording import Movie, Protocol
    from .hand_edits import HandEdits
    from .progress import Progress
    from .settings import Settings


def run_analysis(
    movie: Movie,
    protocol: Protocol,
    *,
    settings: Settings,
    boutons: str | Path | None = None,
    axon: str | Path | NDArray[np.float64] | None = None,
    edits: HandEdits | None = None,
    progress: Progress | None = None,
) -> AnalysisResult:
    """Analyse one recording.

    Parameters
    ----------
    movie : Movie
        The recording.
    protocol : Protocol
        When the axon was stimulated.
    settings : Settings
        Every choice.
    boutons : path, optional
        Table of positions or label image, instead of finding the boutons.
    axon : path or (k, 2) ndarray, optional
        Points along the axon: a table, or (y, x) in px.
    edits : HandEdits, optional
        Changes by hand.
    progress : callable, optional
        Called with (done, total).

    Returns
    -------
    AnalysisResult

    Raises
    ------
    InputError
        If the movie, the protocol or a file of boutons or axon cannot be used.
    """
    pipeline = Pipeline(movie, protocol, boutons=boutons, axon=axon)
    return put_together(pipeline.measure(settings, edits=edits, progress=progress), pipeline=pipeline)


def put_together(measured: Measured, *, pipeline: Pipeline) -> AnalysisResult:
    """Make the tables and the summary of what was measured."""
    recording, responses = measured.recording, measured.responses
    selection = measure_selection(measured)
    return AnalysisResult(
        name=pipeline.movie.name,
        boutons=bouton_table(measured),
        pulses=pulse_table(measured),
        responses=response_table(measured),
        spontaneous=spontaneous_table(measured),
        drift=drift_table(measured),
        trials=trial_table(measured),
        co_release=co_release_table(measured),
        detection=detection_table(selection),
        trains=train_table(measured),
        intervals=interval_table(measured),
        recovery=recovery_table(measured),
        estimates=estimates_table(measured),
        summary={**summarise(measured), "selection": selection_summary(selection)},
        provenance=provenance_of(measured, pipeline=pipeline),
        cautions=(*selection_cautions(selection), *cautions_of(measured)),
        settings=measured.settings,
        time_s=recording.timing.frame_start_s,
        f=measured.f,
        f0=responses.baseline.f0,
        dff=responses.baseline.dff(measured.f),
        stimulus_s=recording.timing.stimulus_s,
        null_amplitude=measured.amplitudes.null_amplitude,
        mean_image=recording.drift.reference,
        evidence=measured.places.evidence,
        evidence_cut=measured.places.evidence_cut,
        footprints=measured.places.footprints,
        shape=responses.shape,
        shape_from=responses.shape_from,
    )
