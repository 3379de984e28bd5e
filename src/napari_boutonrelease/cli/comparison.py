"""Estimates of a simulated recording beside its truth."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from ..reports.facts import values
from .summary import with_interval

if TYPE_CHECKING:
    import pandas as pd
    from numpy.typing import NDArray

    from ..simulation.truth import Truth

_REACH_UM = 0.9
_QUANTITIES = (
    # heading, in the truth, in the table, digits
    ("release probability", "p_release", "p_release", 2),
    ("paired-pulse ratio", "ppr", "ppr", 2),
    ("release sites", "n_sites", "n_sites", 0),
    ("one vesicle (dF/F)", "q_dff", "q", 2),
)


@dataclass(frozen=True, slots=True, kw_only=True)
class _Compared:
    """One quantity, bouton by bouton; NaN where there is no estimate or no truth."""

    heading: str
    digits: int
    truth: NDArray[np.float64]
    value: NDArray[np.float64]
    lo: NDArray[np.float64]
    hi: NDArray[np.float64]

    def cells(self, row: int) -> tuple[str, str]:
        estimate = with_interval(self.value[row], self.lo[row], self.hi[row], digits=self.digits)
        return estimate, f"{self.truth[row]:.{self.digits}f}" if np.isfinite(self.truth[row]) else "-"

    def tally(self) -> list[str]:
        both = np.isfinite(self.value) & np.isfinite(self.truth)
        above = np.nan_to_num(self.lo[both], nan=-np.inf) <= self.truth[both]
        below = np.nan_to_num(self.hi[both], nan=np.inf) >= self.truth[both]
        if not both.any():
            return []
        return [f"{self.heading}: {np.sum(above & below)} of {np.sum(both)} intervals hold the truth"]


def matched_spots(boutons: pd.DataFrame, truth: Truth) -> NDArray[np.int64]:
    """Find the true spot behind each bouton: the nearest one within 0.9 µm, each taken once.

    Returns
    -------
    (n_boutons,) ndarray of int
        Index of the spot in the truth; -1 where there is none.
    """
    from scipy.optimize import linear_sum_assignment

    away_px = np.hypot(
        values(boutons, "y_px")[:, None] - truth.y_px,
        values(boutons, "x_px")[:, None] - truth.x_px,
    )
    away_um = truth.recipe.pixel_size_um * away_px
    rows, spots = linear_sum_assignment(np.minimum(away_um, 10 * _REACH_UM))
    matched = np.full(len(boutons), -1)
    close = away_um[rows, spots] <= _REACH_UM
    matched[rows[close]] = spots[close]
    return matched


def comparison_lines(boutons: pd.DataFrame, truth: Truth) -> list[str]:
    """Return a table of estimates with 95 % intervals beside the truth, and how often the interval holds it."""
    spots = matched_spots(boutons, truth)
    real = np.array([spot >= 0 and truth.kind[spot] != "speck" for spot in spots], dtype=bool)
    compared = [
        _Compared(
            heading=heading,
            digits=digits,
            truth=np.where(real, np.asarray(getattr(truth, true_name), dtype=np.float64)[spots], np.nan),
            **{key: values(boutons, name + end) for key, end in (("value", ""), ("lo", "_lo"), ("hi", "_hi"))},
        )
        for heading, true_name, name, digits in _QUANTITIES
    ]
    compared = [quantity for quantity in compared if np.isfinite(quantity.value).any()]
    header = ["bouton", *(cell for quantity in compared for cell in (quantity.heading, "truth"))]
    rows = [
        [f"{bouton:.0f}", *(cell for quantity in compared for cell in quantity.cells(row))]
        for row, bouton in enumerate(values(boutons, "bouton"))
    ]
    return [
        *_aligned([header, *rows]),
        "",
        _found(spots, real, truth),
        *(line for quantity in compared for line in quantity.tally()),
    ]


def _found(spots: NDArray[np.int64], real: NDArray[np.bool_], truth: Truth) -> str:
    missed = [truth.kind[spot] for spot in truth.boutons if spot not in spots]
    text = f"boutons: {real.sum()} of {truth.boutons.size} found"
    if missed:
        text += f" (missed: {', '.join(f'{missed.count(kind)} {kind}' for kind in dict.fromkeys(missed))})"
    n_false = len(spots) - int(real.sum())
    return text + (f", {n_false} where there is none" if n_false else "")


def _aligned(rows: list[list[str]]) -> list[str]:
    widths = [max(map(len, column)) for column in zip(*rows, strict=True)]
    return ["  ".join(cell.rjust(width) for cell, width in zip(row, widths, strict=True)) for row in rows]
