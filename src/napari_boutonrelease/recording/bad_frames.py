"""Frames not to trust: light off, blank, not finite, or lit by a stimulation artefact.

Each frame is reduced to its means over a grid of tiles. Darkness takes light from the whole frame; an artefact adds
the same to all of it for a frame or two. Responses do neither: they raise a few places, or all in proportion to their
brightness, and fade slowly. An artefact that covers only some rows (a flash shorter than a scanned frame) is not told.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    from numpy.typing import NDArray

    FloatArray = NDArray[np.float64]

__all__ = ["LOOK_AHEAD_FRAMES", "FrameLevels"]

LIGHT_OFF, BLANK, NOT_FINITE, FLASH = "light off", "blank", "not finite", "flash"

LOOK_AHEAD_FRAMES = 8  # frames after a block that are read with it, to see whether a flash ends
_CONTEXT_FRAMES = 100  # frames before a block that its frames are compared with


@dataclass(slots=True)
class FrameLevels:
    """Mean of every frame over a grid of tiles: enough to tell darkness, blanks and flashes from responses."""

    n_frames: int
    n_y: int
    n_x: int
    mean: FloatArray = field(init=False)
    tiles: FloatArray = field(init=False)
    blank: NDArray[np.bool_] = field(init=False)
    broken: NDArray[np.bool_] = field(init=False)

    def __post_init__(self) -> None:
        rows, columns = (min(8, max(1, n // 4)) for n in (self.n_y, self.n_x))
        self.tiles = np.full((self.n_frames, rows, columns), np.nan)
        self.mean = np.full(self.n_frames, np.nan)
        self.blank, self.broken = np.zeros(self.n_frames, dtype=np.bool_), np.zeros(self.n_frames, dtype=np.bool_)

    def add(self, raw: NDArray[np.generic], start: int) -> NDArray[np.intp]:
        """Note the levels of `raw`; pixels that hold no number in most of its frames are returned as 1."""
        n = len(raw)
        here = slice(start, start + n)
        missing = np.zeros((self.n_y, self.n_x), dtype=np.intp)
        if np.issubdtype(raw.dtype, np.floating):
            lost = ~np.isfinite(raw)
            if lost.any():
                missing = (2 * lost.sum(axis=0) > n).astype(np.intp)
                self.broken[here] = (lost & (missing == 0)).any(axis=(1, 2))
                raw = np.where(lost, np.nanmedian(np.where(lost, np.nan, raw)) if not lost.all() else 0.0, raw)
        rows, columns = self.tiles.shape[1:]
        high, wide = self.n_y // rows, self.n_x // columns
        exact = np.uint32 if raw.dtype in (np.uint8, np.uint16) else np.float64
        total = raw[:, rows * high :].sum(axis=(1, 2), dtype=np.float64)
        for row in range(rows):
            band = raw[:, row * high : (row + 1) * high].sum(axis=1, dtype=exact).astype(np.float64)
            self.tiles[here, row] = band[:, : columns * wide].reshape(n, columns, wide).mean(axis=2) / high
            total += band.sum(axis=1)
        self.mean[here] = total / (self.n_y * self.n_x)
        self.blank[here] = raw.reshape(n, -1).max(axis=1) == raw.reshape(n, -1).min(axis=1)
        return missing

    def bad_reasons(self, start: int, stop: int, offset: float | None) -> list[str]:
        """Why each of the frames start..stop is bad, or ""."""
        first = max(0, start - _CONTEXT_FRAMES)
        last = min(stop + LOOK_AHEAD_FRAMES, self.n_frames)
        tiles = self.tiles[first:last].reshape(last - first, -1)
        blank, broken = self.blank[first:last], self.broken[first:last]
        sound = ~(blank | broken)
        dark, flash = np.zeros_like(blank), np.zeros_like(blank)
        if sound.sum() >= 3:
            dark[sound] = _is_dark(tiles[sound], offset)
            lit = sound & ~dark
            if lit.sum() >= 5:
                flash[lit] = _is_flash(tiles[lit], offset)
        named = zip(
            *(flags[start - first : stop - first] for flags in (broken, blank, dark, flash)),
            strict=True,
        )
        reasons = (NOT_FINITE, BLANK, LIGHT_OFF, FLASH)
        return [next((reason for reason, is_so in zip(reasons, flags, strict=True) if is_so), "") for flags in named]


def _robust_sd(values: FloatArray) -> float:
    return 1.4826 * float(np.median(np.abs(values - np.median(values))))


def _is_dark(tiles: FloatArray, offset: float | None) -> NDArray[np.bool_]:
    """Frames whose light fell under half of what the others have.

    Light is counts above the offset. Where that is unknown, it is how strongly the frame shows the picture that the
    brighter frames have in common; where there is no picture either, only a loss of half of the counts is sure.
    """
    mean = tiles.mean(axis=1)
    picture = np.median(tiles[mean >= np.median(mean)], axis=0)
    light = mean - (offset or 0.0)
    if offset is None and np.ptp(picture) > 0:
        contrast = picture - picture.mean()
        shown = tiles @ contrast / (contrast @ contrast)
        if _robust_sd(np.diff(shown)) < 0.2:
            light = shown
    dark = np.zeros(len(mean), dtype=np.bool_)
    full = float(np.percentile(light, 90))
    lit = light >= 0.25 * full
    if full > 0 and lit.any():
        lost = float(np.median(mean[lit])) - mean
        dark = (light < 0.5 * np.median(light[lit])) & (lost > 8.0 * _robust_sd(np.diff(mean)))
    return dark


def _is_flash(tiles: FloatArray, offset: float | None) -> NDArray[np.bool_]:
    """One to three frames in which the whole field is brighter by the same amount. Responses are neither."""
    from scipy.ndimage import label, median_filter

    usual = median_filter(tiles, size=(15, 1), mode="nearest")
    change = tiles - usual
    level = np.median(change, axis=1)
    picture = np.median(tiles, axis=0)
    middle = float(np.median(picture))
    floor = float(picture.min()) if offset is None else offset
    least = max(8.0 * _robust_sd(level), 0.2 * (middle - floor), 0.02 * abs(middle), 1e-9)
    even = np.percentile(change, 10, axis=1) > 0.5 * level
    high: NDArray[np.bool_] = (level > least) & even
    runs, n_runs = label(high)
    for run in range(1, n_runs + 1):
        where = np.flatnonzero(runs == run)
        beside = [level[k] for k in (where[0] - 1, where[-1] + 1) if 0 <= k < len(level)]
        if where.size > 3 or max(beside, default=0.0) > 0.25 * level[where].max():
            high[where] = False
    return high
