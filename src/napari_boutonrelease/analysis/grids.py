"""From the table of responses back to arrays."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    from collections.abc import Iterable

    import pandas as pd
    from numpy.typing import NDArray


def response_grid(
    responses: pd.DataFrame, column: str, *, bouton: Iterable[int], shape: tuple[int, int] | None = None
) -> NDArray[np.float64]:
    """Return a column of the responses as (bouton, trial, pulse), NaN where a response does not count.

    Parameters
    ----------
    responses : DataFrame
        The table `responses`.
    column : str
        Name of the column.
    bouton : iterable of int
        Ids of the boutons, in the order of the rows that are wanted.
    shape : (int, int), optional
        Trials and pulses; the largest in the table, where left out.
    """
    row_of = {int(name): row for row, name in enumerate(bouton)}
    names, trial, pulse = (responses[key].to_numpy(dtype=np.int64) for key in ("bouton", "trial", "pulse"))
    if shape is None:
        shape = (int(trial.max(initial=0)), int(pulse.max(initial=0)))
    grid = np.full((len(row_of), *shape), np.nan)
    row = np.array([row_of.get(int(name), -1) for name in names], dtype=np.int64)
    counts = responses["used"].to_numpy(dtype=np.float64, na_value=np.nan) == 1
    kept = counts & (row >= 0) & (trial <= shape[0]) & (pulse <= shape[1])
    grid[row[kept], trial[kept] - 1, pulse[kept] - 1] = responses[column].to_numpy(dtype=np.float64, na_value=np.nan)[
        kept
    ]
    return grid
