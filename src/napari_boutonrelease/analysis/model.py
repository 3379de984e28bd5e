"""One analysis as an interactive window holds it: recording, settings, edits by hand, results, and what is selected.

The model knows neither windows nor threads. Views watch its signals and call its methods, on one thread; `compute` is
the exception: it takes a frozen `Request` and may run anywhere, one at a time.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Any

import numpy as np
from psygnal import Signal

from ..boutons import trace_axon
from ..errors import InputError
from .axon_step import exclude_suspected, suspected_trials
from .axon_tables import trial_table
from .hand_edits import HandEdits
from .measured import Measured, Traced
from .pipeline import Pipeline
from .progress import StepProgress
from .pulse_intervals import interval_table, recovery_table
from .quantal_step import count_releases
from .run import put_together
from .settings import Settings
from .summary import summarise
from .tables import bouton_table, pulse_table, response_table, spontaneous_table
from .trains import train_table

if TYPE_CHECKING:
    from pathlib import Path

    import pandas as pd
    from numpy.typing import NDArray

    from ..recording import Movie, Protocol
    from .progress import Progress
    from .results import AnalysisResult
    from .sites import Sites

_TABLES = {
    "boutons": bouton_table,
    "pulses": pulse_table,
    "responses": response_table,
    "spontaneous": spontaneous_table,
    "trials": trial_table,
    "trains": train_table,
    "intervals": interval_table,
    "recovery": recovery_table,
}
_WITH_CALLS = ("boutons", "pulses", "responses")  # these change with the threshold


@dataclass(frozen=True, slots=True, kw_only=True)
class Request:
    """What is to be computed: the pipeline with the choices of one moment."""

    pipeline: Pipeline
    settings: Settings
    edits: HandEdits


@dataclass(frozen=True, slots=True, kw_only=True)
class Selection:
    """What the views show in detail.

    Attributes
    ----------
    bouton : int or None
        Id of a bouton.
    trial, pulse : int or None
        From 1.
    """

    bouton: int | None = None
    trial: int | None = None
    pulse: int | None = None


class AnalysisModel:
    """State that all views of one analysis share.

    Signals
    -------
    recording_changed
        Another movie or protocol; everything measured is gone.
    settings_changed, edits_changed
        A choice, or a change by hand; what was measured may be stale.
    traced_changed
        New footprints and traces; what is measured of them follows.
    measured_changed
        New results.
    summary_changed
        More is known of the whole axon; all else stays.
    selection_changed
        Another bouton, trial or pulse.
    """

    recording_changed = Signal()
    settings_changed = Signal()
    edits_changed = Signal()
    traced_changed = Signal()
    measured_changed = Signal()
    summary_changed = Signal()
    selection_changed = Signal()

    def __init__(self) -> None:
        self._pipeline: Pipeline | None = None
        self._settings = Settings()
        self._edits = HandEdits()
        self._undone: list[HandEdits] = []
        self._done: list[HandEdits] = []
        self._traced: Traced | None = None
        self._measured: Measured | None = None
        self._tables: dict[str, pd.DataFrame] = {}
        self._summary: dict[str, Any] | None = None
        self._selection = Selection()

    # recording

    @property
    def movie(self) -> Movie | None:
        """The recording, once chosen."""
        return None if self._pipeline is None else self._pipeline.movie

    @property
    def protocol(self) -> Protocol | None:
        """When the axon was stimulated, once known."""
        return None if self._pipeline is None else self._pipeline.protocol

    @property
    def pipeline(self) -> Pipeline | None:
        """The steps of the analysis with what is known of them."""
        return self._pipeline

    def open(
        self,
        movie: Movie,
        protocol: Protocol,
        *,
        boutons: str | Path | None = None,
        axon: str | Path | NDArray[np.float64] | None = None,
        edits: HandEdits | None = None,
    ) -> None:
        """Take a recording, with edits by hand where they were saved; edits and results of another one are dropped."""
        same_movie = self.movie is movie
        self._pipeline = Pipeline(movie, protocol, boutons=boutons, axon=axon)
        self._traced = None
        self._measured = self._summary = None
        self._tables = {}
        if edits is not None or not same_movie:
            self._edits, self._done, self._undone = edits or HandEdits(), [], []
        self._selection = Selection()
        self.recording_changed.emit()

    def close(self) -> None:
        """Let go of the recording, its edits and results."""
        self._pipeline = self._traced = self._measured = self._summary = None
        self._tables = {}
        self._edits, self._done, self._undone = HandEdits(), [], []
        self._selection = Selection()
        self.recording_changed.emit()

    def draw_axon(self, path_px: NDArray[np.float64] | None) -> None:
        """Take another axon path, (k, 2) in px; None takes it away."""
        if self._pipeline is None:
            return
        self._pipeline.axon = path_px
        self.settings_changed.emit()

    # choices

    @property
    def settings(self) -> Settings:
        """Every choice."""
        return self._settings

    @settings.setter
    def settings(self, settings: Settings) -> None:
        if settings != self._settings:
            self._settings = settings
            self.settings_changed.emit()

    def choose(self, step: str, **choices: Any) -> None:
        """Change some settings of one step, for example ``choose("calls", threshold_sd=3.0)``.

        Raises
        ------
        ValidationError
            If a value is out of range.
        """
        self.settings = self._with_choices(step, **choices)

    def _with_choices(self, step: str, **choices: Any) -> Settings:
        content = self._settings.model_dump()
        content[step] |= choices
        return Settings.model_validate(content)

    def set_threshold(self, threshold_sd: float) -> None:
        """Call the releases anew at another threshold, at once; everything else stays."""
        settings = self._with_choices("calls", threshold_sd=threshold_sd, threshold_rule="sd")
        measured, calls = self._measured, settings.calls
        if measured is None:
            self.settings = settings
            return
        if settings == self._settings and calls == measured.settings.calls:
            return
        counts = count_releases(measured.amplitudes, measured.release.axon, settings=calls)
        # Both at once: in between, the results would be told to be stale.
        self._settings = settings
        self._measured = replace(
            measured, counts=counts, settings=measured.settings.model_copy(update={"calls": calls})
        )
        self._tables = {name: table for name, table in self._tables.items() if name not in _WITH_CALLS}
        self.settings_changed.emit()
        self.measured_changed.emit()

    # edits by hand

    @property
    def edits(self) -> HandEdits:
        """Changes by hand."""
        return self._edits

    def edit(self, edits: HandEdits) -> None:
        """Take changes by hand; the state before can be had back."""
        if edits != self._edits:
            self._done.append(self._edits)
            self._undone = []
            self._edits = edits.following(self._edits)
            self.edits_changed.emit()

    @property
    def suspected_trials(self) -> tuple[int, ...]:
        """Trials, from 1, in which a stimulus seems to have reached no bouton and which were not left out yet."""
        return () if self._measured is None else suspected_trials(self._measured, self._edits)

    def exclude_suspected_trials(self) -> None:
        """Leave out the trials in which a stimulus seems to have reached no bouton; can be undone."""
        if self._measured is not None:
            self.edit(exclude_suspected(self._edits, self._measured))

    @property
    def can_undo(self) -> bool:
        """Whether there is a change by hand to take back."""
        return bool(self._done)

    @property
    def can_redo(self) -> bool:
        """Whether there is a change to make again."""
        return bool(self._undone)

    def undo(self) -> None:
        """Take the last change by hand back."""
        if self._done:
            self._undone.append(self._edits)
            self._edits = self._done.pop().following(self._edits)
            self.edits_changed.emit()

    def redo(self) -> None:
        """Make the last change that was taken back again."""
        if self._undone:
            self._done.append(self._edits)
            self._edits = self._undone.pop().following(self._edits)
            self.edits_changed.emit()

    # results

    def sites(self) -> Sites | None:
        """Return where boutons are now: as found last, corrected by hand; None before they were looked for."""
        return None if self._pipeline is None else self._pipeline.sites(self._settings, edits=self._edits)

    @property
    def traced(self) -> Traced | None:
        """Footprints and traces, which may be newer than what is measured of them."""
        return self._traced

    def accept_traces(self, request: Request, traced: Traced) -> bool:
        """Take traces unless the recording or the edits have changed meanwhile; tell whether they were taken."""
        if request.pipeline is not self._pipeline or request.edits != self._edits:
            return False
        self._traced = traced
        self.traced_changed.emit()
        return True

    @property
    def measured(self) -> Measured | None:
        """What was measured last."""
        return self._measured

    @property
    def stale(self) -> bool:
        """Whether choices, edits or the axon's course have changed since."""
        measured = self._measured
        return measured is not None and (
            measured.settings != self._settings
            or measured.edits != self._edits
            or (self._pipeline is not None and measured.axon is not self._pipeline.axon)
        )

    def request(self) -> Request:
        """Say what is to be computed now.

        Raises
        ------
        InputError
            If there is no recording yet.
        """
        if self._pipeline is None:
            raise InputError("There is no recording yet: choose a movie and give the stimulus times first.")
        return Request(pipeline=self._pipeline, settings=self._settings, edits=self._edits)

    def accept(
        self,
        request: Request,
        measured: Measured,
        *,
        tables: dict[str, pd.DataFrame] | None = None,
        summary: dict[str, Any] | None = None,
    ) -> bool:
        """Take what was measured, unless another recording was opened meanwhile; tell whether it was taken.

        Its `tables_of` and `summarise` may come with it, where they were made elsewhere; else each is made when it is
        asked for.
        """
        if request.pipeline is not self._pipeline:
            return False
        self._take(measured, tables or {}, summary)
        return True

    def _take(self, measured: Measured, tables: dict[str, pd.DataFrame], summary: dict[str, Any] | None) -> None:
        self._measured = measured
        self._summary = summary
        if self._traced is None or self._traced.places is not measured.places:
            self._traced = Traced(
                settings=measured.settings,
                edits=measured.edits,
                recording=measured.recording,
                places=measured.places,
                f=measured.f,
                axon=measured.axon,
            )
            self.traced_changed.emit()
        self._tables = dict(tables)
        if self._selection.bouton not in measured.places.bouton:
            first = int(measured.places.bouton[0]) if len(measured.places.bouton) else None
            self._selection = replace(self._selection, bouton=first)
        self.measured_changed.emit()

    def table(self, name: str) -> pd.DataFrame:
        """Return a table: `boutons`, `pulses`, `responses`, `spontaneous`, `trials`, `trains`, `intervals`, `recovery`.

        Raises
        ------
        InputError
            If nothing was measured yet.
        """
        if self._measured is None:
            raise InputError("Nothing was measured yet: run the analysis first.")
        if name not in self._tables:
            self._tables[name] = _TABLES[name](self._measured)
        return self._tables[name]

    def summary(self) -> dict[str, Any]:
        """Return the results of the whole axon, as the data dictionary describes them.

        Raises
        ------
        InputError
            If nothing was measured yet.
        """
        if self._measured is None:
            raise InputError("Nothing was measured yet: run the analysis first.")
        if self._summary is None:  # a threshold changes nothing in it
            self._summary = summarise(self._measured)
        return self._summary

    def accept_selection(self, measured: Measured, selection: dict[str, Any]) -> None:
        """Take into the summary what the detection would have missed, unless boutons were measured anew meanwhile."""
        if self._measured is not None and measured.release is self._measured.release:
            self._summary = {**self.summary(), "selection": selection}
            self.summary_changed.emit()

    def result(self) -> AnalysisResult:
        """Put together all tables, arrays and provenance, as the command line writes them.

        Raises
        ------
        InputError
            If nothing was measured yet, or choices have changed since.
        """
        if self._measured is None or self._pipeline is None:
            raise InputError("Nothing was measured yet: run the analysis first.")
        if self.stale:
            raise InputError("Settings or boutons have changed since the analysis: run it again first.")
        return put_together(self._measured, pipeline=self._pipeline)

    # selection

    @property
    def selection(self) -> Selection:
        """What the views show in detail."""
        return self._selection

    def select(self, **what: int | None) -> None:
        """Select a bouton, trial or pulse, for example ``select(bouton=3)``."""
        selection = replace(self._selection, **what)
        if selection != self._selection:
            self._selection = selection
            self.selection_changed.emit()

    def step_bouton(self, by: int) -> None:
        """Select the next or previous bouton."""
        if self._measured is not None and len(self._measured.places.bouton):
            ids = self._measured.places.bouton
            now = np.flatnonzero(ids == self._selection.bouton)
            at = int(now[0]) + by if now.size else 0
            self.select(bouton=int(ids[np.clip(at, 0, len(ids) - 1)]))

    def step_trial(self, by: int) -> None:
        """Select the next or previous trial."""
        if self._measured is not None:
            n_trials = len(self._measured.timing.stimulus_s)
            self.select(trial=int(np.clip((self._selection.trial or 1 - by) + by, 1, n_trials)))

    def row(self) -> int | None:
        """Index of the selected bouton in arrays of `measured`."""
        if self._measured is None or self._selection.bouton is None:
            return None
        at = np.flatnonzero(self._measured.places.bouton == self._selection.bouton)
        return int(at[0]) if at.size else None


def follow_axon(
    request: Request, clicks: NDArray[np.float64], *, progress: Progress | None = None
) -> NDArray[np.float64]:
    """Trace the axon through clicked places, (k, 2) in px, along its light in the mean image."""
    pipeline, settings = request.pipeline, request.settings
    recording = pipeline.look(settings, steps=StepProgress(progress, shares={"light": 1.0, "drift": 2.0}))
    width_px = settings.detection.bouton_um / recording.pixel_um
    return trace_axon(recording.optics.mean_image, clicks, width_px=width_px)


def trace(request: Request, *, progress: Progress | None = None) -> Traced:
    """Run the steps of a request as far as the traces; `compute` goes on from there."""
    return request.pipeline.trace(request.settings, edits=request.edits, progress=progress)


def compute(request: Request, *, progress: Progress | None = None) -> Measured:
    """Run the steps of a request that are not known yet."""
    return request.pipeline.measure(request.settings, edits=request.edits, progress=progress)


def tables_of(measured: Measured) -> dict[str, pd.DataFrame]:
    """Make all tables that `AnalysisModel.table` can be asked for; may run anywhere."""
    return {name: make(measured) for name, make in _TABLES.items()}
