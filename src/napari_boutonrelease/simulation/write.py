"""A simulated recording as files: movie, protocol and truth, written whole or not at all."""

from __future__ import annotations

import shutil
import tempfile
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from itertools import islice
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from ..errors import InputError, OutputError
from ..recording.protocol import write_protocol
from .movie import frame_blocks, protocol_of
from .plan import plan_recording
from .truth import truth_to_json

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from .recipe import Recipe

_LARGEST_IMAGEJ_BYTES = 3_900_000_000  # above, offsets no longer fit and the file becomes an OME BigTIFF


@dataclass(frozen=True, slots=True, kw_only=True)
class SimulatedFiles:
    """Where a simulated recording was written.

    Attributes
    ----------
    movie : Path
        The TIFF file, or the folder of one file a trial.
    protocol, truth : Path
        The `.protocol.toml` and `.truth.json` beside it.
    """

    movie: Path
    protocol: Path
    truth: Path


def write_simulation(
    path: str | Path,
    recipe: Recipe,
    *,
    rng: np.random.Generator,
    overwrite: bool,
    progress: Callable[[int, int], None] | None = None,
) -> SimulatedFiles:
    """Simulate a recording straight into files; memory stays small whatever the length of the movie.

    Parameters
    ----------
    path : path
        `OUT.tif`. The protocol goes to `OUT.protocol.toml` and the truth to `OUT.truth.json`. Where the recipe has one
        file a trial, they are `trial_1.tif`, `trial_2.tif`, ... in the folder `OUT`.
    recipe : Recipe
        What to simulate.
    rng : numpy.random.Generator
        Source of all chance: the same movie as `simulate_recording` gives.
    overwrite : bool
        Whether existing files are replaced.
    progress : callable or None
        Called with (frames done, frames in all).

    Raises
    ------
    InputError
        If the name does not end in .tif or .tiff, or the image has no room for the scene.
    OutputError
        If files exist and are not to be replaced, or cannot be written.
    """
    path = Path(path)
    if path.suffix.lower() not in (".tif", ".tiff"):
        raise InputError(f"The movie's name must end in .tif or .tiff (given {path.name!r}).")
    stem = path.with_suffix("")
    movie = path if recipe.file_s is None else stem
    files = SimulatedFiles(
        movie=movie,
        protocol=stem.with_name(f"{stem.name}.protocol.toml"),
        truth=stem.with_name(f"{stem.name}.truth.json"),
    )
    wanted = [files.movie, files.protocol, files.truth]
    present = [str(file) for file in wanted if file.exists()]
    if present and not overwrite:
        raise OutputError(f"{', '.join(present)} exists already; choose another name, or ask to overwrite.")
    truth = plan_recording(recipe, rng=rng)
    try:
        path.parent.mkdir(parents=True, exist_ok=True)
        with tempfile.TemporaryDirectory(prefix=f".{stem.name}.", suffix=".part", dir=path.parent) as part:
            beside = Path(part)
            frames = _counted(frame_blocks(truth, rng=rng), recipe.n_frames, progress)
            _write_movie(beside / movie.name, frames, recipe)
            write_protocol(protocol_of(recipe), beside / files.protocol.name)
            (beside / files.truth.name).write_text(truth_to_json(truth), encoding="utf-8")
            for file in sorted(beside.iterdir(), key=lambda file: file.name == movie.name):
                _move_into_place(file, path.parent / file.name, beside / "replaced")
    except OSError as error:
        raise OutputError(f"{path} cannot be written: {error.strerror or error}.") from error
    return files


def _counted(
    blocks: Iterator[NDArray[Any]], n_frames: int, progress: Callable[[int, int], None] | None
) -> Iterator[NDArray[Any]]:
    """Yield frame after frame and report progress block by block."""
    done = 0
    for block in blocks:
        yield from block
        done += len(block)
        if progress is not None:
            progress(done, n_frames)


def _write_movie(path: Path, frames: Iterator[NDArray[Any]], recipe: Recipe) -> None:
    if recipe.file_s is None:
        _write_tiff(path, frames, recipe.n_frames, recipe)
        return
    path.mkdir()
    for number, n_frames in enumerate(recipe.file_frames, start=1):
        _write_tiff(path / f"trial_{number}.tif", islice(frames, n_frames), n_frames, recipe)


def _write_tiff(path: Path, frames: Iterator[NDArray[Any]], n_frames: int, recipe: Recipe) -> None:
    import tifffile

    shape = (n_frames, recipe.height_px, recipe.width_px)
    size = int(np.prod(shape)) * np.dtype(recipe.dtype).itemsize
    large = size > _LARGEST_IMAGEJ_BYTES
    interval_s, pixel_um = recipe.frame_interval_s, recipe.pixel_size_um
    if large:
        metadata: dict[str, Any] = {
            "axes": "TYX",
            "TimeIncrement": interval_s,
            "TimeIncrementUnit": "s",
            "PhysicalSizeX": pixel_um,
            "PhysicalSizeXUnit": "µm",
            "PhysicalSizeY": pixel_um,
            "PhysicalSizeYUnit": "µm",
        }
    else:
        metadata = {"axes": "TYX", "finterval": interval_s, "fps": 1.0 / interval_s, "unit": "um"}
    with tifffile.TiffWriter(path, bigtiff=large, imagej=not large, ome=large) as writer:
        writer.write(
            frames,
            shape=shape,
            dtype=recipe.dtype,
            photometric="minisblack",
            resolution=(1.0 / pixel_um, 1.0 / pixel_um),
            metadata=metadata,
        )


def _move_into_place(file: Path, target: Path, old: Path) -> None:
    """Put a file or folder where it belongs; a folder that is there already is moved out of the way first."""
    if target.is_dir():
        target.replace(old)
        file.replace(target)
        shutil.rmtree(old)
    else:
        file.replace(target)
