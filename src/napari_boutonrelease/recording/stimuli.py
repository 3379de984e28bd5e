"""When the axon was stimulated: a regular train of trials, or a table of pulse times."""

from __future__ import annotations

import csv
import math
from dataclasses import dataclass, field
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from ..errors import ProtocolError

if TYPE_CHECKING:
    from collections.abc import Mapping, Sequence

_COLUMNS = ("trial", "pulse", "time_s")


@dataclass(frozen=True, slots=True, kw_only=True)
class RegularStimuli:
    """Trials at equal intervals, each of equally spaced pulses.

    Attributes
    ----------
    first_s : float
        First pulse of the first trial, from the start of the movie; of every trial, from the start of its own file,
        where a trial is a file. In s, at least 0.
    trials : int
        Number of trials, at least 1.
    trial_interval_s : float or None
        From the first pulse of one trial to the first pulse of the next, in s. Not used where a trial is a file.
    pulses : int
        Pulses in each trial, at least 1.
    pulse_interval_s : float or None
        From pulse to pulse, in s; needed with 2 pulses or more.

    Raises
    ------
    ProtocolError
        If a value is out of range, missing, or the pulses of one trial reach into the next.
    """

    first_s: float
    trials: int
    trial_interval_s: float | None
    pulses: int
    pulse_interval_s: float | None

    def __post_init__(self) -> None:
        check_value("stimuli", "first_s", self.first_s, zero=True)
        check_value("stimuli", "trial_interval_s", self.trial_interval_s)
        check_value("stimuli", "pulse_interval_s", self.pulse_interval_s)
        for key, count in (("trials", self.trials), ("pulses", self.pulses)):
            if count < 1:
                raise ProtocolError(f"[stimuli] {key} must be 1 or more (given {count}).")
        if self.pulses > 1 and self.pulse_interval_s is None:
            raise ProtocolError(
                f"[stimuli] pulse_interval_s is missing: with pulses = {self.pulses} it must be given, in s."
            )
        if self.trials > 1 and self.trial_interval_s is not None and self.train_s >= self.trial_interval_s:
            raise ProtocolError(
                f"[stimuli] the {self.pulses} pulses of a trial last {self.train_s:g} s, but the next trial begins "
                f"after trial_interval_s = {self.trial_interval_s:g}: check pulses and both intervals."
            )

    @property
    def train_s(self) -> float:
        """From the first to the last pulse of a trial, in s."""
        return (self.pulses - 1) * (self.pulse_interval_s or 0.0)


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class StimulusTable:
    """Pulse times one by one, sorted by trial and pulse.

    Attributes
    ----------
    trial, pulse : (n_stimuli,) ndarray of int
        Numbers from 1; every trial has at least one pulse.
    time_s : (n_stimuli,) ndarray of float
        From the start of the movie, or of the trial's own file where a trial is a file; in s.
    source : str
        Where the table comes from, for messages.

    Raises
    ------
    ProtocolError
        If the table is empty or contradicts itself. Rows are counted from 1, without the header.
    """

    trial: NDArray[np.int64]
    pulse: NDArray[np.int64]
    time_s: NDArray[np.float64]
    source: str = field(default="table")

    def __post_init__(self) -> None:
        trial = np.atleast_1d(np.asarray(self.trial, dtype=np.int64))
        pulse = np.atleast_1d(np.asarray(self.pulse, dtype=np.int64))
        time_s = np.atleast_1d(np.asarray(self.time_s, dtype=np.float64))
        if not trial.shape == pulse.shape == time_s.shape or trial.ndim != 1:
            raise ProtocolError(
                f"{self.source}: trial, pulse and time_s must be columns of one length "
                f"(given {trial.shape}, {pulse.shape} and {time_s.shape})."
            )
        _check_table(trial, pulse, time_s, rows=range(1, len(trial) + 1), source=self.source)
        order = np.lexsort((pulse, trial))
        for name, values in (("trial", trial), ("pulse", pulse), ("time_s", time_s)):
            ordered = values[order]
            ordered.flags.writeable = False
            object.__setattr__(self, name, ordered)

    def __eq__(self, other: object) -> bool:
        if not isinstance(other, StimulusTable):
            return NotImplemented
        return all(np.array_equal(getattr(self, key), getattr(other, key)) for key in _COLUMNS)

    __hash__ = None  # type: ignore[assignment]

    @property
    def trials(self) -> int:
        """Number of trials."""
        return int(self.trial.max())

    @property
    def pulses(self) -> int:
        """Largest number of a pulse in any trial."""
        return int(self.pulse.max())


def read_stimulus_table(path: Path) -> StimulusTable:
    """Read pulse times from a CSV file with the columns trial, pulse and time_s, in any order.

    Raises
    ------
    ProtocolError
        If the file cannot be read or is not such a table; the message names line and column.
    """
    try:
        with path.open(encoding="utf-8-sig", newline="") as file:
            reader = csv.reader(file)
            header = [title.strip() for title in next(reader, [])]
            lines = [(reader.line_num, row) for row in reader if any(cell.strip() for cell in row)]
    except OSError as error:
        raise ProtocolError(
            f"[stimuli] times: {path} cannot be opened ({error.strerror or error}): give its path relative to the "
            "protocol's folder."
        ) from error
    except (UnicodeDecodeError, csv.Error) as error:
        raise ProtocolError(
            f"[stimuli] times: {path} is not a CSV text file ({error}): save it as CSV, UTF-8."
        ) from error
    missing = [column for column in _COLUMNS if column not in header]
    if missing:
        raise ProtocolError(
            f"{path.name} has no column {', '.join(missing)}: its first line must name the columns "
            f"trial,pulse,time_s with commas between them (found {','.join(header) or 'nothing'!r})."
        )
    twice = [column for column in _COLUMNS if header.count(column) > 1]
    if twice:
        raise ProtocolError(f"{path.name} has two columns {twice[0]}: keep one.")
    place = {column: header.index(column) for column in _COLUMNS}
    table = [[_cell(row, place, column, line, path.name) for column in _COLUMNS] for line, row in lines]
    trial, pulse, time_s = np.asarray(table, dtype=np.float64).reshape(-1, 3).T
    _check_table(
        trial.astype(np.int64), pulse.astype(np.int64), time_s, rows=[line for line, _ in lines], source=path.name
    )
    return StimulusTable(
        trial=trial.astype(np.int64), pulse=pulse.astype(np.int64), time_s=time_s.copy(), source=str(path)
    )


def stimulus_table_text(table: StimulusTable) -> str:
    """Return the table as CSV text that reads back the same."""
    rows = zip(table.trial.tolist(), table.pulse.tolist(), table.time_s.tolist(), strict=True)
    return "\n".join([",".join(_COLUMNS), *(f"{trial},{pulse},{time_s!r}" for trial, pulse, time_s in rows), ""])


def check_value(section: str, key: str, value: float | None, *, zero: bool = False) -> None:
    """Raise `ProtocolError` naming the key unless `value` is None or a positive (with `zero`: not negative) number."""
    if value is None or (math.isfinite(value) and (value > 0 or (zero and value == 0))):
        return
    wanted = "0 or more" if zero else "greater than 0"
    raise ProtocolError(f"[{section}] {key} must be {wanted} (given {value:g}).")


def _cell(row: Sequence[str], place: Mapping[str, int], column: str, line: int, name: str) -> float:
    text = row[place[column]].strip() if place[column] < len(row) else ""
    where = f"{name}, line {line}, column {column}"
    try:
        number = float(text)
    except ValueError:
        raise ProtocolError(f"{where}: {text!r} is not a number." if text else f"{where} is empty.") from None
    if not math.isfinite(number):
        raise ProtocolError(f"{where}: {text!r} is not a finite number.")
    if column != "time_s" and (number != int(number) or number < 1):
        raise ProtocolError(f"{where}: {text!r} must be a whole number, counted from 1.")
    return number


def _check_table(
    trial: NDArray[np.int64], pulse: NDArray[np.int64], time_s: NDArray[np.float64], *, rows: Sequence[int], source: str
) -> None:
    if not trial.size:
        raise ProtocolError(f"{source} holds no pulse: give a row trial,pulse,time_s for each.")
    for column, wrong, wanted in (
        ("trial", trial < 1, "1 or more"),
        ("pulse", pulse < 1, "1 or more"),
        ("time_s", ~(np.isfinite(time_s) & (time_s >= 0)), "0 or more"),
    ):
        if wrong.any():
            k = int(np.argmax(wrong))
            value = {"trial": trial, "pulse": pulse, "time_s": time_s}[column][k]
            raise ProtocolError(f"{source}, line {rows[k]}, column {column}: must be {wanted} (given {value:g}).")
    absent = sorted(set(range(1, min(int(trial.max()), trial.size + 1) + 1)) - set(trial.tolist()))
    if absent:
        raise ProtocolError(f"{source} has no pulse of trial {absent[0]}: number the trials 1, 2, 3 without gaps.")
    order = np.lexsort((pulse, trial))
    for earlier, later in zip(order[:-1].tolist(), order[1:].tolist(), strict=True):
        if trial[earlier] != trial[later]:
            continue
        if pulse[earlier] == pulse[later]:
            raise ProtocolError(
                f"{source}, line {rows[later]}: trial {trial[later]}, pulse {pulse[later]} is already on line "
                f"{rows[earlier]}: keep one."
            )
        if time_s[later] <= time_s[earlier]:
            raise ProtocolError(
                f"{source}, line {rows[later]}, column time_s: pulse {pulse[later]} of trial {trial[later]} is at "
                f"{time_s[later]:g} s, not after pulse {pulse[earlier]} at {time_s[earlier]:g} s "
                f"(line {rows[earlier]})."
            )
