"""Tables as CSV: UTF-8, comma, decimal point, an empty cell where nothing is available."""

from __future__ import annotations

import csv
import math
from collections.abc import Callable, Collection
from typing import TYPE_CHECKING, Any

from ..analysis.column_types import Column, TableDefinition, check_columns
from ..errors import OutputError, SavedAnalysisError

if TYPE_CHECKING:
    from pathlib import Path

    import pandas as pd


def write_table(frame: pd.DataFrame, path: Path, *, table: TableDefinition) -> None:
    """Write one table.

    Integers are written as integers, other numbers with six significant digits (times to the microsecond), and
    everything that is missing or has no finite value as an empty cell.

    Parameters
    ----------
    frame : DataFrame
        The table; its columns are those of the data dictionary, in order.
    path : Path
        CSV file to write.
    table : TableDefinition
        Its entry in the data dictionary.

    Raises
    ------
    OutputError
        If the columns differ from the data dictionary, or a cell does not fit its column's type.
    """
    check_columns(table, frame.columns)
    columns = table.columns
    cells = [_column_cells(frame[column.name].tolist(), column, table) for column in columns]
    with path.open("w", encoding="utf-8", newline="") as file:
        writer = csv.writer(file, lineterminator="\n")
        writer.writerow(column.name for column in columns)
        writer.writerows(zip(*cells, strict=True))


def read_table(path: Path, *, table: TableDefinition, needed: Collection[str] | None = None) -> pd.DataFrame:
    """Read a table that `write_table` wrote.

    Parameters
    ----------
    path : Path
        CSV file.
    table : TableDefinition
        Its entry in the data dictionary.
    needed : collection of str, optional
        Columns that must be there; all, where left out. Others that the version which wrote the table did not know yet
        are empty, and those that this one does not know are left out.

    Returns
    -------
    DataFrame
        Numbers as float64, integers as `Int64`, text as `string`; missing where the cell is empty.

    Raises
    ------
    SavedAnalysisError
        If the file cannot be read or its columns are not those of the data dictionary.
    """
    import pandas as pd

    types = {"integer": "Int64", "number": "float64", "string": "string"}
    columns = table.columns
    try:
        frame = pd.read_csv(
            path,
            encoding="utf-8",
            keep_default_na=False,
            na_values=[""],
            dtype={column.name: types[column.type] for column in columns},
        )
        if needed is not None and set(needed) <= set(frame.columns):
            known = {column.name: types[column.type] for column in columns}
            frame = frame.reindex(columns=list(known)).astype(known)
        check_columns(table, frame.columns)
    except (OSError, ValueError) as error:
        raise SavedAnalysisError(f"{path} cannot be read as the table {table.name}: {error}") from error
    return frame


def _column_cells(values: list[Any], column: Column, table: TableDefinition) -> list[str]:
    write = _WRITERS[column.type]
    try:
        return ["" if _is_missing(value) else write(value, column) for value in values]
    except (TypeError, ValueError) as error:
        raise OutputError(
            f"Table {table.name}, column {column.name}: a cell does not fit the type {column.type} ({error})."
        ) from error


def _is_missing(value: Any) -> bool:
    if value is None:
        return True
    if isinstance(value, float):
        return not math.isfinite(value)
    return type(value).__name__ in {"NAType", "NaTType"}


def _integer(value: Any, _: Column) -> str:
    if int(value) != value:
        raise ValueError(f"{value!r} is not a whole number")
    return str(int(value))


def _number(value: Any, column: Column) -> str:
    number = float(value)
    exact = column.decimals is not None
    text = f"{number:.{column.decimals}f}".rstrip("0").rstrip(".") if exact else f"{number:.6g}"
    return "0" if text == "-0" else text


def _string(value: Any, _: Column) -> str:
    if not isinstance(value, str):
        raise TypeError(f"{value!r} is not text")
    return value


_WRITERS: dict[str, Callable[[Any, Column], str]] = {"integer": _integer, "number": _number, "string": _string}
