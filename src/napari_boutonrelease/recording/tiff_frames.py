"""One TIFF file as a row of frames, of which only those asked for are read."""

from __future__ import annotations

import mmap
import struct
from collections.abc import Callable
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from ..errors import MovieError
from .tiff_layout import TiffLayout, read_layout
from .tiff_pages import TiffPages, cut_short, list_pages

_INSTALL = 'pip install "napari-boutonrelease[codecs]"'


@dataclass(frozen=True, slots=True, kw_only=True)
class TiffFrames:
    """The frames of one channel of one file.

    Attributes
    ----------
    path : Path
    shape : (int, int, int)
        (frame, y, x).
    dtype : dtype
        Of the pixels, in this machine's byte order.
    layout : TiffLayout
        Axes and calibration.
    """

    path: Path
    shape: tuple[int, int, int]
    dtype: np.dtype[Any]
    layout: TiffLayout
    _stored: np.dtype[Any] = field(repr=False)
    _offsets: NDArray[np.int64] = field(repr=False)  # (frame, segment)
    _byte_counts: NDArray[np.int64] = field(repr=False)
    _stride: int | None = field(repr=False)  # bytes from frame to frame, where the file is a plain array
    _decode: Callable[..., Any] | None = field(repr=False)  # None where frames lie unpacked in one piece
    _mapped: list[mmap.mmap] = field(repr=False)  # at most one map, kept open

    def read(self, start: int, stop: int) -> NDArray[Any]:
        """Frames `start` to `stop` (excluded), (frame, y, x); a read-only view of the file where that is possible."""
        data = self._mapped[0] if self._mapped else map_file(self.path)
        n_frames, (_, height, width) = stop - start, self.shape
        if self._decode is None and self._stride is not None and n_frames:
            view = np.ndarray(
                (n_frames, height, width),
                self._stored,
                buffer=data,
                offset=int(self._offsets[start, 0]),
                strides=(self._stride, width * self._stored.itemsize, self._stored.itemsize),
            )
            return view if self._stored == self.dtype else view.astype(self.dtype)
        block = np.zeros((n_frames, height, width), dtype=self.dtype)
        for k in range(n_frames):
            self._read_frame(data, start + k, block[k])
        return block

    def _read_frame(self, data: mmap.mmap, frame: int, out: NDArray[Any]) -> None:
        offsets, byte_counts = self._offsets[frame].tolist(), self._byte_counts[frame].tolist()
        if self._decode is None:
            out[:] = np.ndarray(out.shape, self._stored, buffer=data, offset=offsets[0])
            return
        for index, (offset, n_bytes) in enumerate(zip(offsets, byte_counts, strict=True)):
            try:
                segment, (_, _, y, x, _), _ = self._decode(data[offset : offset + n_bytes] if n_bytes else None, index)
            except Exception as error:  # codecs raise whatever they like on damaged bytes
                raise _decoding_error(self.path.name, frame, error) from error
            if segment is not None:  # strips and tiles that were never written stay 0
                pixels = segment[0, : out.shape[0] - y, : out.shape[1] - x, 0]
                out[y : y + pixels.shape[0], x : x + pixels.shape[1]] = pixels


def map_file(path: Path) -> mmap.mmap:
    """Map a file into memory, read-only.

    Raises
    ------
    MovieError
        If it cannot be opened or is empty.
    """
    try:
        with path.open("rb") as file:
            if not path.stat().st_size:
                raise MovieError(f"{path} is empty: copy or export the movie again.")
            return mmap.mmap(file.fileno(), 0, access=mmap.ACCESS_READ)
    except OSError as error:
        raise MovieError(
            f"{path} cannot be opened ({error.strerror or error}): check its path and permissions."
        ) from error


def open_tiff(path: Path, *, channel: int | None, keep_open: bool) -> TiffFrames:
    """Open one TIFF file without reading its pixels.

    Parameters
    ----------
    path : Path
    channel : int or None
        Channel to take, counted from 0; None where the file has one.
    keep_open : bool
        Keep the file mapped between reads; False where there are more files than a process may hold open.

    Returns
    -------
    TiffFrames

    Raises
    ------
    MovieError
        If the file is not a movie that can be read; see `open_movie`.
    """
    import tifffile

    name = path.name
    data = map_file(path)
    pages = list_pages(data, name=name)
    _check_gray(pages, name)
    try:
        with tifffile.TiffFile(path) as tiff:
            first = tiff.pages.first
            dtype, decode = first.dtype, first.decode
            height, width = int(first.imagelength), int(first.imagewidth)
            layout = read_layout(tiff, n_pages=len(pages.offsets), height=height, width=width, name=name)
    except MovieError:
        raise
    except (ValueError, TypeError, ArithmeticError, LookupError, AttributeError, struct.error) as error:
        raise MovieError(f"{name} is a damaged TIFF file ({error}): copy or export it again.") from error
    if dtype is None or dtype.kind not in "iuf" or pages.image["bits per sample"] == 1:
        raise MovieError(f"{name} holds {dtype or 'unknown'} pixels: a movie needs whole or real numbers, e.g. uint16.")

    frames = layout.frames(channel, name=name)
    stored = dtype.newbyteorder("<" if pages.byte_order == "<" else ">")
    frame_bytes = height * width * dtype.itemsize
    offsets, byte_counts = _plain_frames(pages, frame_bytes, dtype.itemsize)
    plain = offsets.shape[1] == 1 and byte_counts is not pages.byte_counts
    if len(pages.offsets) == 1 and frames.max() > 0:  # one page announces a plain array of many frames
        if not plain:
            raise MovieError(f"{name} announces {frames.size} frames but holds one page: export it as T, Y, X.")
        n_planes = int(frames.max()) + 1
        offsets = offsets + frame_bytes * np.arange(n_planes)[:, None]
        byte_counts = np.full_like(offsets, frame_bytes)
    short = (offsets + byte_counts).max(axis=1) > len(data)
    if short.any():
        needed = int((offsets + byte_counts).max())
        raise cut_short(name, int(np.argmax(short)), len(offsets), needed=needed, present=len(data))
    offsets, byte_counts = offsets[frames], byte_counts[frames]
    opened = TiffFrames(
        path=path,
        shape=(len(frames), height, width),
        dtype=dtype.newbyteorder("="),
        layout=layout,
        _stored=stored,
        _offsets=offsets,
        _byte_counts=byte_counts,
        _stride=_constant_stride(offsets, frame_bytes) if plain else None,
        _decode=None if plain else decode,
        _mapped=[data] if keep_open else [],
    )
    if not plain:
        opened.read(0, 1)  # a missing codec or a damaged first frame is known now, not after an hour
    return opened


def _check_gray(pages: TiffPages, name: str) -> None:
    if pages.image["samples per pixel"] != 1:
        raise MovieError(
            f"{name} has {pages.image['samples per pixel']} samples per pixel (a colour picture): save the gray "
            "values of the camera, one channel."
        )


def _plain_frames(pages: TiffPages, frame_bytes: int, itemsize: int) -> tuple[NDArray[np.int64], NDArray[np.int64]]:
    """Offset and length of each page as one piece where it is stored unpacked in one piece; else its segments."""
    image, offsets, byte_counts = pages.image, pages.offsets, pages.byte_counts
    as_they_are = {"compression": 1, "predictor": 1, "fill order": 1, "tile width": 0, "bits per sample": 8 * itemsize}
    if any(image[title] != value for title, value in as_they_are.items()):
        return offsets, byte_counts
    in_one_piece = (np.diff(offsets, axis=1) == byte_counts[:, :-1]).all()
    whole = byte_counts.sum(axis=1) == frame_bytes
    if offsets.shape[1] > 1 and not (in_one_piece and whole.all()):
        return offsets, byte_counts
    return offsets[:, :1], np.full((len(offsets), 1), frame_bytes, dtype=np.int64)


def _constant_stride(offsets: NDArray[np.int64], frame_bytes: int) -> int | None:
    """Bytes from each frame to the next, where they are the same everywhere."""
    if len(offsets) == 1:
        return frame_bytes
    steps = np.diff(offsets[:, 0])
    return int(steps[0]) if (steps == steps[0]).all() and steps[0] > 0 else None


def _decoding_error(name: str, frame: int, error: Exception) -> MovieError:
    if isinstance(error, ImportError) or "imagecodecs" in str(error):
        return MovieError(f"{name} is packed in a way that needs the package imagecodecs: {_INSTALL}")
    return MovieError(f"{name}: frame {frame} cannot be unpacked ({error}): the file is damaged. Copy it again.")
