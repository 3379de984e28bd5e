"""Tables of the results as tables of the NWB standard, each column with its meaning and unit."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np

from .facts import texts, values

if TYPE_CHECKING:
    from collections.abc import Iterable

    import pandas as pd
    from numpy.typing import ArrayLike, NDArray

    from ..analysis.column_types import Column


def make_table(
    name: str, description: str, frame: pd.DataFrame, *, columns: Iterable[Column], times: list[Any] | None = None
) -> Any:
    """Return the columns that hold anything; a table of times where these are given, else a plain one."""
    from hdmf.common import DynamicTable

    data = list(times or ())
    for column in columns:
        cells = _cells(frame, column)
        if cells is not None:
            unit = f" ({column.unit})" if column.unit else ""
            data.append(make_column(column.name, column.meaning + unit, cells))
    if times is not None:
        return make_intervals(name, description, data)
    return DynamicTable(name=name, description=description, columns=data)


def make_intervals(name: str, description: str, columns: list[Any]) -> Any:
    """Return a table of intervals of time; two of its columns are `start_time` and `stop_time`."""
    from pynwb.epoch import TimeIntervals

    return TimeIntervals(
        name=name, description=description, columns=columns, colnames=[column.name for column in columns]
    )


def interval_columns(start_s: NDArray[np.float64], end_s: float, words: tuple[str, str]) -> list[Any]:
    """Return columns of intervals that reach from each start to the next, the last to the end."""
    stop_s = np.append(start_s[1:], max(end_s, start_s[-1]))
    return [
        make_column(name, f"{meaning} (s)", times)
        for name, meaning, times in zip(("start_time", "stop_time"), words, (start_s, stop_s), strict=True)
    ]


def _cells(frame: pd.DataFrame, column: Column) -> list[str] | NDArray[Any] | None:
    """Return text, or numbers with NaN where missing; whole ones without gaps stay whole, or true and false."""
    if column.type == "string":
        words = texts(frame, column.name)
        return words if any(words) else None
    numbers = values(frame, column.name)
    if np.isnan(numbers).all():
        return None
    if column.type == "integer" and np.isfinite(numbers).all():
        return numbers.astype(bool if column.constraints.get("enum") == [0, 1] else np.int64)
    return numbers


def make_column(name: str, description: str, data: ArrayLike) -> Any:
    """Return a column of a table."""
    from hdmf.common import VectorData

    return VectorData(name=name, description=sentence(description), data=data)


def sentence(words: str) -> str:
    """Return the words with a capital letter."""
    return words[0].upper() + words[1:]
