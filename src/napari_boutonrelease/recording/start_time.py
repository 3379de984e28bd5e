"""When a movie was recorded, as well as its file tells."""

from __future__ import annotations

from datetime import datetime
from pathlib import Path
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    import tifffile


def recording_start(path: Path) -> tuple[datetime, str]:
    """Return when a movie was recorded.

    Parameters
    ----------
    path : Path
        The movie's first file.

    Returns
    -------
    start : datetime
        In the time zone of this computer, which is also taken for the file's where it names none.
    found_in : str
        `OME AcquisitionDate`, `TIFF DateTime`, or `last change of the file`, which may be much later.

    Raises
    ------
    OSError
        If the file cannot be read.
    """
    import tifffile

    try:
        with tifffile.TiffFile(path) as tiff:
            page = tiff.pages.first
            dates = (("OME AcquisitionDate", _ome_date(tiff)), ("TIFF DateTime", page.datetime))
        for found_in, date in dates:
            if date is not None:
                return date.astimezone(), found_in
    except (tifffile.TiffFileError, ValueError, OverflowError):  # no TIFF, or a date that no calendar has
        pass
    return datetime.fromtimestamp(Path(path).stat().st_mtime).astimezone(), "last change of the file"


def _ome_date(tiff: tifffile.TiffFile) -> datetime | None:
    from xml.etree import ElementTree

    if not tiff.is_ome:
        return None
    try:
        root = ElementTree.fromstring(tiff.pages.first.description.encode())
        return datetime.fromisoformat((root.findtext("{*}Image/{*}AcquisitionDate") or "").strip())
    except (ElementTree.ParseError, ValueError):
        return None
