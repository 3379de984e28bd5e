"""Many recordings as one call: what is done stays done, what fails does not stop the rest."""

from __future__ import annotations

import dataclasses
from collections.abc import Callable, Generator, Iterator, Sequence
from contextlib import closing, contextmanager, nullcontext
from dataclasses import dataclass
from datetime import UTC, datetime
from pathlib import Path
from typing import TYPE_CHECKING, Any

from ..analysis.savefile import package_versions
from ..analysis.settings import Settings
from ..errors import InputError
from .cluster import analyse_on_cluster, connected
from .journal import Journal, opened_journal
from .manifest import Manifest, read_manifest
from .processes import Ending, analyse_here, available_cores
from .recordings import Recording, created, difference_to_results, needs_analysis, plan_recordings
from .study import check_study_folder, study_tables, write_study

if TYPE_CHECKING:
    import pandas as pd

    Progress = Callable[[int, int], None]

FORMAT_VERSION = 1


@dataclass(frozen=True, slots=True, kw_only=True)
class BatchOutcome:
    """What became of a study.

    Attributes
    ----------
    folder : Path
        Folder of the study's tables.
    study : DataFrame
        A row a bouton of every recording that is done, as in `study.csv`.
    recordings : DataFrame
        A row a recording of the manifest, as in `recordings.csv`.
    analysed : tuple of str
        Recordings that were analysed now; the others that are done were so before.
    workers : int
        Processes at a time; 0 on a cluster.
    """

    folder: Path
    study: pd.DataFrame
    recordings: pd.DataFrame
    analysed: tuple[str, ...]
    workers: int

    @property
    def failures(self) -> dict[str, str]:
        """Why each recording that failed did so."""
        failed = self.recordings[self.recordings["status"] == "failed"]
        return dict(zip(failed["recording"], failed["failure"], strict=True))

    def names(self, status: str) -> tuple[str, ...]:
        """Names of recordings that are `done`, `failed` or `skipped`."""
        return tuple(self.recordings.loc[self.recordings["status"] == status, "recording"])


class BatchInterrupted(KeyboardInterrupt):
    """The batch was interrupted from the keyboard; finished recordings and their tables are written.

    Attributes
    ----------
    outcome : BatchOutcome
        How far it came.
    """

    def __init__(self, outcome: BatchOutcome) -> None:
        super().__init__()
        self.outcome = outcome


def run_batch(
    manifest: str | Path,
    *,
    out: str | Path | None = None,
    settings: Settings | None = None,
    workers: int | None = None,
    scheduler: str | None = None,
    report: bool = True,
    overwrite: bool = False,
    progress: Progress | None = None,
) -> BatchOutcome:
    """Analyse every recording of a manifest, and put all boutons into one table.

    A recording whose results are there already, made from the same movie, protocol, files and settings, is not
    analysed again: after an interruption of any kind the same call goes on.

    Parameters
    ----------
    manifest : path
        CSV with a row a recording: columns `movie` and `protocol` and, if wanted, `boutons`, `axon`, `condition`,
        `out` and any others; paths start from its folder.
    out : path, optional
        Folder of the study's tables, below which the recordings' results go too. Where left out, tables go to
        `<manifest>.study` beside the manifest, and results to `<movie>.release` beside each movie.
    settings : Settings, optional
        Choices of every analysis; the defaults of `Settings` where left out.
    workers : int, optional
        Recordings analysed at a time, each in a process with one thread; the number of cores, where left out.
    scheduler : str, optional
        Address of a dask.distributed scheduler, whose workers are used instead; they must see the same files.
    report : bool
        Draw the report and the figures of each recording.
    overwrite : bool
        Analyse again, and replace, what was made from another movie, protocol or setting.
    progress : callable, optional
        Called with (done, total) recordings.

    Returns
    -------
    BatchOutcome

    Raises
    ------
    InputError
        Before any work: if the manifest, a row of it, the output folder or the scheduler cannot be used, or results
        differ and `overwrite` is false. What goes wrong with one recording later stands in the outcome.
    BatchInterrupted
        On Ctrl+C.

    Examples
    --------
    >>> outcome = run_batch("study.csv", out="study")  # doctest: +SKIP
    >>> outcome.study.groupby("condition")["p_release"].mean()  # doctest: +SKIP
    >>> outcome.failures  # doctest: +SKIP
    {'axon_07': 'axon_07.tif holds a single image; ...'}
    """
    if workers is not None and workers < 1:
        raise InputError(f"workers must be 1 or more (given {workers}).")
    if workers is not None and scheduler is not None:
        raise InputError("Give workers for this machine or a scheduler, not both: a cluster has its own workers.")
    settings = Settings() if settings is None else settings
    read = read_manifest(manifest)
    folder = read.path.with_name(f"{read.path.stem}.study") if out is None else Path(out)
    recordings = plan_recordings(read, settings=settings, report=report, under=None if out is None else folder)
    check_study_folder(folder, manifest=read, recordings=recordings, overwrite=overwrite)
    todo = [
        index
        for index, recording in enumerate(recordings)
        if needs_analysis(recording, manifest=read.path, overwrite=overwrite)
    ]
    n_workers = 0 if scheduler is not None else max(1, min(workers or available_cores(), len(todo)))
    jobs = [(index, recordings[index].job(overwrite=overwrite)) for index in todo]
    with _running(jobs, scheduler=scheduler, workers=n_workers) as running, opened_journal(folder) as journal:
        endings, interrupted = _collect(running, recordings, todo, journal=journal, progress=progress)
        standing = _standing(recordings, endings, todo)
        entries = journal.entries()
        study, table = study_tables(recordings, standing, manifest=read, folder=folder, journal=entries)
        provenance = _provenance(read, settings=settings, workers=n_workers, scheduler=scheduler, table=table)
        write_study(study, table, manifest=read, folder=folder, provenance=provenance)
    analysed = tuple(recordings[index].name for index in todo if standing[index].status == "done")
    outcome = BatchOutcome(folder=folder, study=study, recordings=table, analysed=analysed, workers=n_workers)
    if interrupted:
        raise BatchInterrupted(outcome)
    return outcome


@contextmanager
def _running(
    jobs: Sequence[tuple[int, dict[str, Any]]], *, scheduler: str | None, workers: int
) -> Iterator[Generator[Ending, None, None]]:
    """Have the jobs run; what is still running at the end is stopped."""
    with nullcontext() if scheduler is None or not jobs else connected(scheduler) as client:
        if client is None:
            endings = analyse_here(jobs, workers=max(1, workers))
        else:
            endings = analyse_on_cluster(jobs, client=client)
        with closing(endings):
            yield endings


def _collect(
    running: Generator[Ending, None, None],
    recordings: Sequence[Recording],
    todo: Sequence[int],
    *,
    journal: Journal,
    progress: Progress | None,
) -> tuple[dict[int, Ending], bool]:
    """Note each recording that ends; return how they ended, and whether the keyboard stopped it."""
    endings: dict[int, Ending] = {}
    before = len(recordings) - len(todo)
    try:
        if progress is not None:
            progress(before, len(recordings))
        for ending in running:
            recording = recordings[ending.index]
            if ending.status == "failed" and difference_to_results(recording) == "":
                # Somebody else finished it while we worked, on which our results were refused.
                ending = dataclasses.replace(ending, status="done", failure="", traceback="")
            endings[ending.index] = ending
            facts = {key: value for key, value in dataclasses.asdict(ending).items() if key != "index"}
            made = created(recording.folder)[0] if ending.status == "done" else None
            journal.add(recording=recording.name, row=recording.row.number, created=made, **facts)
            if progress is not None:
                progress(before + len(endings), len(recordings))
    except KeyboardInterrupt:
        running.close()
        return endings, True
    return endings, False


def _standing(recordings: Sequence[Recording], endings: dict[int, Ending], todo: Sequence[int]) -> dict[int, Ending]:
    """How each recording stands: as it ended, as it was before, or, where nothing was heard, as its folder says."""
    standing = {index: Ending(index=index, status="done") for index in range(len(recordings))}
    for index in todo:
        status = "done" if index not in endings and difference_to_results(recordings[index]) == "" else "skipped"
        standing[index] = endings.get(index, Ending(index=index, status=status))
    return standing


def _provenance(
    manifest: Manifest, *, settings: Settings, workers: int, scheduler: str | None, table: pd.DataFrame
) -> dict[str, Any]:
    return {
        "format": "boutonrelease batch",
        "format_version": FORMAT_VERSION,
        "created": datetime.now(UTC).isoformat(timespec="seconds"),
        "versions": package_versions(),
        "manifest": {
            "name": manifest.path.name,
            "path": str(manifest.path.resolve()),
            "sha256": manifest.sha256,
            "recordings": len(manifest.rows),
            "further_columns": list(manifest.further),
        },
        "settings": settings.model_dump(mode="json"),
        "workers": workers or None,
        "scheduler": scheduler,
        "counts": {status: int((table["status"] == status).sum()) for status in ("done", "failed", "skipped")},
    }
