"""The recordings that one window compares, and what came of it; outlives the dock that shows them."""

from __future__ import annotations

from dataclasses import dataclass, replace
from pathlib import Path
from typing import TYPE_CHECKING, Any
from weakref import WeakKeyDictionary

import numpy as np
from psygnal import Signal

from ..analysis.run import put_together
from ..comparison import compare_recordings, recording_from_result
from ..errors import InputError
from ..reports.facts import values
from ..reports.stored import read_recording, results_folder

if TYPE_CHECKING:
    from collections.abc import Sequence

    from ..analysis.measured import Measured
    from ..analysis.model import AnalysisModel
    from ..analysis.pipeline import Pipeline
    from ..analysis.progress import Progress
    from ..comparison import ComparedRecording, CompareSettings, Comparison


@dataclass(frozen=True, slots=True, kw_only=True)
class Entry:
    """One recording of the list.

    Attributes
    ----------
    name : str
        What it is called in tables and figures.
    folder : Path or None
        Its results; None for the analysis of this window.
    """

    name: str
    folder: Path | None


class Compared:
    """What is compared in one window.

    Signals
    -------
    entries_changed
        Another list of recordings.
    found
        A new comparison.
    """

    entries_changed = Signal()
    found = Signal()

    def __init__(self) -> None:
        self.entries: tuple[Entry, ...] = ()
        self.comparison: Comparison | None = None
        self.bouton: int | None = None
        self._compared: tuple[Entry, ...] = ()
        self._release: Any = None
        self._taken_away = False

    # the list

    @property
    def has_present(self) -> bool:
        """Whether the analysis of this window is in the list."""
        return any(entry.folder is None for entry in self.entries)

    def add_folder(self, path: str | Path) -> None:
        """Add the results in a folder, or beside an `analysis.json`.

        Raises
        ------
        InputError
            If there are none, or they are in the list.
        """
        folder = results_folder(path).resolve()
        if any(entry.folder == folder for entry in self.entries):
            raise InputError(f"{folder} is in the list already.")
        entry = Entry(name=self._free_name(folder.name.removesuffix(".release")), folder=folder)
        self._set((*self.entries, entry))

    def offer_present(self, name: str) -> None:
        """Put the analysis of this window first, unless it is in the list or was taken out of it."""
        if not self._taken_away:
            self.add_present(name)

    def add_present(self, name: str) -> None:
        """Put the analysis of this window first."""
        if not self.has_present:
            self._taken_away = False
            self._set((Entry(name=self._free_name(name), folder=None), *self.entries))

    def drop_present(self) -> None:
        """Take the analysis of this window out of the list, as there is none any more."""
        if self.has_present:
            self._set(tuple(entry for entry in self.entries if entry.folder is not None))

    def remove(self, index: int) -> None:
        """Take a recording out of the list."""
        self._taken_away |= self.entries[index].folder is None
        self._set((*self.entries[:index], *self.entries[index + 1 :]))

    def move(self, index: int, by: int) -> None:
        """Move a recording up or down; the comparison counts changes in the order of the list."""
        to = min(max(index + by, 0), len(self.entries) - 1)
        entries = list(self.entries)
        entries.insert(to, entries.pop(index))
        self._set(tuple(entries))

    def rename(self, index: int, name: str) -> None:
        """Call a recording something else; an empty name leaves the old one."""
        entries = list(self.entries)
        entries[index] = replace(entries[index], name=name.strip() or entries[index].name)
        self._set(tuple(entries))

    def _set(self, entries: tuple[Entry, ...]) -> None:
        if entries != self.entries:
            self.entries = entries
            self.entries_changed.emit()

    def _free_name(self, name: str) -> str:
        taken = {entry.name for entry in self.entries}
        tries = (name, *(f"{name} {number}" for number in range(2, len(taken) + 3)))
        return next(one for one in tries if one not in taken)

    # the comparison

    def take(self, comparison: Comparison, entries: tuple[Entry, ...], measured: Measured | None) -> None:
        """Keep a comparison, what was compared, and the analysis of this window as it was then."""
        self.comparison, self._compared = comparison, entries
        self._release = None if measured is None else measured.release
        self.bouton = None
        self.found.emit()

    def outdated(self, measured: Measured | None) -> bool:
        """Whether the list, or the analysis of this window, is no longer what was compared; calls do not count."""
        if self.comparison is None:
            return False
        present = any(entry.folder is None for entry in self._compared)
        release = None if measured is None else measured.release
        return self._compared != self.entries or (present and release is not self._release)

    def here(self, bouton: int | None) -> int | None:
        """Return the id that a compared bouton has in the analysis of this window; None where it is not there."""
        return self._other_id(bouton, "bouton", "bouton_there")

    def compared(self, bouton: int | None) -> int | None:
        """Return the id, in the first recording, of a bouton of this window; None where it was not matched."""
        return self._other_id(bouton, "bouton_there", "bouton")

    def _other_id(self, bouton: int | None, known: str, wanted: str) -> int | None:
        name = next((entry.name for entry in self._compared if entry.folder is None), None)
        if self.comparison is None or name is None or bouton is None:
            return None
        table = self.comparison.conditions
        mine = (table["recording"] == name).to_numpy(dtype=bool) & (values(table, known) == bouton)
        found = values(table, wanted)[mine]
        return int(found[0]) if found.size and np.isfinite(found[0]) else None


def compare(
    entries: Sequence[Entry],
    *,
    present: tuple[Measured, Pipeline] | None,
    settings: CompareSettings,
    progress: Progress,
) -> Comparison:
    """Read the recordings of a list and compare them; may run anywhere.

    Raises
    ------
    InputError
        If one cannot be read, or they cannot be compared.
    """
    progress(0, 0)
    recordings: list[ComparedRecording] = []
    for entry in entries:
        if entry.folder is not None:
            recordings.append(read_recording(entry.folder, name=entry.name))
        elif present is not None:
            measured, pipeline = present
            recordings.append(recording_from_result(put_together(measured, pipeline=pipeline), name=entry.name))
        progress(0, 0)
    return compare_recordings(recordings, settings=settings, progress=progress)


_COMPARED: WeakKeyDictionary[AnalysisModel, Compared] = WeakKeyDictionary()


def compared_of(model: AnalysisModel) -> Compared:
    """Return what the window of an analysis compares."""
    compared = _COMPARED.get(model)
    if compared is None:
        compared = _COMPARED[model] = Compared()
    return compared
