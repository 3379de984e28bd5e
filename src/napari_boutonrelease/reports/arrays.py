"""Traces as .npz and footprints as TIFF."""

from __future__ import annotations

from collections.abc import Iterator
from typing import TYPE_CHECKING, Any

import numpy as np

from .facts import pixel_size_um

if TYPE_CHECKING:
    from pathlib import Path

    from numpy.typing import NDArray

    from ..analysis.results import AnalysisResult


def write_traces(result: AnalysisResult, path: Path) -> None:
    """Write `time_s` (frame), `bouton` (ids), `f`, `f0`, `dff` (bouton, frame), `null_amplitude` (bouton, null).

    No pickle. The values are stored as float32, whose rounding (6e-8 of the value) is far below photon noise.
    """
    np.savez(
        path,
        time_s=np.asarray(result.time_s, dtype=np.float64),
        bouton=np.asarray(result.boutons["bouton"], dtype=np.int64),
        f=np.asarray(result.f, dtype=np.float32),
        f0=np.asarray(result.f0, dtype=np.float32),
        dff=np.asarray(result.dff, dtype=np.float32),
        null_amplitude=np.asarray(result.null_amplitude, dtype=np.float32),
    )


def write_mean_image(result: AnalysisResult, path: Path) -> None:
    """Write the mean of the frames, movement taken out (counts, float32)."""
    import tifffile

    image = np.asarray(result.mean_image, dtype=np.float32)
    tifffile.imwrite(path, image, compression="zlib", photometric="minisblack", **_pixel_size(result))


def write_label_image(result: AnalysisResult, path: Path) -> None:
    """Write the label image: 0 outside, the bouton's id in its footprint's core."""
    import tifffile

    label = np.asarray(result.footprints.label, dtype=np.uint16)
    tifffile.imwrite(path, label, compression="zlib", photometric="minisblack", **_pixel_size(result))


def write_weights(result: AnalysisResult, path: Path) -> None:
    """Write each bouton's extraction weights, a page a bouton in the order of the ids, 0 outside its patch."""
    import tifffile

    footprints = result.footprints
    height, width = footprints.label.shape
    tifffile.imwrite(
        path,
        weight_pages(footprints, (height, width)),
        shape=(len(footprints.weights), height, width),
        dtype=np.float32,
        compression="zlib",
        photometric="minisblack",
        metadata={"axes": "QYX"},
        **_pixel_size(result),
    )


def weight_pages(footprints: Any, shape: tuple[int, int]) -> Iterator[NDArray[np.float32]]:
    """One full image a bouton; parts of a patch beyond the image are cut."""
    for patch, top, left in zip(footprints.weights, footprints.y0, footprints.x0, strict=True):
        page = np.zeros(shape, dtype=np.float32)
        rows = np.arange(patch.shape[0]) + int(top)
        columns = np.arange(patch.shape[1]) + int(left)
        inside_y, inside_x = (rows >= 0) & (rows < shape[0]), (columns >= 0) & (columns < shape[1])
        page[np.ix_(rows[inside_y], columns[inside_x])] = patch[np.ix_(inside_y, inside_x)]
        yield page


def _pixel_size(result: AnalysisResult) -> dict[str, Any]:
    size_um = pixel_size_um(result)
    if size_um is None:
        return {}
    return {"resolution": (1e4 / size_um, 1e4 / size_um), "resolutionunit": "CENTIMETER"}
