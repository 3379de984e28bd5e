"""Movies are read back exactly, lazily, from every kind of TIFF; what is no movie is refused with a cure."""

from __future__ import annotations

import hashlib
import struct
import subprocess
import sys
import tracemalloc
import warnings
from pathlib import Path

import numpy as np
import pytest
import tifffile

from napari_boutonrelease.errors import AnalysisWarning, MovieError
from napari_boutonrelease.recording import Movie, content_digest, fill_dead, movie_from_array, open_movie

FRAMES = np.random.default_rng(1).integers(0, 4000, (30, 20, 33)).astype(np.uint16)


def all_frames(movie: Movie) -> np.ndarray:
    return movie.read(0, movie.shape[0])


def write_pages(path: Path, frames: np.ndarray, **options: object) -> None:
    """One directory a frame, each with its pixels behind it, as cameras write while they record."""
    with tifffile.TiffWriter(path) as tiff:
        for frame in frames:
            tiff.write(frame, contiguous=False, metadata=None, **options)


def write_ome(path: Path, n_pages: int, pixels: str, *, planes: str = "<TiffData/>", images: int = 1) -> None:
    image = (
        f'<Image ID="Image:0"><Pixels ID="P" DimensionOrder="XYCZT" Type="uint16" SizeX="33" SizeY="20" {pixels}>'
        f'<Channel ID="C:0"/>{planes}</Pixels></Image>'
    )
    xml = f'<OME xmlns="http://www.openmicroscopy.org/Schemas/OME/2016-06">{image * images}</OME>'
    with tifffile.TiffWriter(path) as tiff:
        for k, frame in enumerate(FRAMES[:n_pages]):
            tiff.write(frame, contiguous=False, metadata=None, description=xml if k == 0 else None)


STORED = {
    "plain array": {"metadata": None},
    "tifffile's own": {},
    "tifffile's own, one directory": {"truncate": True},
    "BigTIFF": {"bigtiff": True},
    "big-endian": {"byteorder": ">"},
    "big-endian BigTIFF": {"byteorder": ">", "bigtiff": True, "metadata": None},
    "ImageJ": {"imagej": True},
    "ImageJ, time as depth": {"imagej": True, "metadata": {"axes": "ZYX"}},
    "time as an unknown axis": {"metadata": {"axes": "IYX"}},
    "strips": {"rowsperstrip": 7},
    "tiles": {"tile": (16, 16)},
    "deflate": {"compression": "deflate"},
    "deflate, differences, big-endian": {"compression": "deflate", "predictor": True, "byteorder": ">"},
    "LZW strips": {"compression": "lzw", "rowsperstrip": 7, "predictor": True},
    "zstd tiles": {"compression": "zstd", "tile": (16, 32)},
}


@pytest.mark.parametrize("options", STORED.values(), ids=STORED.keys())
def test_reads_back_what_was_written(tmp_path: Path, options: dict[str, object]) -> None:
    tifffile.imwrite(tmp_path / "cell 3.tif", FRAMES, **options)
    movie = open_movie(tmp_path / "cell 3.tif")
    assert (movie.shape, movie.dtype, movie.name) == (FRAMES.shape, np.uint16, "cell 3")
    assert (movie.file_frames, movie.channel, movie.full_scale) == ((30,), None, 65535)
    np.testing.assert_array_equal(all_frames(movie), FRAMES)
    np.testing.assert_array_equal(movie.read(7, 9), FRAMES[7:9])
    assert movie.read(7, 9).dtype == np.dtype("=u2")
    assert movie.read(4, 4).shape == (0, 20, 33)


@pytest.mark.parametrize("options", [{}, {"compression": "deflate"}, {"rowsperstrip": 6}], ids=str)
def test_reads_one_directory_a_frame(tmp_path: Path, options: dict[str, object]) -> None:
    write_pages(tmp_path / "m.tif", FRAMES, **options)
    movie = open_movie(tmp_path / "m.tif")
    np.testing.assert_array_equal(all_frames(movie), FRAMES)
    np.testing.assert_array_equal(movie.read(29, 30), FRAMES[29:])


def test_reads_a_metamorph_stack(tmp_path: Path) -> None:
    planes = np.tile(np.array([0, 1, 2451545, 0, 2451545, 0], "<u4"), (30, 1)).tobytes()
    tags = [(33628, 5, 1, np.array([0, 1], "<u4").tobytes(), True), (33629, 5, 90, planes, True)]
    tifffile.imwrite(tmp_path / "m.stk", FRAMES, metadata=None, truncate=True, extratags=tags)
    content = (tmp_path / "m.stk").read_bytes()
    written, meant = (struct.pack("<HHI", 33629, 5, count) for count in (180, 30))  # the format counts planes here
    assert content.count(written) == 1
    (tmp_path / "m.stk").write_bytes(content.replace(written, meant))
    np.testing.assert_array_equal(all_frames(open_movie(tmp_path / "m.stk")), FRAMES)


def test_reads_directories_at_uneven_distances(tmp_path: Path) -> None:
    with tifffile.TiffWriter(tmp_path / "m.tif") as tiff:
        for k, frame in enumerate(FRAMES):
            tiff.write(frame, contiguous=False, metadata=None, description="x" * (1 + 37 * (k % 3)))
    np.testing.assert_array_equal(all_frames(open_movie(tmp_path / "m.tif")), FRAMES)


@pytest.mark.parametrize("dtype", ["uint8", "int16", "uint32", "float32", "float64", ">f4"])
def test_keeps_the_pixel_type(tmp_path: Path, dtype: str) -> None:
    frames = (FRAMES % 200).astype(dtype)
    tifffile.imwrite(tmp_path / "m.tif", frames, byteorder=">" if dtype.startswith(">") else "<")
    movie = open_movie(tmp_path / "m.tif")
    np.testing.assert_array_equal(all_frames(movie), frames)
    assert all_frames(movie).dtype == np.dtype(dtype).newbyteorder("=")
    assert movie.full_scale == (None if "f" in dtype else np.iinfo(dtype).max)


def test_blocks_cover_the_movie_once(tmp_path: Path) -> None:
    tifffile.imwrite(tmp_path / "m.tif", FRAMES)
    blocks = list(open_movie(tmp_path / "m.tif").blocks(8))
    assert [start for start, _ in blocks] == [0, 8, 16, 24]
    np.testing.assert_array_equal(np.concatenate([block for _, block in blocks]), FRAMES)


def test_frames_outside_the_movie_are_refused() -> None:
    movie = movie_from_array(FRAMES)
    with pytest.raises(IndexError, match="frames 29 to 31 of a movie of 30"):
        movie.read(29, 31)


@pytest.mark.parametrize(
    ("unit", "per_unit", "tunit", "interval"),
    [
        ("micron", 10, "sec", 0.05),
        ("um", 10, "s", 0.05),
        ("µm", 10, "ms", 50),
        ("nm", 0.01, "msec", 50),
        ("cm", 1e5, "min", 0.05 / 60),
        ("inch", 254000, "usec", 50000),
        ("mm", 1e4, None, 0.05),
    ],
)
def test_imagej_calibration(tmp_path: Path, unit: str, per_unit: float, tunit: str | None, interval: float) -> None:
    metadata = {"axes": "TYX", "finterval": interval, "unit": unit} | ({"tunit": tunit} if tunit else {})
    if unit == "µm":
        metadata["unit"] = "\\u00B5m"  # how ImageJ itself writes it
    tifffile.imwrite(tmp_path / "m.tif", FRAMES, imagej=True, resolution=(per_unit, per_unit), metadata=metadata)
    movie = open_movie(tmp_path / "m.tif")
    assert movie.frame_interval_s == pytest.approx(0.05)
    assert movie.pixel_size_um == pytest.approx(0.1, rel=1e-5)
    assert movie.found_in == {
        "frame_interval_s": "ImageJ finterval",
        "pixel_size_um": "ImageJ unit and resolution",
    }


@pytest.mark.parametrize("encoding", ["utf-8", "latin-1"])
def test_imagej_units_in_any_encoding(tmp_path: Path, encoding: str) -> None:
    text = "ImageJ=1.54f\nimages=30\nframes=30\nunit=µm\nfinterval=50000\ntunit=µs\n".encode(encoding)
    tifffile.imwrite(tmp_path / "m.tif", FRAMES, description=text, metadata=None, resolution=(10, 10))
    movie = open_movie(tmp_path / "m.tif")
    assert (movie.frame_interval_s, movie.pixel_size_um) == (pytest.approx(0.05), pytest.approx(0.1))


def test_imagej_without_calibration_says_nothing(tmp_path: Path) -> None:
    metadata = {"axes": "TYX", "finterval": 0, "unit": "pixel"}
    tifffile.imwrite(tmp_path / "m.tif", FRAMES, imagej=True, metadata=metadata)
    movie = open_movie(tmp_path / "m.tif")
    assert (movie.frame_interval_s, movie.pixel_size_um, movie.found_in) == (None, None, {})


@pytest.mark.parametrize(
    ("time", "size"),
    [
        ({"TimeIncrement": 50.0, "TimeIncrementUnit": "ms"}, (100.0, "nm")),
        ({"TimeIncrement": 0.05}, (0.1, "µm")),
        ({"TimeIncrement": 50000.0, "TimeIncrementUnit": "µs"}, (1e-4, "mm")),
        ({"TimeIncrement": 0.05 / 60, "TimeIncrementUnit": "min"}, (0.1, "µm")),
    ],
)
def test_ome_calibration(tmp_path: Path, time: dict[str, object], size: tuple[float, str]) -> None:
    pixel = {f"PhysicalSize{axis}{key}": value for axis in "XY" for key, value in (("", size[0]), ("Unit", size[1]))}
    tifffile.imwrite(tmp_path / "m.ome.tif", FRAMES, metadata={"axes": "TYX", **time, **pixel})
    movie = open_movie(tmp_path / "m.ome.tif")
    assert movie.frame_interval_s == pytest.approx(0.05)
    assert movie.pixel_size_um == pytest.approx(0.1)
    assert movie.found_in == {"frame_interval_s": "OME TimeIncrement", "pixel_size_um": "OME PhysicalSize"}
    assert movie.name == "m"
    np.testing.assert_array_equal(all_frames(movie), FRAMES)


def test_ome_plane_times_stand_in_for_the_increment(tmp_path: Path) -> None:
    plane = {"DeltaT": [50.0 * k for k in range(30)], "DeltaTUnit": ["ms"] * 30}
    tifffile.imwrite(tmp_path / "m.ome.tif", FRAMES, metadata={"axes": "TYX", "Plane": plane})
    movie = open_movie(tmp_path / "m.ome.tif")
    assert movie.frame_interval_s == pytest.approx(0.05)
    assert movie.found_in["frame_interval_s"] == "OME plane times (DeltaT)"


def test_a_microscope_resolution_is_a_pixel_size_and_a_printer_resolution_is_not(tmp_path: Path) -> None:
    tifffile.imwrite(tmp_path / "cm.tif", FRAMES, metadata=None, resolution=(1e5, 1e5), resolutionunit="CENTIMETER")
    tifffile.imwrite(tmp_path / "dpi.tif", FRAMES, metadata=None, resolution=(300, 300), resolutionunit="INCH")
    assert open_movie(tmp_path / "cm.tif").pixel_size_um == pytest.approx(0.1)
    assert open_movie(tmp_path / "dpi.tif").pixel_size_um is None


def test_pixels_that_are_not_square_are_doubted(tmp_path: Path) -> None:
    size = {"PhysicalSizeX": 0.2, "PhysicalSizeY": 0.1}
    tifffile.imwrite(tmp_path / "m.ome.tif", FRAMES, metadata={"axes": "TYX", **size})
    with pytest.warns(AnalysisWarning, match=r"not square \(0.1 µm in y, 0.2 µm in x\): 0.1 µm is used"):
        assert open_movie(tmp_path / "m.ome.tif").pixel_size_um == pytest.approx(0.1)


TWO_CHANNELS = np.stack([FRAMES, FRAMES + 1], axis=1)


@pytest.mark.parametrize(
    ("name", "options", "titles"),
    [
        ("m.tif", {"imagej": True, "metadata": {"axes": "TCYX"}}, "0 or 1"),
        ("m.tif", {"metadata": {"axes": "TCYX"}}, "0 or 1"),
        (
            "m.ome.tif",
            {"metadata": {"axes": "TCYX", "Channel": {"Name": ["red", "green"]}}},
            r"0 \(red\) or 1 \(green\)",
        ),
    ],
)
def test_a_channel_must_be_chosen(tmp_path: Path, name: str, options: dict[str, object], titles: str) -> None:
    tifffile.imwrite(tmp_path / name, TWO_CHANNELS, **options)
    with pytest.raises(MovieError, match=rf"holds 2 channels: choose one with --channel {titles}\."):
        open_movie(tmp_path / name)
    with pytest.raises(MovieError, match="has no channel 2"):
        open_movie(tmp_path / name, channel=2)
    for channel in (0, 1):
        movie = open_movie(tmp_path / name, channel=channel)
        np.testing.assert_array_equal(all_frames(movie), FRAMES + channel)
        assert (movie.axes, movie.channel) == ("TCYX", channel)


def test_channels_apart_from_time_are_taken_along_their_axis(tmp_path: Path) -> None:
    tifffile.imwrite(tmp_path / "m.ome.tif", TWO_CHANNELS.swapaxes(0, 1), metadata={"axes": "CTYX"})
    np.testing.assert_array_equal(all_frames(open_movie(tmp_path / "m.ome.tif", channel=1)), FRAMES + 1)


def test_there_is_no_second_channel_in_a_movie_of_one(tmp_path: Path) -> None:
    tifffile.imwrite(tmp_path / "m.tif", FRAMES)
    with pytest.raises(MovieError, match=r"m.tif has no channel 1: it holds 0"):
        open_movie(tmp_path / "m.tif", channel=1)
    assert open_movie(tmp_path / "m.tif", channel=0).channel is None


def test_time_with_depth_is_refused(tmp_path: Path) -> None:
    volume = FRAMES.reshape(10, 3, 20, 33)
    tifffile.imwrite(tmp_path / "m.tif", volume, imagej=True, metadata={"axes": "TZYX"})
    with pytest.raises(MovieError, match=r"axes TZYX \(T 10, Z 3 planes\): a movie needs one axis besides Y and X"):
        open_movie(tmp_path / "m.tif")


def test_ome_takes_pages_where_the_file_says_they_are(tmp_path: Path) -> None:
    backwards = "".join(f'<TiffData FirstT="{k}" IFD="{29 - k}" PlaneCount="1"/>' for k in range(30))
    write_ome(tmp_path / "m.ome.tif", 30, 'SizeC="1" SizeZ="1" SizeT="30"', planes=backwards)
    movie = open_movie(tmp_path / "m.ome.tif")
    np.testing.assert_array_equal(all_frames(movie), FRAMES[::-1])
    np.testing.assert_array_equal(movie.read(3, 6), FRAMES[::-1][3:6])


def test_a_recording_stopped_early_is_read_as_far_as_it_goes(tmp_path: Path) -> None:
    write_ome(tmp_path / "m.ome.tif", 12, 'SizeC="1" SizeZ="1" SizeT="30"')
    with pytest.warns(AnalysisWarning, match="announces 30 frames but holds 12: the recording was stopped early"):
        np.testing.assert_array_equal(all_frames(open_movie(tmp_path / "m.ome.tif")), FRAMES[:12])


def test_several_ome_images_are_refused(tmp_path: Path) -> None:
    write_ome(tmp_path / "m.ome.tif", 30, 'SizeC="1" SizeZ="1" SizeT="15"', images=2)
    with pytest.raises(MovieError, match="holds 2 OME images"):
        open_movie(tmp_path / "m.ome.tif")


def test_a_file_of_an_ome_set_is_refused(tmp_path: Path) -> None:
    planes = "".join(
        f'<TiffData FirstT="{k}" IFD="0" PlaneCount="1"><UUID FileName="{k}.ome.tif">urn:uuid:{k}</UUID></TiffData>'
        for k in range(2)
    )
    write_ome(tmp_path / "m.ome.tif", 1, 'SizeC="1" SizeZ="1" SizeT="2"', planes=planes)
    with pytest.raises(MovieError, match="one of 2 files of an OME-TIFF set: save the movie as one file"):
        open_movie(tmp_path / "m.ome.tif")


def test_files_of_trials_come_in_natural_order(tmp_path: Path) -> None:
    folder = tmp_path / "axon 7"
    folder.mkdir()
    lengths = {1: 5, 2: 7, 10: 4, 11: 6}
    starts = dict(zip(lengths, np.cumsum([0, *lengths.values()][:-1]).tolist(), strict=True))
    for number, length in lengths.items():
        part = FRAMES[starts[number] : starts[number] + length]
        packing = "deflate" if number == 2 else None
        tifffile.imwrite(folder / f"trial_{number}.tif", part, photometric="minisblack", compression=packing)
    (folder / "notes.txt").write_text("not a movie")
    (folder / "._trial_1.tif").write_bytes(b"left by another system")
    movie = open_movie(folder)
    assert movie.name == "axon 7"
    assert [path.name for path in movie.files] == ["trial_1.tif", "trial_2.tif", "trial_10.tif", "trial_11.tif"]
    assert (movie.file_frames, movie.shape) == ((5, 7, 4, 6), (22, 20, 33))
    np.testing.assert_array_equal(all_frames(movie), FRAMES[:22])
    np.testing.assert_array_equal(movie.read(4, 17), FRAMES[4:17])


def test_listed_files_keep_their_order(tmp_path: Path) -> None:
    paths = [tmp_path / "b.tif", tmp_path / "a.tif"]
    for path, part in zip(paths, (FRAMES[:3], FRAMES[3:8]), strict=True):
        tifffile.imwrite(path, part, photometric="minisblack")
    movie = open_movie([str(path) for path in paths])
    assert (movie.name, movie.files, movie.file_frames) == ("b", tuple(paths), (3, 5))
    np.testing.assert_array_equal(all_frames(movie), FRAMES[:8])


def test_a_folder_of_single_images_is_one_movie(tmp_path: Path) -> None:
    for k in range(120):  # more files than are kept open
        tifffile.imwrite(tmp_path / f"img{k}.tif", FRAMES[k % 30])
    movie = open_movie(tmp_path)
    assert (movie.file_frames, movie.shape[0]) == ((120,), 120)
    np.testing.assert_array_equal(movie.read(25, 65), FRAMES[np.arange(25, 65) % 30])


@pytest.mark.parametrize(
    ("other", "difference"),
    [
        (FRAMES[:, :19], "19 x 33 pixels instead of 20 x 33"),
        (FRAMES.astype(np.float32), "float32 pixels instead of uint16"),
    ],
)
def test_trials_must_be_alike(tmp_path: Path, other: np.ndarray, difference: str) -> None:
    tifffile.imwrite(tmp_path / "t1.tif", FRAMES)
    tifffile.imwrite(tmp_path / "t2.tif", other)
    with pytest.raises(MovieError, match=f"t2.tif differs from t1.tif: {difference}"):
        open_movie(tmp_path)


def test_trials_must_have_the_same_channels(tmp_path: Path) -> None:
    tifffile.imwrite(tmp_path / "t1.tif", TWO_CHANNELS, metadata={"axes": "TCYX"})
    tifffile.imwrite(tmp_path / "t2.tif", FRAMES, metadata={"axes": "TYX"})
    with pytest.raises(MovieError, match=r"t2.tif differs from t1.tif: 1 channels instead of 2"):
        open_movie(tmp_path, channel=0)


def test_trials_that_disagree_about_the_frame_interval_are_doubted(tmp_path: Path) -> None:
    for k, interval in enumerate((0.1, 0.2)):
        metadata = {"axes": "TYX", "finterval": interval}
        tifffile.imwrite(tmp_path / f"t{k}.tif", FRAMES, imagej=True, metadata=metadata)
    with pytest.warns(AnalysisWarning, match="t1.tif says 0.2 s a frame and t0.tif 0.1 s"):
        assert open_movie(tmp_path).frame_interval_s == pytest.approx(0.1)


def test_what_is_no_movie_is_refused(tmp_path: Path) -> None:
    (tmp_path / "text.tif").write_text("this is no TIFF file at all")
    (tmp_path / "empty.tif").write_bytes(b"")
    (tmp_path / "folder").mkdir()
    tifffile.imwrite(tmp_path / "one.tif", FRAMES[0])
    tifffile.imwrite(tmp_path / "bool.tif", FRAMES > 9)
    tifffile.imwrite(tmp_path / "complex.tif", FRAMES.astype(np.complex64))
    tifffile.imwrite(tmp_path / "unknown.tif", FRAMES.reshape(5, 6, 20, 33))
    tifffile.imwrite(tmp_path / "last.tif", np.moveaxis(FRAMES, 0, -1), metadata={"axes": "YXT"})
    rgb = np.zeros((4, 20, 33, 3), np.uint8)
    tifffile.imwrite(tmp_path / "rgb.tif", rgb, photometric="rgb")
    with tifffile.TiffWriter(tmp_path / "mixed.tif") as tiff:
        tiff.write(FRAMES[:5], metadata=None)
        tiff.write(FRAMES[0, :10], metadata=None)
    for source, message in {
        "text.tif": "text.tif is not a TIFF file: export the movie as TIFF",
        "empty.tif": "empty.tif is empty",
        "missing.tif": "missing.tif does not exist",
        "folder": "folder holds no TIFF file",
        "one.tif": "one holds a single image: a movie needs at least 2 frames",
        "bool.tif": "bool.tif holds bool pixels",
        "complex.tif": "complex.tif holds complex64 pixels",
        "unknown.tif": r"axes QQYX \(Q 5, Q 6 planes\)",
        "last.tif": "last.tif has the axes YXT: save it with time first",
        "rgb.tif": r"rgb.tif has 3 samples per pixel \(a colour picture\)",
        "mixed.tif": "page 6 has height 10, but the first page has 20",
    }.items():
        with pytest.raises(MovieError, match=message):
            open_movie(tmp_path / source)
    with pytest.raises(MovieError, match="No movie file given"):
        open_movie([])
    with pytest.raises(MovieError, match="is a folder among several"):
        open_movie([tmp_path / "folder", tmp_path / "one.tif"])


TRUNCATED = {
    "contiguous": {"metadata": None},
    "ImageJ": {"imagej": True},
    "one directory": {"truncate": True},
    "deflate": {"compression": "deflate"},
    "BigTIFF": {"bigtiff": True},
}


@pytest.mark.parametrize("kept", [0.02, 0.5, 0.97])
@pytest.mark.parametrize("options", TRUNCATED.values(), ids=TRUNCATED.keys())
def test_a_file_cut_short_is_refused_before_anything_is_read(
    tmp_path: Path, options: dict[str, object], kept: float
) -> None:
    path = tmp_path / "m.tif"
    tifffile.imwrite(path, FRAMES, **options)
    content = path.read_bytes()
    path.write_bytes(content[: int(kept * len(content))])
    with pytest.raises(MovieError, match=r"m.tif is cut short"):
        open_movie(path)


def test_a_cut_file_says_how_much_of_it_is_whole(tmp_path: Path) -> None:
    path = tmp_path / "m.tif"
    tifffile.imwrite(path, FRAMES, truncate=True)
    path.write_bytes(path.read_bytes()[: -2 * FRAMES[0].nbytes - 1000])
    with pytest.raises(MovieError, match=r"for 30 images but has .* the first 27 are whole"):
        open_movie(path)


def test_a_page_list_that_runs_in_a_circle_is_refused(tmp_path: Path) -> None:
    path = tmp_path / "m.tif"
    write_pages(path, FRAMES[:3])
    with tifffile.TiffFile(path) as tiff:
        first, last = tiff.pages[0].offset, tiff.pages[2].offset
        n_tags = len(tiff.pages[2].tags)
    content = bytearray(path.read_bytes())
    content[last + 2 + 12 * n_tags : last + 6 + 12 * n_tags] = first.to_bytes(4, "little")
    path.write_bytes(content)
    with pytest.raises(MovieError, match="runs in a circle"):
        open_movie(path)


def test_damaged_directories_are_refused_as_such(tmp_path: Path) -> None:
    rng = np.random.default_rng(3)
    path = tmp_path / "m.tif"
    refused = 0
    for options in ({"imagej": True}, {"compression": "deflate"}, {"bigtiff": True, "byteorder": ">"}):
        tifffile.imwrite(path, FRAMES[:5], **options)
        whole = path.read_bytes()
        for _ in range(150):
            content = bytearray(whole)
            for place in rng.integers(8, 350, 3):
                content[place] = rng.integers(0, 256)
            path.write_bytes(content)
            with warnings.catch_warnings(action="ignore"):
                try:
                    open_movie(path).read(0, 2)
                except MovieError:
                    refused += 1
    assert refused > 100


def test_a_damaged_frame_is_named(tmp_path: Path) -> None:
    path = tmp_path / "m.tif"
    tifffile.imwrite(path, FRAMES, compression="deflate")
    with tifffile.TiffFile(path) as tiff:
        place = tiff.pages[5].dataoffsets[0]
    content = bytearray(path.read_bytes())
    content[place : place + 40] = bytes(40)
    path.write_bytes(content)
    movie = open_movie(path)
    np.testing.assert_array_equal(movie.read(0, 5), FRAMES[:5])
    with pytest.raises(MovieError, match=r"m.tif: frame 5 cannot be unpacked"):
        movie.read(4, 7)


def test_a_missing_codec_is_said_at_once(tmp_path: Path) -> None:
    for codec in ("lzw", "zstd", "deflate"):
        tifffile.imwrite(tmp_path / f"{codec}.tif", FRAMES, compression=codec)
    program = (
        "import sys; sys.modules['imagecodecs'] = None\n"
        "from napari_boutonrelease.recording import open_movie\n"
        "from napari_boutonrelease.errors import MovieError\n"
        "print(open_movie(sys.argv[1] + '/deflate.tif').read(0, 30).sum())\n"
        "for codec in ('lzw', 'zstd'):\n"
        "    try: open_movie(f'{sys.argv[1]}/{codec}.tif')\n"
        "    except MovieError as error: print(error)\n"
    )
    run = subprocess.run([sys.executable, "-c", program, tmp_path], capture_output=True, text=True, check=True)
    total, *messages = run.stdout.splitlines()
    assert int(total) == FRAMES.sum()
    assert len(messages) == 2
    assert all('pip install "napari-boutonrelease[codecs]"' in message for message in messages)


def peak_bytes_of_reading(movie: Movie, start: int, stop: int) -> tuple[np.ndarray, int]:
    tracemalloc.start()
    try:
        block = movie.read(start, stop)
        return block, tracemalloc.get_traced_memory()[1]
    finally:
        tracemalloc.stop()


def test_a_large_file_is_not_loaded(tmp_path: Path) -> None:
    path = tmp_path / "large.tif"
    tifffile.imwrite(path, shape=(400, 512, 512), dtype="uint16", metadata=None)  # 200 MB of holes
    tracemalloc.start()
    movie = open_movie(path)
    opening = tracemalloc.get_traced_memory()[1]
    tracemalloc.stop()
    block, peak = peak_bytes_of_reading(movie, 200, 216)
    assert (block.shape, movie.shape) == ((16, 512, 512), (400, 512, 512))
    assert opening < 4e6
    assert peak < 1e6  # a view of the file


@pytest.mark.parametrize("options", [{}, {"compression": "deflate"}], ids=["plain", "deflate"])
def test_thousands_of_pages_are_opened_and_read_in_part(tmp_path: Path, options: dict[str, object]) -> None:
    path = tmp_path / "many.tif"
    frames = np.random.default_rng(2).integers(0, 99, (5000, 16, 24)).astype(np.uint16)
    write_pages(path, frames, **options)
    movie = open_movie(path)
    assert movie.shape == frames.shape
    block, peak = peak_bytes_of_reading(movie, 4000, 4010)
    np.testing.assert_array_equal(block, frames[4000:4010])
    assert peak < 1e5


def test_a_mapped_block_cannot_be_changed(tmp_path: Path) -> None:
    tifffile.imwrite(tmp_path / "m.tif", FRAMES)
    with pytest.raises(ValueError, match="read-only"):
        open_movie(tmp_path / "m.tif").read(0, 2)[:] = 0


def test_an_array_becomes_a_movie_without_a_copy() -> None:
    movie = movie_from_array(FRAMES, frame_interval_s=0.05, pixel_size_um=0.1, file_frames=(10, 20))
    assert (movie.files, movie.file_frames, movie.frame_interval_s) == ((), (10, 20), 0.05)
    assert movie.found_in.keys() == {"frame_interval_s", "pixel_size_um"}
    assert np.shares_memory(movie.read(8, 14), FRAMES)
    np.testing.assert_array_equal(movie.read(8, 14), FRAMES[8:14])
    assert movie_from_array(FRAMES.astype(">u2")).read(0, 2).dtype == np.dtype("=u2")


@pytest.mark.parametrize(
    ("array", "options", "message"),
    [
        (FRAMES[0], {}, "needs three axes"),
        (FRAMES[:1], {}, "at least 2 frames"),
        (FRAMES > 3, {}, "holds bool pixels"),
        (FRAMES, {"file_frames": (10, 10)}, "add up to the 30 frames"),
        (FRAMES, {"file_frames": (30, 0)}, "must be positive"),
    ],
)
def test_an_array_that_is_no_movie_is_refused(array: np.ndarray, options: dict[str, object], message: str) -> None:
    with pytest.raises(MovieError, match=message):
        movie_from_array(array, **options)


def test_the_digest_follows_content_not_name(tmp_path: Path) -> None:
    for name in ("a.tif", "b.tif"):
        tifffile.imwrite(tmp_path / name, FRAMES)
    tifffile.imwrite(tmp_path / "c.tif", FRAMES + 1)
    digest = {name: content_digest(open_movie(tmp_path / f"{name}.tif")) for name in "abc"}
    assert digest["a"] == digest["b"] == hashlib.sha256((tmp_path / "a.tif").read_bytes()).hexdigest()
    assert digest["c"] != digest["a"]
    both = [
        content_digest(open_movie([tmp_path / x, tmp_path / y])) for x, y in (("a.tif", "c.tif"), ("c.tif", "a.tif"))
    ]
    assert both[0] != both[1]
    assert content_digest(movie_from_array(FRAMES)) != content_digest(movie_from_array(FRAMES + 1))


def test_dead_pixels_show_what_their_nearest_neighbour_shows():
    frames = np.random.default_rng(2).normal(size=(5, 6, 7)).astype(np.float32)
    frames[:, 2, 3] = np.nan
    frames[:, :, 0] = np.nan
    dead = np.isnan(frames[0])
    movie = movie_from_array(frames)
    filled = fill_dead(movie, dead=dead)
    assert filled.shape == movie.shape
    np.testing.assert_array_equal(filled.read(1, 4)[:, ~dead], frames[1:4][:, ~dead])
    np.testing.assert_array_equal(filled.read(0, 5)[:, :, 0], frames[:, :, 1])
    neighbours = [frames[3, y, x] for y, x in ((1, 3), (3, 3), (2, 2), (2, 4))]
    assert filled.read(3, 4)[0, 2, 3] in neighbours
    assert np.isnan(movie.read(0, 5)[:, 2, 3]).all()  # the movie itself stays as it is


@pytest.mark.parametrize("value", [False, True])
def test_without_a_dead_or_a_living_pixel_there_is_nothing_to_fill(value):
    movie = movie_from_array(FRAMES)
    assert fill_dead(movie, dead=np.full(FRAMES.shape[1:], value)) is movie
