"""Where the pages of a TIFF file keep their pixels, found by walking the file's own chain of directories.

All directories are read at once with numpy, so that tens of thousands of pages are listed in a fraction of a second
(TIFF 6.0, Adobe 1992; BigTIFF).
"""

from __future__ import annotations

import struct
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from ..errors import MovieError

if TYPE_CHECKING:
    from mmap import mmap

    from numpy.typing import NDArray

# Tag number and the value TIFF gives it where it is absent; these must agree on all pages.
_IMAGE_TAGS = {
    "width": (256, 0),
    "height": (257, 0),
    "bits per sample": (258, 1),
    "compression": (259, 1),
    "fill order": (266, 1),
    "samples per pixel": (277, 1),
    "planar configuration": (284, 1),
    "predictor": (317, 1),
    "tile width": (322, 0),
    "tile height": (323, 0),
    "sample format": (339, 1),
}
_SUBFILE_TYPE = 254
_STRIP_OFFSETS, _STRIP_BYTES, _TILE_OFFSETS, _TILE_BYTES = 273, 279, 324, 325
_WHOLE_NUMBERS = {1: "u1", 3: "u2", 4: "u4", 13: "u4", 16: "u8", 18: "u8"}
_REDUCED_IMAGE = 1


@dataclass(frozen=True, slots=True, kw_only=True)
class TiffPages:
    """The full-size pages of one file, in file order.

    Attributes
    ----------
    byte_order : str
        "<" or ">".
    image : dict of str to int
        Width, height, bits per sample and so on; the same on all pages.
    offsets, byte_counts : (n_pages, n_segments) ndarray of int
        Where each strip or tile of each page begins, and its stored length in bytes.
    """

    byte_order: str
    image: dict[str, int]
    offsets: NDArray[np.int64]
    byte_counts: NDArray[np.int64]


@dataclass(frozen=True, slots=True, kw_only=True)
class _Format:
    """Byte order and field sizes of a TIFF (32 bit) or BigTIFF (64 bit) file."""

    order: str
    head: struct.Struct  # number of entries of a directory
    link: struct.Struct  # position of the next directory
    entry: np.dtype[np.void]


def list_pages(data: mmap, *, name: str) -> TiffPages:
    """List the pages of a mapped TIFF file; thumbnails are left out.

    Parameters
    ----------
    data : mmap
        The whole file.
    name : str
        What messages call the file.

    Returns
    -------
    TiffPages

    Raises
    ------
    MovieError
        If the file is no TIFF, is cut short, or its pages differ in size or type.
    """
    form, first = _read_header(data, name)
    groups = _read_directories(data, form, first, name)
    tags = {title: _merge(groups, number, default) for title, (number, default) in _IMAGE_TAGS.items()}
    full_size = _merge(groups, _SUBFILE_TYPE, 0) & _REDUCED_IMAGE == 0
    image = {title: int(values[full_size][0]) for title, values in tags.items() if full_size.any()}
    for title, values in tags.items():
        differing = np.flatnonzero(full_size & (values != image.get(title)))
        if image and differing.size:
            page = int(differing[0])
            raise MovieError(
                f"{name}: page {page + 1} has {title} {values[page]}, but the first page has {image[title]}: "
                "a movie needs pages of one size and type. Save the movie alone in its file."
            )
    tiled = image.get("tile width", 0) > 0
    offsets = _segments(groups, _TILE_OFFSETS if tiled else _STRIP_OFFSETS, full_size, name)
    byte_counts = _segments(groups, _TILE_BYTES if tiled else _STRIP_BYTES, full_size, name)
    if offsets.shape != byte_counts.shape:
        raise MovieError(f"{name}: not all its pages say where their pixels are: the file is damaged. Save it again.")
    return TiffPages(byte_order=form.order, image=image, offsets=offsets, byte_counts=byte_counts)


def cut_short(name: str, n_whole: int, n_pages: int, *, needed: int, present: int) -> MovieError:
    """Return the error for a file that ends before its pixels do."""
    return MovieError(
        f"{name} is cut short: it needs {needed} bytes for {n_pages} images but has {present}; the first {n_whole} are "
        "whole. Copy or export the file again."
    )


def _read_header(data: mmap, name: str) -> tuple[_Format, int]:
    order = {b"II": "<", b"MM": ">"}.get(data[:2])
    version = int.from_bytes(data[2:4], "little" if order == "<" else "big")
    if order is None or version not in (42, 43) or len(data) < 16:
        raise MovieError(f"{name} is not a TIFF file: export the movie as TIFF (axes T, Y, X).")
    big = version == 43
    word = "u8" if big else "u4"
    fields = [("tag", order + "u2"), ("kind", order + "u2"), ("count", order + word), ("value", order + word)]
    form = _Format(
        order=order,
        head=struct.Struct(order + ("Q" if big else "H")),
        link=struct.Struct(order + ("Q" if big else "I")),
        entry=np.dtype(fields),
    )
    return form, int(form.link.unpack_from(data, 8 if big else 4)[0])


@dataclass(frozen=True, slots=True, kw_only=True)
class _Group:
    """Directories with equally many entries: their places in the chain and their entries (directory, entry)."""

    data: mmap
    form: _Format
    name: str
    pages: NDArray[np.int64]
    entries: NDArray[np.void]

    def find(self, tag: int) -> tuple[NDArray[np.int64], NDArray[np.void]]:
        """Rows of the group that hold `tag`, and their entries."""
        matches = self.entries["tag"] == tag
        rows, columns = np.nonzero(matches)
        rows, first = np.unique(rows, return_index=True)
        return rows, self.entries[rows, columns[first]]

    def values(self, found: NDArray[np.void], count: int) -> NDArray[np.int64]:
        """First `count` whole numbers of each entry, (entry, count)."""
        if count > len(self.data):
            raise MovieError(f"{self.name}: a page claims {count} strips, more than the file has bytes: it is damaged.")
        numbers = np.zeros((len(found), count), dtype=np.int64)
        field_bytes = found.dtype["value"].itemsize
        fields = np.ascontiguousarray(found["value"])[:, None].view(np.uint8)
        for kind in np.unique(found["kind"]).tolist():
            if kind not in _WHOLE_NUMBERS:
                raise MovieError(f"{self.name}: a directory entry has the unknown type {kind}: the file is damaged.")
            dtype = np.dtype(self.form.order + _WHOLE_NUMBERS[kind])
            n_bytes = count * dtype.itemsize
            of_kind = found["kind"] == kind
            fits = found["count"] * dtype.itemsize <= field_bytes
            here, elsewhere = np.flatnonzero(of_kind & fits), np.flatnonzero(of_kind & ~fits)
            if here.size:
                numbers[here] = np.ascontiguousarray(fields[here, :n_bytes]).view(dtype)
            places = found["value"][elsewhere].astype(np.int64).tolist()
            if places and max(places) + n_bytes > len(self.data):
                raise MovieError(f"{self.name} is cut short: its page tables are missing. Copy or export it again.")
            joined = b"".join([self.data[place : place + n_bytes] for place in places])
            numbers[elsewhere] = np.frombuffer(joined, dtype=dtype).reshape(-1, count)
        return numbers


def _read_directories(data: mmap, form: _Format, first: int, name: str) -> list[_Group]:
    starts: list[int] = []
    counts: list[int] = []
    seen: set[int] = set()
    size, place = len(data), first
    while place:
        if place in seen:
            raise MovieError(f"{name}: its page list runs in a circle: the file is damaged. Export it again.")
        seen.add(place)
        start = place + form.head.size
        n_entries = form.head.unpack_from(data, place)[0] if start <= size else 0
        end = start + n_entries * form.entry.itemsize
        if start > size or end + form.link.size > size:
            raise MovieError(
                f"{name} is cut short: page {len(starts) + 1} is announced but the file ends at byte {size}. "
                "Copy or export it again."
            )
        starts.append(start)
        counts.append(n_entries)
        place = form.link.unpack_from(data, end)[0]
    if not starts:
        raise MovieError(f"{name} holds no image: export the movie as TIFF (axes T, Y, X).")
    groups = []
    all_counts = np.asarray(counts)
    for n_entries in np.unique(all_counts).tolist():
        pages = np.flatnonzero(all_counts == n_entries)
        n_bytes = n_entries * form.entry.itemsize
        joined = b"".join([data[starts[page] : starts[page] + n_bytes] for page in pages.tolist()])
        entries = np.frombuffer(joined, dtype=form.entry).reshape(len(pages), n_entries)
        groups.append(_Group(data=data, form=form, name=name, pages=pages, entries=entries))
    return groups


def _merge(groups: list[_Group], tag: int, default: int) -> NDArray[np.int64]:
    """Value of a one-number tag on every page."""
    merged = np.full(sum(len(group.pages) for group in groups), default, dtype=np.int64)
    for group in groups:
        rows, found = group.find(tag)
        if rows.size:
            merged[group.pages[rows]] = group.values(found, 1)[:, 0]
    return merged


def _segments(groups: list[_Group], tag: int, wanted: NDArray[np.bool_], name: str) -> NDArray[np.int64]:
    """Numbers of a tag that lists strips or tiles, for the wanted pages (page, segment)."""
    found_in = [(group, *group.find(tag)) for group in groups]
    found_in = [
        (group, rows[wanted[group.pages[rows]]], found[wanted[group.pages[rows]]]) for group, rows, found in found_in
    ]
    lengths = {int(length) for _, _, found in found_in for length in np.unique(found["count"])}
    if len(lengths) != 1 or sum(len(rows) for _, rows, _ in found_in) != wanted.sum():
        raise MovieError(f"{name}: its pages are not all stored alike: save the movie alone in its file.")
    length = lengths.pop()
    pages = np.concatenate([group.pages[rows] for group, rows, _ in found_in])
    numbers = np.concatenate([group.values(found, length) for group, _, found in found_in])
    return numbers[np.argsort(pages)]
