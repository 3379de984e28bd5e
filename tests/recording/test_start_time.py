"""When a movie was recorded, from the best that its file holds."""

import os
from datetime import datetime

import numpy as np
import pytest
import tifffile

from napari_boutonrelease.recording.start_time import recording_start

FRAMES = np.zeros((5, 8, 8), dtype=np.uint16)


def test_the_date_of_ome_is_taken(tmp_path):
    date = "2024-05-01T10:11:12+02:00"
    tifffile.imwrite(tmp_path / "a.ome.tif", FRAMES, ome=True, metadata={"axes": "TYX", "AcquisitionDate": date})
    start, found_in = recording_start(tmp_path / "a.ome.tif")
    assert start == datetime.fromisoformat(date)
    assert found_in == "OME AcquisitionDate"


def test_the_date_of_the_tag_is_local_time(tmp_path):
    tifffile.imwrite(tmp_path / "a.tif", FRAMES, datetime="2024:05:01 10:11:12")
    start, found_in = recording_start(tmp_path / "a.tif")
    assert start == datetime(2024, 5, 1, 10, 11, 12).astimezone()
    assert start.tzinfo is not None
    assert found_in == "TIFF DateTime"


@pytest.mark.parametrize("kind", ["no date", "date of no calendar", "no TIFF"])
def test_otherwise_the_last_change_counts(tmp_path, kind):
    path = tmp_path / "a.tif"
    if kind == "no TIFF":
        path.write_bytes(b"something else")
    else:
        extra = [(306, "s", 20, "0000:00:00 00:00:00", True)] if kind == "date of no calendar" else []
        tifffile.imwrite(path, FRAMES, extratags=extra)
    os.utime(path, (1.7e9, 1.7e9))
    start, found_in = recording_start(path)
    assert start.timestamp() == 1.7e9
    assert start.tzinfo is not None
    assert found_in == "last change of the file"


def test_a_file_that_is_gone_is_an_error(tmp_path):
    with pytest.raises(FileNotFoundError, match=r"gone\.tif"):
        recording_start(tmp_path / "gone.tif")
