"""JSON that every reader accepts: no NaN, no infinity, no object of ours."""

from __future__ import annotations

import json
import math
from collections.abc import Mapping
from datetime import date
from pathlib import Path, PurePath
from typing import Any

import numpy as np

from ..errors import OutputError


def json_ready(value: Any) -> Any:
    """Return `value` built of plain JSON types alone; numbers without a finite value become None.

    Raises
    ------
    OutputError
        If something in it has no JSON form.

    Examples
    --------
    >>> json_ready({"p": np.float64("nan"), "n": np.arange(2)})
    {'p': None, 'n': [0, 1]}
    """
    if value is None or isinstance(value, bool | str):
        return value
    if isinstance(value, np.generic | np.ndarray):
        return json_ready(value.tolist())
    if isinstance(value, int):
        return int(value)
    if isinstance(value, float):
        return float(value) if math.isfinite(value) else None
    if isinstance(value, PurePath):
        return str(value)
    if isinstance(value, date):  # a datetime is a date, too
        return value.isoformat()
    if isinstance(value, Mapping):
        return {str(key): json_ready(entry) for key, entry in value.items()}
    if isinstance(value, list | tuple):
        return [json_ready(entry) for entry in value]
    if isinstance(value, set | frozenset):
        return [json_ready(entry) for entry in sorted(value)]
    raise OutputError(f"A value of type {type(value).__name__} cannot be written as JSON ({value!r:.80}).")


def write_json(value: Any, path: Path) -> None:
    """Write `value` as indented UTF-8 JSON."""
    text = json.dumps(json_ready(value), ensure_ascii=False, allow_nan=False, indent=2)
    path.write_text(text + "\n", encoding="utf-8")
