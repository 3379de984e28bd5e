"""Input checks that several rooms share. Each takes the argument's name, so that the message can say it."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING

from .errors import InputError

if TYPE_CHECKING:
    import numpy as np
    from numpy.typing import ArrayLike, NDArray


def check_positive(name: str, value: float, *, unit: str = "") -> float:
    """Return `value` as float, or raise `InputError` unless it is finite and greater than zero."""
    value = float(value)
    if not (math.isfinite(value) and value > 0):
        raise InputError(f"{name} must be greater than 0{_in(unit)} (given {value:g}).")
    return value


def check_not_negative(name: str, value: float, *, unit: str = "") -> float:
    """Return `value` as float, or raise `InputError` unless it is finite and at least zero."""
    value = float(value)
    if not (math.isfinite(value) and value >= 0):
        raise InputError(f"{name} must be 0 or more{_in(unit)} (given {value:g}).")
    return value


def check_fraction(name: str, value: float) -> float:
    """Return `value` as float, or raise `InputError` unless it lies in [0, 1]."""
    value = float(value)
    if not 0.0 <= value <= 1.0:
        raise InputError(f"{name} must lie between 0 and 1 (given {value:g}).")
    return value


def check_array(name: str, values: ArrayLike, *, n_dims: int) -> NDArray[np.float64]:
    """Return `values` as a float64 array, or raise `InputError` unless it has `n_dims` axes."""
    import numpy as np

    array = np.asarray(values, dtype=np.float64)
    if array.ndim != n_dims:
        raise InputError(f"{name} must have {n_dims} axes (given an array of shape {array.shape}).")
    return array


def _in(unit: str) -> str:
    return f" {unit}" if unit else ""
