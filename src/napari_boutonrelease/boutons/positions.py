"""Places given by hand: a table of positions, a label image, the path of the axon."""

from __future__ import annotations

import csv
import math
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np

from ..errors import BoutonFileError

if TYPE_CHECKING:
    from numpy.typing import ArrayLike, NDArray

_TABLE_SUFFIXES = frozenset({".csv", ".txt", ".tsv"})
_APART_PX = 0.5
_IMAGE_SUFFIXES = frozenset({".tif", ".tiff"})


@dataclass(frozen=True, slots=True, kw_only=True)
class GivenBoutons:
    """Boutons from a file.

    Attributes
    ----------
    y_px, x_px : (n,) ndarray
        Centres (px).
    bouton : (n,) ndarray of int
        Ids: as in the file, else from 1 in the file's order.
    label : (y, x) ndarray of int32 or None
        Drawn masks, where the file was a label image; values are the ids.
    """

    y_px: NDArray[np.float64]
    x_px: NDArray[np.float64]
    bouton: NDArray[np.int64]
    label: NDArray[np.int32] | None


def read_positions(path: str | Path, *, pixel_size_um: float | None, image_shape: tuple[int, int]) -> GivenBoutons:
    """Read bouton positions from a CSV table, or masks from a label TIFF.

    Parameters
    ----------
    path : path
        A table with columns `y_px,x_px` or `y_um,x_um` and, if wanted, `bouton` (ids, whole numbers from 1); or a
        label image of the movie's size in which 0 is background.
    pixel_size_um : float or None
        Side of a pixel (µm); needed for positions in µm.
    image_shape : (int, int)
        Height and width of the movie (px).

    Returns
    -------
    GivenBoutons

    Raises
    ------
    BoutonFileError
        If the file cannot be read, holds no bouton, or a bouton lies outside the image; names file, row and column.
    """
    path = Path(path)
    if not path.is_file():
        raise BoutonFileError(f"{path}: there is no such file of boutons; give a CSV of positions or a label TIFF.")
    suffix = path.suffix.lower()
    if suffix in _IMAGE_SUFFIXES:
        return _read_labels(path, image_shape=image_shape)
    if suffix not in _TABLE_SUFFIXES:
        raise BoutonFileError(
            f"{path}: a file of boutons ends in .csv (positions) or .tif (label image), not {suffix or 'nothing'!r}."
        )
    rows = _read_table(path)
    y_px, x_px, lines = _coordinates(path, rows, pixel_size_um=pixel_size_um)
    if not len(y_px):
        raise BoutonFileError(f"{path}: the table holds no bouton; it needs one row a bouton below its header.")
    height, width = image_shape
    for y, x, line in zip(y_px, x_px, lines, strict=True):
        if not (-0.5 <= y <= height - 0.5 and -0.5 <= x <= width - 0.5):
            raise BoutonFileError(
                f"{path}, row {line}: the bouton at y = {y:g}, x = {x:g} px lies outside the image of {height} x "
                f"{width} pixels (height x width). Check the unit and the order of the columns."
            )
    _check_apart(path, y_px, x_px, lines)
    return GivenBoutons(y_px=y_px, x_px=x_px, bouton=_ids(path, rows), label=None)


def read_axon(path: str | Path, *, pixel_size_um: float | None) -> NDArray[np.float64]:
    """Read the vertices of an axon's path from a CSV table with columns `y_px,x_px` or `y_um,x_um`, in order.

    Returns
    -------
    (n, 2) ndarray
        (y, x) of each vertex (px); at least two different ones.

    Raises
    ------
    BoutonFileError
        If the file cannot be read or holds fewer than two different vertices.
    """
    path = Path(path)
    if not path.is_file():
        raise BoutonFileError(f"{path}: there is no such file of an axon's path; give a CSV with columns y_px,x_px.")
    y_px, x_px, _ = _coordinates(path, _read_table(path), pixel_size_um=pixel_size_um)
    vertices = np.column_stack([y_px, x_px])
    if len(np.unique(vertices, axis=0)) < 2:
        raise BoutonFileError(
            f"{path}: an axon's path needs at least two different vertices (given {len(np.unique(vertices, axis=0))})."
        )
    return vertices


def distance_along(
    vertices: ArrayLike, *, y_px: ArrayLike, x_px: ArrayLike
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Distance of places along a path, and aside from it.

    Parameters
    ----------
    vertices : (k, 2) array_like
        (y, x) of the path's vertices (px), k >= 2.
    y_px, x_px : (n,) array_like
        Places (px).

    Returns
    -------
    along_px : (n,) ndarray
        Length of the path from its first vertex to the point of it that is nearest to each place (px).
    offset_px : (n,) ndarray
        Distance from that point (px); positive on the right hand when looking along the path on the screen, with y
        downwards.

    Examples
    --------
    >>> distance_along([[0, 0], [0, 10]], y_px=[2.0, -1.0], x_px=[4.0, 12.0])
    (array([ 4., 10.]), array([ 2.        , -2.23606798]))
    """
    path = np.asarray(vertices, dtype=np.float64)
    places = np.column_stack([np.atleast_1d(y_px), np.atleast_1d(x_px)]).astype(np.float64)
    steps = np.diff(path, axis=0)
    length = np.hypot(*steps.T)
    path, steps, length = np.vstack([path[:1], path[1:][length > 0]]), steps[length > 0], length[length > 0]
    begin = path[:-1]
    from_begin = places[:, None, :] - begin
    share = np.clip(np.sum(from_begin * steps, axis=-1) / length**2, 0.0, 1.0)
    aside = from_begin - share[..., None] * steps
    distance = np.hypot(aside[..., 0], aside[..., 1])
    nearest = np.argmin(distance, axis=1)
    row = np.arange(len(places))
    start = np.concatenate([[0.0], np.cumsum(length)[:-1]])
    along = start[nearest] + share[row, nearest] * length[nearest]
    side = steps[nearest, 1] * from_begin[row, nearest, 0] - steps[nearest, 0] * from_begin[row, nearest, 1]
    return along, np.where(side < 0, -1.0, 1.0) * distance[row, nearest]


def _read_labels(path: Path, *, image_shape: tuple[int, int]) -> GivenBoutons:
    import tifffile

    try:
        label = np.squeeze(tifffile.imread(path))
    except (tifffile.TiffFileError, ValueError, OSError) as error:
        raise BoutonFileError(
            f"{path} is not a TIFF image that can be read ({error}): save the labels as TIFF, one number a bouton."
        ) from error
    if label.shape != image_shape:
        size = " x ".join(str(n) for n in label.shape)
        raise BoutonFileError(
            f"{path}: the label image is {size} pixels, but the movie is {image_shape[0]} x {image_shape[1]} (height x "
            "width); draw the labels on a frame of this movie."
        )
    if label.dtype.kind not in "iub" and not np.array_equal(label, np.round(label)):
        raise BoutonFileError(f"{path}: a label image holds whole numbers, one a bouton (given {label.dtype}).")
    if np.min(label) < 0:
        raise BoutonFileError(f"{path}: a label image holds no negative numbers (smallest {np.min(label)}).")
    label = label.astype(np.int32)
    ids = np.unique(label)
    ids = ids[ids > 0]
    if not len(ids):
        raise BoutonFileError(f"{path}: the label image holds no bouton: all pixels are 0.")
    rows, columns = np.mgrid[: image_shape[0], : image_shape[1]]
    size = np.bincount(label.ravel())[ids]
    y_px, x_px = (np.bincount(label.ravel(), weights=grid.ravel())[ids] / size for grid in (rows, columns))
    return GivenBoutons(y_px=y_px, x_px=x_px, bouton=ids.astype(np.int64), label=label)


def _read_table(path: Path) -> list[tuple[int, dict[str, str]]]:
    """Line number in the file and named cells of each row that is not empty."""
    try:
        text = path.read_text(encoding="utf-8-sig")
    except UnicodeDecodeError as error:
        raise BoutonFileError(f"{path} is not a text file in UTF-8: save the table as CSV (UTF-8).") from error
    header = next((line for line in text.splitlines() if line.strip()), "")
    if not header:
        raise BoutonFileError(f"{path} is empty; it needs a header with y_px,x_px or y_um,x_um.")
    delimiter = max(",;\t", key=header.count)
    reader = csv.DictReader(text.splitlines(), delimiter=delimiter)
    names = [name.strip() for name in reader.fieldnames or ()]
    doubled = sorted({name for name in names if names.count(name) > 1})
    if doubled:
        raise BoutonFileError(f"{path}: column {doubled[0]!r} stands twice in the header; leave one.")
    reader.fieldnames = names
    rows = []
    for row in reader:
        if None in row:
            raise BoutonFileError(
                f"{path}, row {reader.line_num}: more cells than the header's {len(names)} columns; decimals need a "
                "point."
            )
        cells = {name: (value or "").strip() for name, value in row.items()}
        if any(cells.values()):
            rows.append((reader.line_num, cells))
    if not {"y_px", "x_px"} <= set(names) and not {"y_um", "x_um"} <= set(names):
        raise BoutonFileError(
            f"{path}: columns y_px and x_px (or y_um and x_um) are needed; the header has {', '.join(names) or 'none'}."
        )
    return rows


def _coordinates(
    path: Path, rows: list[tuple[int, dict[str, str]]], *, pixel_size_um: float | None
) -> tuple[NDArray[np.float64], NDArray[np.float64], list[int]]:
    in_pixels = not rows or {"y_px", "x_px"} <= rows[0][1].keys()
    if not in_pixels and pixel_size_um is None:
        raise BoutonFileError(
            f"{path}: positions are in um, but the pixel size is not known. Add pixel_size_um to [recording] of the "
            "protocol, or give y_px,x_px."
        )
    scale = 1.0 if in_pixels or pixel_size_um is None else 1.0 / pixel_size_um
    names = ("y_px", "x_px") if in_pixels else ("y_um", "x_um")
    values = [[_number(path, line, name, cells[name]) for name in names] for line, cells in rows]
    array = np.asarray(values, dtype=np.float64).reshape(-1, 2) * scale
    return array[:, 0], array[:, 1], [line for line, _ in rows]


def _number(path: Path, line: int, name: str, text: str) -> float:
    try:
        value = float(text)
    except ValueError:
        value = math.nan
    if not math.isfinite(value):
        raise BoutonFileError(f"{path}, row {line}, column {name}: a number is needed (given {text!r}).")
    return value


def _check_apart(path: Path, y_px: NDArray[np.float64], x_px: NDArray[np.float64], lines: list[int]) -> None:
    """Refuse a bouton that is there twice: its light would be shared out between the two at random."""
    for row in range(1, len(lines)):
        distance = np.hypot(y_px[:row] - y_px[row], x_px[:row] - x_px[row])
        nearest = int(np.argmin(distance))
        if distance[nearest] < _APART_PX:
            raise BoutonFileError(
                f"{path}, row {lines[row]}: the bouton lies {distance[nearest]:.2g} px from that of row "
                f"{lines[nearest]}; that is one bouton: leave one row out."
            )


def _ids(path: Path, rows: list[tuple[int, dict[str, str]]]) -> NDArray[np.int64]:
    if "bouton" not in rows[0][1]:
        return np.arange(1, len(rows) + 1, dtype=np.int64)
    seen: dict[int, int] = {}
    for line, cells in rows:
        text = cells["bouton"]
        if not text.isdecimal() or int(text) < 1:
            raise BoutonFileError(
                f"{path}, row {line}, column bouton: ids are whole numbers from 1 (given {text!r}); leave the column "
                "out to number the rows."
            )
        if int(text) in seen:
            raise BoutonFileError(
                f"{path}, row {line}, column bouton: id {text} stands in row {seen[int(text)]} already; ids must "
                "differ."
            )
        seen[int(text)] = line
    return np.fromiter(seen, dtype=np.int64)
