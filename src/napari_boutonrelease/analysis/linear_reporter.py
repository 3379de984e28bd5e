"""Take a reporter's saturation out of the traces, where the settings say how it saturates."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from ..quanta import undo_saturation

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from ..responses import Baseline
    from .settings import ReporterSettings


@dataclass(frozen=True, slots=True, kw_only=True)
class LinearTraces:
    """Traces as a linear reporter would have shown them.

    Attributes
    ----------
    f : (n_boutons, n_frames) ndarray
        Brightness, counts; NaN also where the reporter's ceiling is reached.
    n_above : (n_boutons,) ndarray of int
        Frames that reach it.
    """

    f: NDArray[np.float64]
    n_above: NDArray[np.int64]


def linear_traces(f: NDArray[np.float64], *, baseline: Baseline, reporter: ReporterSettings) -> LinearTraces:
    """Undo the saturation at every moment, so that responses which overlap add up as they are fitted.

    Parameters
    ----------
    f : (n_boutons, n_frames) ndarray
        Brightness above background, counts.
    baseline : Baseline
        F0, with the tails of earlier responses taken out. Boutons whose F0 is not usable are left as they are.
    reporter : ReporterSettings
        How the reporter saturates; unchanged traces where `max_dff` is None.
    """
    if reporter.max_dff is None:
        return LinearTraces(f=f, n_above=np.zeros(len(f), dtype=np.int64))
    dff = baseline.dff(f)
    undone = undo_saturation(dff, max_dff=reporter.max_dff, hill=reporter.hill, rest_share=reporter.rest_share)
    linear = np.where(baseline.usable[:, None], baseline.f0 * (1.0 + undone.dff), f)
    return LinearTraces(f=linear, n_above=np.sum(dff >= reporter.max_dff, axis=1))
