"""The boutons of a finished analysis, as planning needs them."""

from __future__ import annotations

import csv
import math
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any

from ..errors import InputError, SavedAnalysisError
from ..quanta import PlannedBouton

if TYPE_CHECKING:
    from collections.abc import Mapping

    import pandas as pd

_TABLE = "boutons.csv"
_COLUMNS = ("bouton", "trials", "p_release", "n_sites", "snr", "q_cv", "flags")
_CERTAIN = 0.995  # a bouton that never failed may still fail


@dataclass(frozen=True, slots=True, kw_only=True)
class MeasuredBouton:
    """A bouton to plan for.

    Attributes
    ----------
    bouton : int or None
        Its id; None where it was described, not measured.
    trials : int or None
        Trials that were done.
    planned : PlannedBouton or None
        What it is like; None where that is not known.
    reason : str
        Why it is not; empty where it is.
    """

    bouton: int | None
    trials: int | None
    planned: PlannedBouton | None
    reason: str


def read_measured_boutons(
    path: str | Path, *, q_over_noise: float | None, q_cv: float | None
) -> tuple[MeasuredBouton, ...]:
    """Read the boutons of an analysis.

    Parameters
    ----------
    path : str or Path
        Folder of results, or a file in it.
    q_over_noise, q_cv : float or None
        Take these for every bouton instead of what was measured.

    Raises
    ------
    SavedAnalysisError
        If there is no table of boutons, a column is missing, or a cell holds no number; the message names it.
    """
    path = Path(path)
    table = (path if path.is_dir() else path.parent) / _TABLE
    if not path.exists() or not table.is_file():
        raise SavedAnalysisError(f"{path} holds no {_TABLE}: give the folder of results that `analyse` wrote.")
    with table.open(encoding="utf-8", newline="") as file:
        reader = csv.DictReader(file)
        rows = list(reader)
        missing = [name for name in _COLUMNS if name not in (reader.fieldnames or ())]
    if missing:
        raise SavedAnalysisError(f"{table} lacks the columns {', '.join(missing)}: analyse the recording again.")
    if not rows:
        raise SavedAnalysisError(f"{table} holds no bouton, so there is nothing to plan for.")
    return tuple(
        _measured(row, where=f"{table}, row {number}", q_over_noise=q_over_noise, q_cv=q_cv)
        for number, row in enumerate(rows, start=2)
    )


def measured_boutons(
    boutons: pd.DataFrame, *, q_over_noise: float | None, q_cv: float | None
) -> tuple[MeasuredBouton, ...]:
    """Take the boutons of the table `boutons` of an analysis that is at hand.

    Parameters and errors otherwise as in `read_measured_boutons`.

    Raises
    ------
    InputError
        If it holds no bouton.
    """
    if not len(boutons):
        raise InputError("No bouton was found, so there is nothing to plan for.")
    cells = boutons[list(_COLUMNS)].astype(object)
    rows = (dict(zip(_COLUMNS, row, strict=True)) for row in cells.where(cells.notna(), None).to_numpy())
    return tuple(
        _measured(row, where=f"boutons, row {number}", q_over_noise=q_over_noise, q_cv=q_cv)
        for number, row in enumerate(rows, start=1)
    )


def _measured(row: Mapping[str, Any], *, where: str, q_over_noise: float | None, q_cv: float | None) -> MeasuredBouton:
    numbers = {name: _number(row, name, where=where) for name in _COLUMNS[:-1]}
    bouton, p_release, n_sites = numbers["bouton"], numbers["p_release"], numbers["n_sites"]
    if not (bouton >= 1 and bouton.is_integer()):
        raise SavedAnalysisError(f"{where}, column bouton: expected a whole number from 1 (given {row['bouton']!r}).")
    if p_release < 0.0 or p_release > 1.0:
        raise SavedAnalysisError(f"{where}, column p_release: must lie between 0 and 1 (given {p_release:g}).")
    q_over_noise = numbers["snr"] if q_over_noise is None else q_over_noise
    q_cv = numbers["q_cv"] if q_cv is None else q_cv
    planned, reason = None, ""
    if "silent" in (row["flags"] or "").split(";") or p_release == 0.0:
        reason = "no release seen"
    elif not all(map(math.isfinite, (p_release, n_sites, q_over_noise, q_cv))):
        reason = "no quantal fit"
    else:
        try:
            one = PlannedBouton(n_sites=int(n_sites), p_site=0.5, q_over_noise=q_over_noise, q_cv=q_cv)
        except InputError as error:
            raise SavedAnalysisError(f"{where}: {error}") from error
        planned = one.releasing(min(p_release, _CERTAIN))
    trials = numbers["trials"]
    return MeasuredBouton(
        bouton=int(bouton), trials=int(trials) if math.isfinite(trials) else None, planned=planned, reason=reason
    )


def _number(row: Mapping[str, Any], name: str, *, where: str) -> float:
    cell = row[name]
    try:
        return math.nan if cell in (None, "") else float(cell)
    except ValueError as error:
        raise SavedAnalysisError(f"{where}, column {name}: {cell!r} is not a number.") from error
