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
    ids = np.fromiter((int(name) for name in bouton), dtype=np.int64)
    names, trial, pulse = (responses[key].to_numpy(dtype=np.int64) for key in ("bouton", "trial", "pulse"))
    if shape is None:
        shape = (int(trial.max(initial=0)), int(pulse.max(initial=0)))
    grid = np.full((len(ids), *shape), np.nan)
    if not len(ids):
        return grid
    order = np.argsort(ids)
    row = order[np.minimum(np.searchsorted(ids, names, sorter=order), len(ids) - 1)]
    counts = responses["used"].to_numpy(dtype=np.float64, na_value=np.nan) == 1
    kept = counts & (ids[row] == names) & (trial <= shape[0]) & (pulse <= shape[1])
    cells = responses[column].to_numpy(dtype=np.float64, na_value=np.nan)[kept]
    grid[row[kept], trial[kept] - 1, pulse[kept] - 1] = cells
    return grid
