"""Long work off the GUI thread: one job at a time for each analysis, with progress, cancel, and errors as sentences."""

from __future__ import annotations

import time
from collections.abc import Callable
from dataclasses import dataclass
from typing import Any
from weakref import WeakKeyDictionary, WeakMethod, ref

from napari.qt.threading import create_worker
from napari.utils import notifications
from qtpy.compat import isalive
from qtpy.QtCore import QObject, Signal
from qtpy.QtWidgets import QHBoxLayout, QLabel, QProgressBar, QPushButton, QSizePolicy, QWidget

from ..analysis.model import AnalysisModel, Request, compute, tables_of
from ..analysis.pipeline import Measured
from ..analysis.progress import Progress
from ..analysis.summary import summarise
from ..errors import AnalysisWarning, InputError

Work = Callable[[Progress], Any]
"""Work for another thread: given a progress callback, from which it is also cancelled."""

ANALYSIS = "analysis"
_PERIOD_S = 0.1  # progress is shown no more often


class Cancelled(Exception):
    """Raised inside the progress callback of work that nobody wants any more."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Outcome:
    """How a job ended: with a value or with an error."""

    value: Any = None
    error: Exception | None = None


@dataclass(eq=False, slots=True, kw_only=True)
class _Job:
    kind: str
    words: str
    work: Work
    on_done: Callable[[Any], object]
    worker: Any = None
    outcome: Outcome | None = None
    told_s: float = 0.0


class Runner(QObject):
    """Runs the long work of one analysis, one job after the other.

    A job of the same kind takes the place of one that waits, and ends one that runs: its answer is no longer wanted.

    Signals
    -------
    changed
        A job has begun or ended.
    progressed : (int, int)
        Done and total of the running job; comes on the GUI thread.
    failed : str
        One sentence on what went wrong.
    """

    changed = Signal()
    progressed = Signal(int, int)
    failed = Signal(str)

    def __init__(self, model: AnalysisModel) -> None:
        super().__init__()
        self._model = ref(model)  # kept for as long as the model lives, so it must not keep the model
        self._running: _Job | None = None
        self._waiting: dict[str, _Job] = {}

    @property
    def busy(self) -> bool:
        """Whether a job runs."""
        return self._running is not None

    @property
    def words(self) -> str:
        """What the running job does."""
        return "" if self._running is None else self._running.words

    @property
    def kind(self) -> str:
        """Which kind of job runs."""
        return "" if self._running is None else self._running.kind

    def run(self, work: Work, on_done: Callable[[Any], object], *, words: str, kind: str) -> None:
        """Run `work` in another thread and hand its value to `on_done` on this one.

        Parameters
        ----------
        work : callable
            Called with a progress callback, (done, total), which raises `Cancelled` when it is to stop. Must touch
            neither widgets nor layers.
        on_done : callable
            Called with the value. Not called after an error or a cancel, nor if it belongs to a widget that is gone.
        words : str
            What is being done, for the person who waits.
        kind : str
            Jobs of the same kind replace one another.
        """
        job = _Job(kind=kind, words=words, work=work, on_done=_if_alive(on_done))
        if self._running is None:
            self._start(job)
            return
        self._waiting[kind] = job
        if self._running.kind == kind:
            self._running.worker.quit()

    def analyse(self, request: Request, on_done: Callable[[Measured], object] | None = None) -> None:
        """Compute what is asked for and give it to the model; then call `on_done` if the model took it."""
        after = None if on_done is None else _if_alive(on_done)

        def work(progress: Progress) -> tuple[Measured, dict[str, Any], dict[str, Any]]:
            measured = compute(request, progress=progress)
            return measured, tables_of(measured), summarise(measured)

        def take(outcome: tuple[Measured, dict[str, Any], dict[str, Any]]) -> None:
            model, (measured, tables, summary) = self._model(), outcome
            if model is None or not model.accept(request, measured, tables=tables, summary=summary):
                return
            if after is not None:
                after(measured)

        self.run(work, take, words="Analysing", kind=ANALYSIS)

    def cancel(self) -> None:
        """Stop the running job at its next step and forget those that wait."""
        self._waiting.clear()
        if self._running is not None:
            self._running.worker.quit()

    def _start(self, job: _Job) -> None:
        self._running = job

        def task() -> None:
            try:
                job.outcome = Outcome(value=job.work(lambda done, total: self._advance(job, done, total)))
            except Cancelled:
                return
            except Exception as error:  # noqa: BLE001
                job.outcome = Outcome(error=error)

        task.__qualname__ = job.words
        job.worker = create_worker(task, _start_thread=False, _ignore_errors=True)
        job.worker.warned.connect(self._warn)
        job.worker.finished.connect(self._end)  # `returned` does not come after a cancel
        job.worker.start()
        self.changed.emit()

    def _advance(self, job: _Job, done: int, total: int) -> None:
        """Tell how far a job is, and end it where it is no longer wanted; runs in the job's thread."""
        if job.worker.abort_requested:
            raise Cancelled
        now = time.monotonic()
        if now - job.told_s > _PERIOD_S:
            job.told_s = now
            self.progressed.emit(int(done), int(total))

    def _warn(self, warning: tuple[Any, ...]) -> None:
        message, category = warning[0], warning[1]
        if issubclass(category, AnalysisWarning):
            notifications.show_warning(str(message))

    def _end(self) -> None:
        job, self._running = self._running, None
        if self._waiting:
            self._start(self._waiting.pop(next(iter(self._waiting))))
        else:
            self.changed.emit()
        if job is None or job.outcome is None or job.worker.abort_requested:
            return
        if job.outcome.error is not None:
            self._tell(job.outcome.error)
        else:
            job.on_done(job.outcome.value)

    def _tell(self, error: Exception) -> None:
        if isinstance(error, InputError):
            self.failed.emit(str(error))
            notifications.show_error(str(error))
        else:
            self.failed.emit(f"{type(error).__name__}: {error}")
            notifications.notification_manager.receive_error(type(error), error, error.__traceback__)


_RUNNERS: WeakKeyDictionary[AnalysisModel, Runner] = WeakKeyDictionary()


def runner_of(model: AnalysisModel) -> Runner:
    """Return the runner of one analysis."""
    runner = _RUNNERS.get(model)
    if runner is None:
        runner = _RUNNERS[model] = Runner(model)
    return runner


def run_analysis_step(
    model: AnalysisModel, request: Request | None = None, on_done: Callable[[Measured], object] | None = None
) -> None:
    """Analyse in another thread what is asked for, else what the model holds now; a fault becomes a notification."""
    try:
        request = request or model.request()
    except InputError as error:
        notifications.show_error(str(error))
        return
    runner_of(model).analyse(request, on_done)


class ProgressRow(QWidget):
    """What is being done, how far it is, and a button to stop it; hidden while nothing is done."""

    def __init__(self, runner: Runner, parent: QWidget | None = None) -> None:
        super().__init__(parent)
        self._runner = runner
        self.words = QLabel()
        self.bar = QProgressBar()
        self.bar.setTextVisible(False)
        self.bar.setMaximumHeight(10)
        self.bar.setSizePolicy(QSizePolicy.Policy.Expanding, QSizePolicy.Policy.Fixed)
        self.button = QPushButton("Cancel")
        self.button.setToolTip("Stop at the next step. What was measured before stays.")
        self.button.clicked.connect(self._cancel)
        row = QHBoxLayout(self)
        row.setContentsMargins(0, 0, 0, 0)
        row.addWidget(self.words)
        row.addWidget(self.bar, 1)
        row.addWidget(self.button)
        runner.changed.connect(self._show)
        runner.progressed.connect(self._advance)
        self._show()

    def _show(self) -> None:
        self.words.setText(self._runner.words)
        self.bar.setRange(0, 0)
        self.button.setEnabled(True)
        self.setVisible(self._runner.busy)

    def _advance(self, done: int, total: int) -> None:
        if self.button.isEnabled():
            self.bar.setRange(0, total)
            self.bar.setValue(done)

    def _cancel(self) -> None:
        self.button.setEnabled(False)
        self.words.setText("Stopping")
        self._runner.cancel()


def _if_alive(call: Callable[[Any], object]) -> Callable[[Any], object]:
    """Wrap a method of a widget so that it is not called once the widget is gone."""
    owner = getattr(call, "__self__", None)
    if not isinstance(owner, QObject):
        return call
    method = WeakMethod(call)

    def guarded(value: Any) -> None:
        there = method()
        if there is not None and isalive(there.__self__):  # type: ignore[attr-defined]
            there(value)

    return guarded
