"""A movie whose frames are read only when they are asked for: one file, one file a trial, or an array."""

from __future__ import annotations

import hashlib
import re
import warnings
from bisect import bisect_right
from collections.abc import Iterator, Sequence
from dataclasses import dataclass, field, replace
from itertools import accumulate
from pathlib import Path
from typing import Any, Protocol

import numpy as np
from numpy.typing import NDArray

from ..errors import AnalysisWarning, MovieError
from .tiff_frames import TiffFrames, open_tiff

_SUFFIXES = frozenset({".tif", ".tiff", ".btf", ".tf8", ".stk"})
_MOST_OPEN_FILES = 100
_HASH_BYTES = 1 << 22


class FrameSource(Protocol):
    """What a movie is made of: something that reads frames `start` to `stop` (excluded)."""

    def read(self, start: int, stop: int) -> NDArray[Any]:
        """Return frames (frame, y, x) in native byte order."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Movie:
    """Frames over time, read lazily.

    Attributes
    ----------
    shape : (int, int, int)
        (frame, y, x).
    dtype : dtype
        Of the pixels, in native byte order.
    name : str
        Stem of the file or name of the folder.
    axes : str
        Axes as in the file, e.g. "TYX" or "TCYX".
    channel : int or None
        The channel taken, from 0; None where there was nothing to choose.
    files : tuple of Path
        The files, in order; empty for an array.
    file_frames : tuple of int
        Frames of each trial's file; one entry for a movie in one piece.
    frame_interval_s, pixel_size_um : float or None
        From the file's metadata; None where it does not say.
    found_in : dict of str to str
        Where each of the two was found.
    sources : tuple of FrameSource
        What the frames are read from.
    source_frames : tuple of int
        Frames in each source.
    """

    shape: tuple[int, int, int]
    dtype: np.dtype[Any]
    name: str
    axes: str
    channel: int | None
    files: tuple[Path, ...]
    file_frames: tuple[int, ...]
    frame_interval_s: float | None
    pixel_size_um: float | None
    found_in: dict[str, str]
    sources: tuple[FrameSource, ...] = field(repr=False)
    source_frames: tuple[int, ...] = field(repr=False)

    @property
    def full_scale(self) -> float | None:
        """Largest value the pixels can hold; None for real numbers."""
        return float(np.iinfo(self.dtype).max) if self.dtype.kind in "iu" else None

    def read(self, start: int, stop: int) -> NDArray[Any]:
        """Read frames `start` to `stop` (excluded), and no others.

        Parameters
        ----------
        start, stop : int
            0 <= start <= stop <= n_frames.

        Returns
        -------
        (stop - start, y, x) ndarray
            In native byte order. May be a read-only view of the file: copy before changing it.

        Raises
        ------
        IndexError
            If the movie has no such frames.
        MovieError
            If a packed frame is damaged.
        """
        if not 0 <= start <= stop <= self.shape[0]:
            raise IndexError(f"frames {start} to {stop} of a movie of {self.shape[0]} frames")
        ends = list(accumulate(self.source_frames))
        pieces = []
        k = bisect_right(ends, start)
        while start < stop:
            first = ends[k] - self.source_frames[k]
            end = min(stop, ends[k])
            pieces.append(self.sources[k].read(start - first, end - first))
            start, k = end, k + 1
        if len(pieces) == 1:
            return pieces[0]
        return np.concatenate(pieces) if pieces else np.empty((0, *self.shape[1:]), dtype=self.dtype)

    def blocks(self, n_frames: int) -> Iterator[tuple[int, NDArray[Any]]]:
        """Yield (first frame, frames) over the whole movie, at most `n_frames` at a time."""
        for start in range(0, self.shape[0], n_frames):
            yield start, self.read(start, min(start + n_frames, self.shape[0]))


@dataclass(frozen=True, slots=True, kw_only=True)
class ArrayFrames:
    """Frames of anything that is sliced like an array: numpy, memory maps, dask, zarr."""

    array: Any
    dtype: np.dtype[Any]

    def read(self, start: int, stop: int) -> NDArray[Any]:
        """Return frames (frame, y, x) in native byte order."""
        return np.asarray(self.array[start:stop]).astype(self.dtype, copy=False)


@dataclass(frozen=True, slots=True, kw_only=True)
class FilledFrames:
    """Frames whose dead pixels show what their nearest neighbour shows."""

    movie: Movie
    dead: NDArray[np.bool_]
    neighbour: tuple[NDArray[np.intp], NDArray[np.intp]]

    def read(self, start: int, stop: int) -> NDArray[Any]:
        """Return frames (frame, y, x) in native byte order."""
        frames = self.movie.read(start, stop).copy()
        frames[:, self.dead] = frames[:, self.neighbour[0], self.neighbour[1]]
        return frames


def fill_dead(movie: Movie, *, dead: NDArray[np.bool_]) -> Movie:
    """Let dead pixels show what their nearest neighbour shows, so that resampling does not spread them.

    A pixel that holds no number would otherwise leave none around it.

    Parameters
    ----------
    movie : Movie
    dead : (y, x) ndarray of bool

    Returns
    -------
    Movie
        Read as lazily as before; `movie` itself where no pixel, or every pixel, is dead.
    """
    from scipy.ndimage import distance_transform_edt

    if not dead.any() or dead.all():
        return movie
    y, x = distance_transform_edt(dead, return_distances=False, return_indices=True)
    filled = FilledFrames(movie=movie, dead=dead, neighbour=(y[dead], x[dead]))
    return replace(movie, sources=(filled,), source_frames=(movie.shape[0],))


def movie_from_array(
    array: Any,
    *,
    frame_interval_s: float | None = None,
    pixel_size_um: float | None = None,
    file_frames: Sequence[int] | None = None,
    name: str = "movie",
) -> Movie:
    """Wrap an array of axes (frame, y, x) as a movie; nothing is copied.

    Parameters
    ----------
    array : array_like
        Anything with `shape` and `dtype` whose slices become numpy arrays.
    frame_interval_s, pixel_size_um : float, optional
        Calibration, where it is known.
    file_frames : sequence of int, optional
        Frames of each trial, where the array is several recordings one after the other.
    name : str, optional
        What messages and results call the movie.

    Returns
    -------
    Movie

    Raises
    ------
    MovieError
        If the array is not a movie of at least two frames, or `file_frames` does not add up to it.
    """
    shape = tuple(int(size) for size in array.shape)
    dtype = np.dtype(array.dtype)
    if len(shape) != 3:
        raise MovieError(f"{name} has the shape {shape}: a movie needs three axes, (frame, y, x).")
    if dtype.kind not in "iuf":
        raise MovieError(f"{name} holds {dtype} pixels: a movie needs whole or real numbers, e.g. uint16.")
    if shape[0] < 2 or 0 in shape:
        raise MovieError(f"{name} has the shape {shape}: a movie needs at least 2 frames, axes (frame, y, x).")
    parts = (shape[0],) if file_frames is None else tuple(int(n) for n in file_frames)
    if sum(parts) != shape[0] or min(parts, default=0) < 1:
        raise MovieError(f"file_frames {parts} must be positive and add up to the {shape[0]} frames of {name}.")
    found_in = {
        key: "given with the array"
        for key, value in (("frame_interval_s", frame_interval_s), ("pixel_size_um", pixel_size_um))
        if value is not None
    }
    native = dtype.newbyteorder("=")
    return Movie(
        shape=(shape[0], shape[1], shape[2]),
        dtype=native,
        name=name,
        axes="TYX",
        channel=None,
        files=(),
        file_frames=parts,
        frame_interval_s=frame_interval_s,
        pixel_size_um=pixel_size_um,
        found_in=found_in,
        sources=(ArrayFrames(array=array, dtype=native),),
        source_frames=(shape[0],),
    )


def open_movie(source: str | Path | Sequence[str | Path], *, channel: int | None = None) -> Movie:
    """Open a TIFF movie without reading its pixels.

    TIFF and BigTIFF, with the metadata of ImageJ, OME or tifffile or with none; any real pixel type; unpacked files are
    mapped into memory, packed ones are unpacked frame by frame as they are asked for. The axis besides Y and X is time,
    whatever the file calls it; several channels need `channel`; time together with depth is refused.

    Parameters
    ----------
    source : path or sequence of paths
        A file; a folder of one file a trial, taken in natural order (trial_2 before trial_10); or such files in their
        order. A folder whose files all hold a single frame is one movie.
    channel : int, optional
        Channel to take, counted from 0. Needed where the file holds several.

    Returns
    -------
    Movie

    Raises
    ------
    MovieError
        If a file is missing, no TIFF, a colour picture or cut short; if a codec is missing; if there are fewer than two
        frames, channels to choose from or axes that cannot be told; if the files of the trials are not alike.

    Warns
    -----
    AnalysisWarning
        If pixels are not square, files disagree about the frame interval, or a recording was stopped early.
    """
    paths, name = _find_files(source)
    opened = [open_tiff(path, channel=channel, keep_open=len(paths) <= _MOST_OPEN_FILES) for path in paths]
    first = opened[0]
    for other in opened[1:]:
        _check_alike(first, other)
    source_frames = tuple(part.shape[0] for part in opened)
    n_frames = sum(source_frames)
    if n_frames < 2:
        raise MovieError(f"{name} holds a single image: a movie needs at least 2 frames, axes T, Y, X.")
    single_images = max(source_frames) == 1
    layout = first.layout
    return Movie(
        shape=(n_frames, *first.shape[1:]),
        dtype=first.dtype,
        name=name,
        axes=layout.axes,
        channel=channel if "C" in layout.axes else None,
        files=tuple(paths),
        file_frames=(n_frames,) if single_images else source_frames,
        frame_interval_s=layout.frame_interval_s,
        pixel_size_um=layout.pixel_size_um,
        found_in=dict(layout.found_in),
        sources=tuple(opened),
        source_frames=source_frames,
    )


def content_digest(movie: Movie) -> str:
    """SHA-256 of what a movie holds, whatever its files are called.

    Returns
    -------
    str
        For one file the hash of the file; for several the hash of their hashes, in order; for an array the hash of its
        type, shape and pixels. Hexadecimal.
    """
    if not movie.files:
        digest = hashlib.sha256(f"{movie.dtype.str}{movie.shape}".encode())
        for _, block in movie.blocks(64):
            digest.update(np.ascontiguousarray(block).data)
        return digest.hexdigest()
    digests = [file_digest(path) for path in movie.files]
    return digests[0] if len(digests) == 1 else hashlib.sha256("".join(digests).encode()).hexdigest()


def file_digest(path: Path) -> str:
    """SHA-256 of a file, hexadecimal."""
    digest = hashlib.sha256()
    with path.open("rb") as file:
        while block := file.read(_HASH_BYTES):
            digest.update(block)
    return digest.hexdigest()


def _find_files(source: str | Path | Sequence[str | Path]) -> tuple[list[Path], str]:
    """Return files of a movie in order, and the movie's name."""
    if not isinstance(source, (str, Path)):
        paths = [Path(path) for path in source]
        if not paths:
            raise MovieError("No movie file given: give a TIFF file, a folder of them, or one file a trial.")
        folders = [path for path in paths if path.is_dir()]
        if len(paths) == 1:
            return _find_files(paths[0])
        if folders:
            raise MovieError(f"{folders[0]} is a folder among several movie files: give one folder, or files only.")
        return paths, _stem(paths[0])
    path = Path(source)
    if not path.is_dir():
        if not path.exists():
            raise MovieError(f"{path} does not exist: check the movie's path.")
        return [path], _stem(path)
    files = [
        file
        for file in path.iterdir()
        if file.suffix.lower() in _SUFFIXES and not file.name.startswith(".") and file.is_file()
    ]
    if not files:
        raise MovieError(f"The folder {path} holds no TIFF file (.tif, .tiff): one file a trial is expected.")
    return sorted(files, key=lambda file: _natural_key(file.name)), path.resolve().name


def _stem(path: Path) -> str:
    return path.stem.removesuffix(".ome")


def _natural_key(name: str) -> tuple[list[str | int], str]:
    """Sort key by which numbers inside names count as numbers."""
    pieces = re.split(r"(\d+)", name.lower())
    return [int(piece) if k % 2 else piece for k, piece in enumerate(pieces)], name


def _check_alike(first: TiffFrames, other: TiffFrames) -> None:
    names = f"{other.path.name} differs from {first.path.name}"
    cure = "The files of one recording must be alike: leave it out, or analyse it alone."
    if other.shape[1:] != first.shape[1:]:
        sizes = [f"{part.shape[1]} x {part.shape[2]}" for part in (other, first)]
        raise MovieError(f"{names}: {sizes[0]} pixels instead of {sizes[1]}. {cure}")
    if other.dtype != first.dtype:
        raise MovieError(f"{names}: {other.dtype} pixels instead of {first.dtype}. {cure}")
    channels = [part.layout.n_channels for part in (other, first)]
    if channels[0] != channels[1]:
        raise MovieError(f"{names}: {channels[0]} channels instead of {channels[1]}. {cure}")
    intervals = [part.layout.frame_interval_s for part in (other, first)]
    if intervals[0] and intervals[1] and abs(intervals[0] - intervals[1]) > 0.01 * intervals[1]:
        warnings.warn(
            f"{other.path.name} says {intervals[0]:g} s a frame and {first.path.name} {intervals[1]:g} s, which is "
            "used for all: set frame_interval_s in the protocol.",
            AnalysisWarning,
            stacklevel=3,
        )
