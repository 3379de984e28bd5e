"""How much work the image side of an analysis is, beside what one writes with general libraries, and beside the least.

Run with ``pytest -m benchmark -s tests/benchmarks/test_image_side.py``. Each test prints a table. What is asserted is
far from what is usual, because machines differ.
"""

from __future__ import annotations

import json
import sys
from types import SimpleNamespace

import numpy as np
import pytest
from scipy import ndimage
from skimage.registration import phase_cross_correlation

from napari_boutonrelease.boutons import project_responses
from napari_boutonrelease.cli.main import main
from napari_boutonrelease.recording import (
    light_at_rest,
    measure_drift,
    measure_light,
    no_drift,
    open_movie,
    read_protocol,
    resolve_timing,
)
from napari_boutonrelease.recording.tiff_frames import map_file
from napari_boutonrelease.recording.tiff_pages import list_pages
from napari_boutonrelease.response_shape import ResponseShape
from napari_boutonrelease.responses import extract_traces

from .race import Contender, race

pytestmark = pytest.mark.benchmark

OFFSET = 100.0
BLOCK_FRAMES = 64
AXON = [
    *("--n-boutons", "20", "--trials", "20", "--trial-interval-s", "0.5"),
    *("--set", "height_px=512", "--set", "width_px=512"),
]


@pytest.fixture(scope="module")
def axon(tmp_path_factory):
    """Half a gigabyte of a drifting axon, with what is known of it and what was measured."""
    path = tmp_path_factory.mktemp("benchmark") / "axon.tif"
    assert main(["simulate", str(path), *AXON]) == 0
    movie = open_movie(path)
    light = measure_light(movie, camera_offset=OFFSET, block_frames=BLOCK_FRAMES)
    return SimpleNamespace(
        movie=movie,
        frames=movie.read(0, movie.shape[0]),
        timing=resolve_timing(movie, read_protocol(path.with_suffix(".protocol.toml"))),
        light=light,
        drift=measure_drift(movie, light=light, max_shift_px=12.0, block_frames=BLOCK_FRAMES),
        truth=json.loads(path.with_suffix(".truth.json").read_text()),
    )


def limits(axon):
    return [
        Contender("sum of all pixels", axon.frames.sum, limit=True),
        Contender("largest of all pixels", axon.frames.max, limit=True),
    ]


def hundred_footprints(half=7):
    """Weights of a hundred spots above their surroundings."""
    y, x = np.mgrid[-half : half + 1, -half : half + 1]
    spot = np.exp(-(y**2 + x**2) / (2 * 1.5**2))
    weights = np.linalg.pinv(np.stack([spot.ravel(), np.ones(spot.size)], axis=1))[0].reshape(spot.shape)
    corners = 40 + 44 * np.indices((10, 10)).reshape(2, -1)
    return SimpleNamespace(y0=corners[0], x0=corners[1], weights=(weights,) * 100)


def test_traces_of_a_hundred_boutons(axon):
    footprints = hundred_footprints()
    labels = np.zeros(axon.movie.shape[1:], dtype=int)
    for bouton, (y, x) in enumerate(zip(footprints.y0, footprints.x0, strict=True), start=1):
        labels[y : y + 15, x : x + 15] = 100 + bouton  # the surroundings, to be taken off
        labels[y + 4 : y + 11, x + 4 : x + 11] = bouton
    masks = [labels == region for region in range(1, 201)]
    n_frames = len(axon.frames)

    def traces(drift):
        settings = {"footprints": footprints, "block_frames": BLOCK_FRAMES, "progress": None}
        return extract_traces(axon.movie, drift=drift, **settings)

    still = no_drift(light=axon.light)
    others = [
        Contender("this program, the sample moving", lambda: traces(axon.drift)),
        Contender(
            "scipy.ndimage.mean, frame by frame",
            lambda: [ndimage.mean(frame, labels, np.arange(1, 201)) for frame in axon.frames[:20]],
            share=20 / n_frames,
        ),
        Contender("a mask a region", lambda: [axon.frames[:, mask].mean(axis=1) for mask in masks[95:105]], share=0.05),
        *limits(axon),
    ]
    ratio = race(f"100 traces of {axon.movie.shape} frames", lambda: traces(still), others)
    assert ratio["scipy.ndimage.mean, frame by frame"] > 20
    assert ratio["a mask a region"] > 1.5
    assert ratio["sum of all pixels"] > 0.5


def test_movement(axon):
    reference = axon.frames[:200].mean(axis=0)
    n_frames = len(axon.frames)
    shifts = np.zeros((n_frames, 2))
    some = np.arange(10, n_frames, n_frames // 8)

    def align(frame):
        shift, _, _ = phase_cross_correlation(reference, frame, upsample_factor=20, normalization=None)
        return shift, ndimage.shift(frame.astype(np.float32), shift, order=3, mode="nearest")

    def phase():
        for k in some:
            shifts[k] = align(axon.frames[k])[0]

    def ours():
        return measure_drift(axon.movie, light=axon.light, max_shift_px=12.0, block_frames=BLOCK_FRAMES)

    name = "phase_cross_correlation and ndimage.shift"
    ratio = race(
        f"movement in {axon.movie.shape} frames, the reference included",
        ours,
        [
            Contender(name, phase, share=len(some) / n_frames),
            Contender("light at rest", lambda: light_at_rest(axon.movie, light=axon.light, drift=axon.drift)),
            Contender(
                "light and noise",
                lambda: measure_light(axon.movie, camera_offset=OFFSET, block_frames=BLOCK_FRAMES),
            ),
            *limits(axon),
        ],
    )
    truth = np.stack([axon.truth["dy_px"], axon.truth["dx_px"]], axis=1)
    errors = {
        "this program": np.stack([axon.drift.dy_px, axon.drift.dx_px], axis=1) - truth,
        name: -shifts[some] - truth[some],
    }
    rms = {which: np.sqrt(np.mean((error - np.median(error, axis=0)) ** 2)) for which, error in errors.items()}
    sys.stdout.write("".join(f"{which}: error {error:.4f} px\n" for which, error in rms.items()))
    assert ratio[name] > 10
    assert rms["this program"] < 0.03
    assert rms["this program"] < 0.3 * rms[name]


def test_each_further_frame(axon):
    """Reference and settings once; what every further frame of a longer recording adds."""
    from napari_boutonrelease.recording.motion import _locate
    from napari_boutonrelease.recording.registration import Reference

    reference = Reference(
        image=axon.drift.reference,
        variance=axon.light.variance_at(axon.drift.reference),
        known=np.ones(axon.movie.shape[1:], dtype=bool),
        usable=~axon.light.saturated,
        directions=np.eye(2),
    )
    blocks = [axon.frames[start : start + BLOCK_FRAMES] for start in range(0, 5 * BLOCK_FRAMES, BLOCK_FRAMES)]
    target = axon.drift.reference
    some = blocks[0][:4]

    def phase():
        for frame in some:
            shift, _, _ = phase_cross_correlation(target, frame, upsample_factor=20, normalization=None)
            ndimage.shift(frame.astype(np.float32), shift, order=3, mode="nearest")

    n_frames = 5 * BLOCK_FRAMES
    ratio = race(
        f"movement of {n_frames} further frames",
        lambda: [_locate(reference, block, 12.0) for block in blocks],
        [
            Contender("phase_cross_correlation and ndimage.shift", phase, share=len(some) / n_frames),
            Contender("sum of all pixels", lambda: [block.sum() for block in blocks], limit=True),
        ],
    )
    assert ratio["phase_cross_correlation and ndimage.shift"] > 40


def test_response_maps(axon):
    shape = ResponseShape(latency_s=0.002, rise_s=0.003, decay_s=0.06)
    still = no_drift(light=axon.light)
    first = np.searchsorted(axon.timing.frame_start_s, axon.timing.stimulus_s[:, 0])
    design = np.stack([np.exp(-np.arange(20) / 6.0), np.ones(20)], axis=1)

    def ours(drift):
        return project_responses(
            axon.movie,
            timing=axon.timing,
            drift=drift,
            shape=shape,
            pre_s=0.15,
            post_s=0.2,
            memory_bytes=5e8,
            block_frames=BLOCK_FRAMES,
            progress=None,
        )

    pulses = np.searchsorted(axon.timing.frame_start_s, np.sort(axon.timing.stimulus_s, axis=None))
    starts = np.concatenate([pulses, pulses + 20])  # and where nothing was stimulated

    def slices():
        frames = axon.frames
        return np.stack([frames[k : k + 6].mean(axis=0) - frames[k - 12 : k].mean(axis=0) for k in starts])

    def lstsq():
        frames = axon.frames[first[0] : first[0] + 20, :8].reshape(20, -1)
        return np.linalg.lstsq(design, frames.astype(float), rcond=None)

    n_rows = axon.movie.shape[1] * len(starts)
    ratio = race(
        f"response maps of {axon.movie.shape} frames: of every pulse, and of noise",
        lambda: ours(still),
        [
            Contender("this program, the sample moving", lambda: ours(axon.drift)),
            Contender("means of slices", slices),
            Contender("numpy.linalg.lstsq", lstsq, share=8 / n_rows),
            *limits(axon),
        ],
        rounds=5,
    )
    assert ratio["sum of all pixels"] > 0.2
    assert ratio["numpy.linalg.lstsq"] > 5


def test_pages_of_a_long_file(tmp_path):
    import tifffile

    path = tmp_path / "pages.tif"
    with tifffile.TiffWriter(path) as writer:
        for _ in range(5000):
            writer.write(np.zeros((16, 16), np.uint16), contiguous=False, metadata=None)

    def offsets():
        with tifffile.TiffFile(path) as tiff:
            return [page.dataoffsets[0] for page in tiff.pages]

    data = map_file(path)
    ratio = race(
        "5,000 pages listed",
        lambda: list_pages(data, name=path.name),
        [Contender("tifffile", offsets), Contender("bytes of the file read", path.read_bytes, limit=True)],
    )
    assert ratio["tifffile"] > 10
