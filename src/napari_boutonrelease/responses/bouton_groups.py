"""Boutons whose frames are exposed at the same times and usable alike share one design."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    from collections.abc import Iterator

    from numpy.typing import NDArray

    from ..recording.timing import Timing

__all__ = ["groups_of_boutons", "row_offset_s"]


def row_offset_s(y_px: NDArray[np.float64], *, timing: Timing) -> NDArray[np.float64]:
    """How much later than row 0 each bouton's row is exposed, in s."""
    return np.asarray(y_px, dtype=np.float64) * timing.row_time_s


def groups_of_boutons(
    f: NDArray[np.float64], *, offset_s: NDArray[np.float64], used: NDArray[np.bool_]
) -> Iterator[tuple[NDArray[np.intp], float, NDArray[np.bool_]]]:
    """Boutons that share a design: the same row offset and the same usable frames.

    Parameters
    ----------
    f : (n_boutons, n_frames) ndarray
        Brightness; NaN in frames without a value.
    offset_s : (n_boutons,) ndarray
        Row offset of each, in s.
    used : (n_frames,) ndarray of bool
        Frames that may be used.

    Yields
    ------
    boutons : (n,) ndarray of int
        Members of the group.
    offset_s : float
        Their row offset.
    usable : (n_frames,) ndarray of bool
        Their usable frames.
    """
    groups: dict[tuple[float, bytes], list[int]] = {}
    for bouton, series in enumerate(f):
        usable = used & np.isfinite(series)
        groups.setdefault((float(offset_s[bouton]), np.packbits(usable).tobytes()), []).append(bouton)
    for (offset, packed), members in groups.items():
        usable = np.unpackbits(np.frombuffer(packed, dtype=np.uint8), count=used.size).astype(bool)
        yield np.array(members, dtype=np.intp), offset, usable
