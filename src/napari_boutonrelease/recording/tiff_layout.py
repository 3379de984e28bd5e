"""What the pages of a TIFF movie stand for: its axes, and the frame interval and pixel size it was saved with."""

from __future__ import annotations

import warnings
from collections.abc import Iterator
from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Any

import numpy as np

from ..errors import AnalysisWarning, ChannelError, MovieError

if TYPE_CHECKING:
    from xml.etree.ElementTree import Element

    from numpy.typing import NDArray

_UM = {
    **dict.fromkeys(("µm", "um", "micron", "microns", "micrometer", "micrometers", "micrometre", "micrometres"), 1.0),
    **dict.fromkeys(("nm", "nanometer", "nanometers", "nanometre"), 1e-3),
    **dict.fromkeys(("mm", "millimeter", "millimeters", "millimetre"), 1e3),
    **dict.fromkeys(("cm", "centimeter", "centimeters", "centimetre"), 1e4),
    **dict.fromkeys(("inch", "inches", "in"), 25400.0),
    **dict.fromkeys(("m", "meter", "metre"), 1e6),
}
_S = {
    **dict.fromkeys(("s", "sec", "secs", "second", "seconds"), 1.0),
    **dict.fromkeys(("ms", "msec", "millisecond", "milliseconds"), 1e-3),
    **dict.fromkeys(("µs", "us", "usec", "µsec", "microsecond", "microseconds"), 1e-6),
    **dict.fromkeys(("ns", "nsec", "nanosecond", "nanoseconds"), 1e-9),
    **dict.fromkeys(("min", "minute", "minutes"), 60.0),
    **dict.fromkeys(("h", "hr", "hour", "hours"), 3600.0),
}
_RESOLUTION_UNITS = {2: "inch", 3: "cm"}
_MOST_CHANNELS = 7  # ImageJ shows no more; a longer lone "channel" axis is a time series under a wrong name
_MICROSCOPE_UM = (1e-3, 20.0)  # 300 dots an inch are 85 µm: the resolution of a printer, not of a microscope


@dataclass(frozen=True, slots=True, kw_only=True)
class TiffLayout:
    """Axes and calibration of one file.

    Attributes
    ----------
    axes : str
        Letters of all axes, slowest first, as in the file; ends in "YX".
    page : ndarray of int, one axis for each letter before "YX"
        Which page holds each plane; -1 where there is none.
    channels : tuple of str
        Names of the channels, in order; empty where the file names none.
    frame_interval_s, pixel_size_um : float or None
        None where the file does not say.
    found_in : dict of str to str
        Where each of the two was found.
    """

    axes: str
    page: NDArray[np.int64]
    channels: tuple[str, ...] = ()
    frame_interval_s: float | None = None
    pixel_size_um: float | None = None
    found_in: dict[str, str] = field(default_factory=dict)

    @property
    def n_channels(self) -> int:
        """Number of channels; 1 where the file has no such axis."""
        return int(self.page.shape[self.axes.index("C")]) if "C" in self.axes else 1

    def frames(self, channel: int | None, *, name: str) -> NDArray[np.int64]:
        """Page of each frame, (n_frames,), once a channel is chosen.

        A lone axis besides Y and X is time, whatever the file calls it: many programs save a time series as "Z" or
        leave the axis unnamed. Time together with depth is refused.

        Raises
        ------
        MovieError
            If a channel must be chosen, is not there, or more than one axis is left.
        """
        axes, page = self.axes[:-2], self.page
        time_as_channels = channel is None and page.size == self.n_channels > _MOST_CHANNELS
        if not time_as_channels:
            _check_channel(channel, self.n_channels, self.channels, name)
            if "C" in axes:
                page = np.take(page, channel or 0, axis=axes.index("C"))
                axes = axes.replace("C", "", 1)
        longer = [letter for letter, size in zip(axes, page.shape, strict=True) if size > 1]
        if len(longer) > 1:
            sizes = ", ".join(f"{letter} {size}" for letter, size in zip(axes, page.shape, strict=True))
            raise MovieError(
                f"{name} has the axes {self.axes} ({sizes} planes): a movie needs one axis besides Y and X, time. "
                "Save one depth or position as T, Y, X."
            )
        return page.ravel()


def read_layout(tiff: Any, *, n_pages: int, height: int, width: int, name: str) -> TiffLayout:
    """Read axes and calibration of an open file.

    Parameters
    ----------
    tiff : tifffile.TiffFile
        The file; only its first page is looked at.
    n_pages : int
        Number of full-size pages in the file.
    height, width : int
        Size of a page in pixels.
    name : str
        What messages call the file.

    Returns
    -------
    TiffLayout

    Raises
    ------
    MovieError
        If the description contradicts the pages.
    """
    page = tiff.pages.first
    if tiff.is_ome:  # before ImageJ: some programs write both, and OME says more
        return _ome_layout(page.description, n_pages, name)
    if tiff.is_imagej:
        return _imagej_layout(tiff.imagej_metadata or {}, page, n_pages, name)
    pixel = _tag_pixel_size(page, name)
    found_in = {} if pixel is None else {"pixel_size_um": "TIFF resolution"}
    axes = "T"
    sizes: tuple[int, ...] = (n_pages,)
    if page.is_shaped:
        axes, sizes = _shaped_axes(dict(tiff.shaped_metadata[0]), height, width, n_pages, name)
    elif tiff.is_stk and n_pages == 1:
        series = tiff.series[0]
        axes, sizes = series.axes[:-2], series.shape[:-2]
    return TiffLayout(
        axes=axes + "YX",
        page=np.arange(int(np.prod(sizes))).reshape(sizes),
        pixel_size_um=pixel,
        found_in=found_in,
    )


def _check_channel(channel: int | None, n_channels: int, names: tuple[str, ...], name: str) -> None:
    titles = [f"{k} ({names[k]})" if k < len(names) and names[k] else str(k) for k in range(n_channels)]
    if channel is None and n_channels > 1:
        message = f"{name} holds {n_channels} channels: choose one with --channel {' or '.join(titles)}."
        raise ChannelError(message, titles=tuple(titles))
    if channel is not None and not 0 <= channel < n_channels:
        raise MovieError(f"{name} has no channel {channel}: it holds {', '.join(titles)} (counted from 0).")


def _fit_planes(axes: str, sizes: tuple[int, ...], n_pages: int, name: str) -> NDArray[np.int64]:
    """Pages of planes in C order; one page may hold all of them, an aborted recording fewer of the slowest."""
    n_planes = int(np.prod(sizes))
    if n_pages in (1, n_planes):
        return np.arange(n_planes).reshape(sizes)
    whole = n_pages // max(1, int(np.prod(sizes[1:])))
    if n_pages > n_planes or not whole:
        described = " x ".join(f"{letter} {size}" for letter, size in zip(axes, sizes, strict=True))
        raise MovieError(
            f"{name} describes {n_planes} planes ({described}) but holds {n_pages} pages: save the movie "
            "alone, as T, Y, X."
        )
    _warn_aborted(name, whole, sizes[0])
    sizes = (whole, *sizes[1:])
    return np.arange(int(np.prod(sizes))).reshape(sizes)


def _warn_aborted(name: str, present: int, announced: int) -> None:
    warnings.warn(
        f"{name} announces {announced} frames but holds {present}: the recording was stopped early, or the file is not "
        "complete.",
        AnalysisWarning,
        stacklevel=2,
    )


def _unit(text: object) -> str:
    return str(text).strip().lower().replace("\\u00b5", "µ").replace("μ", "µ")


def _known(value: object, unit: object, factors: dict[str, float]) -> float | None:
    """`value` in the base unit, or None where it is no positive number or its unit is unknown."""
    try:
        number = float(str(value)) * factors[_unit(unit)]
    except (ValueError, KeyError):
        return None
    return number if np.isfinite(number) and number > 0 else None


def _square(y_um: float | None, x_um: float | None, name: str) -> float | None:
    """One pixel size out of two; a doubt is spoken where they differ."""
    if y_um is None or x_um is None:
        return y_um or x_um
    if abs(y_um - x_um) > 0.01 * y_um:
        warnings.warn(
            f"{name}: pixels are not square ({y_um:g} µm in y, {x_um:g} µm in x): {y_um:g} µm is used for both. Set "
            "pixel_size_um in the protocol if that is wrong.",
            AnalysisWarning,
            stacklevel=2,
        )
    return y_um


def _tag_pixel_size(page: Any, name: str, unit: str | None = None) -> float | None:
    """Pixel size from the resolution tags, in µm."""
    if unit is None:
        tag = page.tags.get("ResolutionUnit")
        unit = _RESOLUTION_UNITS.get(int(tag.value) if tag else 2, "")
    sizes = []
    for key in ("YResolution", "XResolution"):
        tag = page.tags.get(key)
        per_unit, scale = tag.value if tag else (0, 1)
        size = _known(scale / per_unit, unit, _UM) if per_unit else None
        sizes.append(size if size and _MICROSCOPE_UM[0] <= size <= _MICROSCOPE_UM[1] else None)
    return _square(sizes[0], sizes[1], name)


def _imagej_layout(meta: dict[str, Any], page: Any, n_pages: int, name: str) -> TiffLayout:
    sizes = [int(meta.get(key, 1)) for key in ("frames", "slices", "channels")]
    n_images = int(meta.get("images", 1))
    if int(np.prod(sizes)) == 1:
        sizes[0] = n_images if n_images > 1 else n_pages
    chosen = [(letter, size) for letter, size in zip("TZC", sizes, strict=True) if size > 1] or [("T", 1)]
    axes = "".join(letter for letter, _ in chosen)
    n_channels = sizes[2]
    labels = meta.get("Labels") or []
    labels = [labels] if isinstance(labels, str) else list(labels)
    interval = _known(meta.get("finterval"), meta.get("tunit") or "s", _S)
    pixel = _tag_pixel_size(page, name, str(meta["unit"]) if "unit" in meta else None)
    found_in = {} if interval is None else {"frame_interval_s": "ImageJ finterval"}
    if pixel is not None:
        found_in["pixel_size_um"] = "ImageJ unit and resolution"
    return TiffLayout(
        axes=axes + "YX",
        page=_fit_planes(axes, tuple(size for _, size in chosen), n_pages, name),
        channels=tuple(str(label) for label in labels[:n_channels]) if n_channels > 1 else (),
        frame_interval_s=interval,
        pixel_size_um=pixel,
        found_in=found_in,
    )


def _shaped_axes(meta: dict[str, Any], height: int, width: int, n_pages: int, name: str) -> tuple[str, tuple[int, ...]]:
    """Axes before Y and X, and their sizes, from tifffile's own description."""
    shape = tuple(int(size) for size in meta.get("shape", ()))
    axes = str(meta.get("axes") or "Q" * (len(shape) - 2) + "YX").upper()
    if axes.endswith("S") and shape[-1:] == (1,):
        axes, shape = axes[:-1], shape[:-1]
    if len(axes) != len(shape) or axes[-2:] != "YX" or shape[-2:] != (height, width):
        if len(axes) == len(shape) and {"Y", "X"} <= set(axes) and axes[-2:] != "YX":
            raise MovieError(f"{name} has the axes {axes}: save it with time first, as T, Y, X.")
        return "T", (n_pages,)
    axes, shape = axes[:-2], shape[:-2]
    longer = [size for size in shape if size > 1]
    n_planes = int(np.prod(shape))
    if n_planes != n_pages and not (n_pages == 1 and n_planes > 1):
        if len(longer) > 1:
            raise MovieError(
                f"{name} describes {n_planes} planes (axes {axes}YX) but holds {n_pages} pages: save the movie alone, "
                "as T, Y, X."
            )
        return "T", (n_pages,)  # written in several steps, each with its own description
    return (axes, shape) if axes else ("T", (1,))


def _ome_layout(description: str, n_pages: int, name: str) -> TiffLayout:
    from xml.etree import ElementTree

    try:
        root = ElementTree.fromstring(description.encode())
    except ElementTree.ParseError as error:
        raise MovieError(f"{name}: its OME description cannot be read ({error}). Export the movie again.") from error
    every = root.findall("{*}Image/{*}Pixels")
    movies = [pixels for pixels in every if int(pixels.get("SizeT", 1)) * int(pixels.get("SizeZ", 1)) > 1] or every[:1]
    if len(movies) != 1:
        raise MovieError(
            f"{name} holds {len(movies)} OME images (positions or series): a movie file needs one. "
            "Save each in its own file."
        )
    pixels = movies[0]
    names = {uuid.get("FileName") for uuid in pixels.iterfind("{*}TiffData/{*}UUID")}
    if len(names) > 1:
        raise MovieError(f"{name} is one of {len(names)} files of an OME-TIFF set: save the movie as one file.")
    axes = "".join(reversed(pixels.get("DimensionOrder", "XYCZT")[2:]))
    page = _ome_pages(pixels, axes, n_pages)
    by_frame = np.moveaxis(page, axes.index("T"), 0).reshape(page.shape[axes.index("T")], -1)
    missing = np.any(by_frame < 0, axis=1)
    n_whole = int(np.argmax(missing)) if missing.any() else len(missing)
    if n_whole == 0 or not missing[n_whole:].all():
        raise MovieError(
            f"{name}: OME frame {n_whole + 1} has no page in the file: export the movie again, as one file."
        )
    if missing.any():
        _warn_aborted(name, n_whole, len(missing))
        page = np.take(page, range(n_whole), axis=axes.index("T"))
    interval, interval_in = _ome_interval(pixels)
    pixel = _square(
        _known(pixels.get("PhysicalSizeY"), pixels.get("PhysicalSizeYUnit", "µm"), _UM),
        _known(pixels.get("PhysicalSizeX"), pixels.get("PhysicalSizeXUnit", "µm"), _UM),
        name,
    )
    found_in = {} if interval is None else {"frame_interval_s": interval_in}
    if pixel is not None:
        found_in["pixel_size_um"] = "OME PhysicalSize"
    keep = [k for k in range(page.ndim) if page.shape[k] > 1] or [axes.index("T")]
    return TiffLayout(
        axes="".join(axes[k] for k in keep) + "YX",
        page=page.reshape([page.shape[k] for k in keep]),
        channels=tuple(channel.get("Name", "") for channel in pixels.iterfind("{*}Channel")),
        frame_interval_s=interval,
        pixel_size_um=pixel,
        found_in=found_in,
    )


def _ome_pages(pixels: Element, axes: str, n_pages: int) -> NDArray[np.int64]:
    """Page of each plane, axes as in `axes`, -1 where the file has none."""
    sizes = tuple(int(pixels.get(f"Size{letter}", 1)) for letter in axes)
    page = np.full(int(np.prod(sizes)), -1, dtype=np.int64)
    for first_plane, first_page, n_planes in _ome_blocks(pixels, axes, sizes):
        planes = np.arange(first_plane, min(first_plane + n_planes, page.size))
        pages = first_page + np.arange(len(planes))
        present = (pages < n_pages) | (n_pages == 1)  # one page may hold all planes
        page[planes[present]] = pages[present]
    return page.reshape(sizes)


def _ome_blocks(pixels: Element, axes: str, sizes: tuple[int, ...]) -> Iterator[tuple[int, int, int]]:
    """(first plane, first page, number of planes) of each TiffData element."""
    elements = pixels.findall("{*}TiffData")
    n_planes = int(np.prod(sizes))
    if not elements:
        yield 0, 0, n_planes
    for element in elements:
        where = [int(element.get(f"First{letter}", 0)) for letter in axes]
        plane = int(np.ravel_multi_index(where, sizes, mode="clip"))
        count = element.get("PlaneCount")
        length = int(count) if count else (1 if element.get("IFD") else n_planes)
        yield plane, int(element.get("IFD", 0)), length


def _ome_interval(pixels: Element) -> tuple[float | None, str]:
    interval = _known(pixels.get("TimeIncrement"), pixels.get("TimeIncrementUnit", "s"), _S)
    if interval is not None:
        return interval, "OME TimeIncrement"
    times: dict[int, float] = {}
    for plane in pixels.iterfind("{*}Plane"):
        seconds = _known(plane.get("DeltaT"), plane.get("DeltaTUnit", "s"), _S)
        frame = int(plane.get("TheT", 0))
        if plane.get("DeltaT") is not None and plane.get("TheC", "0") == "0" and plane.get("TheZ", "0") == "0":
            times[frame] = seconds or 0.0  # the first frame is often at 0 exactly
    frames = sorted(times)
    if len(frames) < 2:
        return None, ""
    steps = np.diff([times[frame] for frame in frames]) / np.diff(frames)
    middle = float(np.median(steps))
    return (middle, "OME plane times (DeltaT)") if middle > 0 else (None, "")
