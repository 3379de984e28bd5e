"""What a table, a column and its values are: the words in which data dictionaries are written."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Any, Literal

from ..errors import OutputError

if TYPE_CHECKING:
    import pandas as pd

ColumnType = Literal["integer", "number", "string"]

DFF = "dF/F"


@dataclass(frozen=True, slots=True, kw_only=True)
class Column:
    """One column of a table.

    Attributes
    ----------
    name : str
        Header in the CSV file and name in the DataFrame.
    type : {"integer", "number", "string"}
        Type of a cell that is not empty.
    unit : str
        Unit of the values, empty where they have none.
    meaning : str
        What a cell says, in one line.
    constraints : mapping
        Frictionless constraints (`required`, `unique`, `minimum`, `maximum`, `enum`, `pattern`).
    decimals : int or None
        Digits after the point that are written; None writes six significant digits.
    """

    name: str
    type: ColumnType
    unit: str
    meaning: str
    constraints: Mapping[str, Any] = field(default_factory=dict)
    decimals: int | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class TableDefinition:
    """One table.

    Attributes
    ----------
    name : str
        Attribute of the result and stem of the CSV file.
    meaning : str
        What a row is.
    key : tuple of str
        Columns that together name a row; empty where rows have no name.
    columns : tuple of Column
        In the order of the file.
    """

    name: str
    meaning: str
    key: tuple[str, ...]
    columns: tuple[Column, ...]

    @property
    def names(self) -> tuple[str, ...]:
        """Names of the columns, in order."""
        return tuple(column.name for column in self.columns)


def column(
    name: str,
    type_: ColumnType,
    unit: str,
    meaning: str,
    decimals: int | None = None,
    **constraints: Any,
) -> Column:
    """Describe a column."""
    return Column(name=name, type=type_, unit=unit, meaning=meaning, constraints=constraints, decimals=decimals)


def number(name: str, unit: str, meaning: str, **constraints: Any) -> Column:
    """Describe a column of numbers."""
    return column(name, "number", unit, meaning, **constraints)


def count(name: str, meaning: str, **constraints: Any) -> Column:
    """Describe a column of counts, from 0."""
    return column(name, "integer", "", meaning, **{"minimum": 0, **constraints})


def probability(name: str, meaning: str) -> Column:
    """Describe a column of probabilities."""
    return column(name, "number", "", meaning, minimum=0, maximum=1)


def time_column(name: str, meaning: str) -> Column:
    """Describe a column of times in s, written to the microsecond."""
    # Microseconds whatever the length of the recording: six significant digits would lose them after a second.
    return column(name, "number", "s", meaning, decimals=6, required=True)


def choice(name: str, meaning: str, *choices: str | int) -> Column:
    """Describe a column that holds one of a few values."""
    kind: ColumnType = "integer" if isinstance(choices[0], int) else "string"
    return column(name, kind, "", meaning, enum=list(choices))


def with_limits(of: Column) -> tuple[Column, Column, Column]:
    """Return the column and the two limits of its interval."""
    lower, upper = (
        Column(
            name=f"{of.name}_{side}",
            type=of.type,
            unit=of.unit,
            meaning=f"{end} end of the 95 % interval of {of.name}",
            constraints=of.constraints,
        )
        for side, end in (("lo", "lower"), ("hi", "upper"))
    )
    return of, lower, upper


def codes_pattern(codes: Iterable[str]) -> str:
    """Return the pattern of codes joined by `;`."""
    one = "(" + "|".join(codes) + ")"
    return f"{one}(;{one})*"


def check_columns(table: TableDefinition, names: Iterable[str]) -> None:
    """Raise unless `names` are the columns of the table, in order.

    Parameters
    ----------
    table : TableDefinition
        What the columns should be.
    names : iterable of str
        Names found.

    Raises
    ------
    OutputError
        If a column is missing, unknown, or out of order.
    """
    found, wanted = tuple(names), table.names
    if found == wanted:
        return
    missing = [name for name in wanted if name not in found]
    unknown = [name for name in found if name not in wanted]
    problems = [f"missing: {', '.join(missing)}"] if missing else []
    problems += [f"unknown: {', '.join(unknown)}"] if unknown else []
    problem = "; ".join(problems) or "the order differs or a name comes twice"
    raise OutputError(f"Table {table.name} does not have the columns of the data dictionary ({problem}).")


def empty_table(table: TableDefinition) -> pd.DataFrame:
    """Return the table with its columns and no row; numbers are float64, integers `Int64`, text `string`."""
    import pandas as pd

    types = {"integer": "Int64", "number": "float64", "string": "string"}
    return pd.DataFrame({column.name: pd.Series(dtype=types[column.type]) for column in table.columns})
