"""Response maps."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from ..response_shape import ResponseShape


@dataclass(frozen=True, slots=True, kw_only=True)
class ResponseStack:
    """Response of every pixel to every pulse, and the same where nothing was stimulated.

    Attributes
    ----------
    evoked : (n_evoked, y, x) ndarray of float32
        Amplitude (counts) of one pulse of one trial; `evoked_trial` and `evoked_pulse` say which.
    evoked_trial, evoked_pulse : (n_evoked,) ndarray of int
        Index of trial and pulse, from 0.
    evoked_factor, null_factor : (n,) ndarray
        SD of a map's pixel in units of the SD of one frame's pixel.
    null : (n_null, y, x) ndarray of float32
        The same at pseudo-stimuli, or from differences of trials.
    null_from : str
        `gaps` (pseudo-stimuli in stimulus-free time) or `differences` (half differences of successive trials).
    mean_image : (y, x) ndarray
        Mean of the movement-corrected frames (counts).
    shape : ResponseShape
        Time course the pixels were projected on.
    """

    evoked: NDArray[np.float32]
    evoked_trial: NDArray[np.intp]
    evoked_pulse: NDArray[np.intp]
    evoked_factor: NDArray[np.float64]
    null: NDArray[np.float32]
    null_factor: NDArray[np.float64]
    null_from: str
    mean_image: NDArray[np.float64]
    shape: ResponseShape
