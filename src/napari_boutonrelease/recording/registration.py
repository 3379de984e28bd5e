"""Where does a frame lie on a reference image? Weighted least squares on the pixels themselves.

Near a shift, a frame is the reference there, plus its two slopes times what the shift still lacks, plus changes of
brightness that are no movement: a factor and a smooth background. All are linear, so that one small matrix, computed
once per quarter-pixel cell of shifts and weighted by the photon noise, turns every frame in that cell into its shift,
with the precision that photon noise allows (Cramér-Rao bound). A cross-correlation finds the cell to start in: not
normalised in phase, which fails on noisy images.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, TypeVar

import numpy as np

from .correlation import correlate, likelihood_template
from .spline_pixels import SplinePixels

if TYPE_CHECKING:
    from numpy.typing import NDArray

    FloatArray = NDArray[np.float64]
    Single = NDArray[np.float32]

Number = TypeVar("Number", bound=np.generic)

__all__ = ["Fit", "Reference"]

_CELLS_PER_PX = 4
_MOST_STEPS = 12
_ENOUGH_INFORMATION = 0.98
_ABOVE_EMPTY = 1.7
_FEW_PIXELS = 20_000  # below this every pixel is used
_MOST_CACHED_NUMBERS = 4_000_000
_TILE_PX = 3  # width of the places that are looked at for flashes
_FLASH_SD = 5.0  # a place this far from the reference flashes, and the places about it are left out, too
_FLASH_ROUNDS = 6
_FEW_FRAMES = 4  # frames of a cell that tell how skewed the noise is


@dataclass(frozen=True, slots=True, kw_only=True)
class Fit:
    """How frames lie on a reference; every array is (n_frames,).

    Attributes
    ----------
    dy_px, dx_px : ndarray of float
        Drift.
    dy_sd_px, dx_sd_px : ndarray of float
        Standard errors from the noise left over.
    brightness : ndarray of float
        Factor of the reference's structure in the frame; 1 as in the reference.
    misfit : ndarray of float
        Weighted mean square of what is left over; 1 if it is the photon noise expected of the reference.
    signal : ndarray of float
        Energy of the reference's structure over the pixels used, in units of the noise.
    n_pixels : ndarray of float
        Pixels used.
    strangest : ndarray of float
        Largest deviation from the reference among places of a few pixels, in SD.
    """

    dy_px: FloatArray
    dx_px: FloatArray
    dy_sd_px: FloatArray
    dx_sd_px: FloatArray
    brightness: FloatArray
    misfit: FloatArray
    signal: FloatArray
    n_pixels: FloatArray
    strangest: FloatArray


@dataclass(frozen=True, slots=True)
class _Cell:
    """The linear problem of one quarter-pixel cell: which pixels, and the columns that explain them.

    Pixels stand place after place, (_TILE_PX², n_tiles) in a row; those not to trust have a scale of 0.
    """

    pixels: NDArray[np.intp]
    scale: Single  # (n_pixels,) one over the noise of each
    rows: Single  # (n_columns, n_pixels) columns in units of the noise
    normal: FloatArray
    inverse: FloatArray  # of the normal matrix
    root_in_tile: Single  # (n_tiles,) root of the number of its pixels
    tile_rows: Single  # (n_columns, n_tiles) as `places` of the rows
    n_pixels: int  # that count
    signal: float

    def places(self, values: Single) -> Single:
        """Sum up values over each tile, in SD: (n, n_pixels) -> (n, n_tiles)."""
        return _sum_tiles(values) / self.root_in_tile


class Reference:
    """A reference image ready to be compared with frames.

    Parameters
    ----------
    image : (y, x) ndarray of float
        The reference, counts.
    variance : (y, x) ndarray of float
        Noise of one frame's pixel, counts², above 0.
    known : (y, x) ndarray of bool
        Pixels of the reference to trust.
    usable : (y, x) ndarray of bool
        Pixels of the *frames* to trust.
    directions : (2, 2) ndarray of float
        Projection on the directions (y, x) along which movement shows; no other movement is told.
    """

    def __init__(
        self,
        *,
        image: FloatArray,
        variance: FloatArray,
        known: NDArray[np.bool_],
        usable: NDArray[np.bool_],
        directions: FloatArray,
    ) -> None:
        self.image, self._known, self._usable, self._directions = image, known, usable, directions
        self._n_y, self._n_x = image.shape
        self._weights = 1.0 / variance
        self._level = float(np.mean(image))
        self._tiles_shape = (-(-self._n_y // _TILE_PX), -(-self._n_x // _TILE_PX))
        self._tile = self._choose_tiles()
        self._y, self._x = self._pixels_of(self._tile)
        self._spline = SplinePixels(image - self._level, y=self._y, x=self._x)
        self._template = likelihood_template(image, self._weights)
        self._cells: dict[tuple[int, int], _Cell] = {}

    def _choose_tiles(self) -> NDArray[np.intp]:
        """Tiles of pixels that hold nearly all of the information on movement."""
        from scipy.ndimage import gaussian_filter, uniform_filter

        n_tiles = self._tiles_shape[0] * self._tiles_shape[1]
        if self.image.size <= _FEW_PIXELS:
            return np.arange(n_tiles)
        along_y, along_x = (gaussian_filter(self.image, 1.0, order=order) for order in ((1, 0), (0, 1)))
        y, x = self._pixels_of(np.arange(n_tiles))
        inside = (y < self._n_y - 1) & (x < self._n_x - 1) & self._known[y, x]
        information = _sum_tiles((inside * ((along_y**2 + along_x**2) * self._weights)[y, x])[None])[0]
        # Noise has slopes, too. It is everywhere: what all but the emptiest tenth of the image exceeds tells nothing.
        around = uniform_filter(information.reshape(self._tiles_shape), 3).ravel()
        telling = np.maximum(around - _ABOVE_EMPTY * np.percentile(around, 10), 0.0)
        order = np.argsort(telling)[::-1]
        share = np.cumsum(telling[order])
        n_enough = int(np.searchsorted(share, _ENOUGH_INFORMATION * share[-1]))
        least = _FEW_PIXELS // 2 // _TILE_PX**2
        return np.sort(order[: int(np.clip(n_enough, least, 8 * least))])

    def _pixels_of(self, tiles: NDArray[np.intp]) -> tuple[NDArray[np.intp], NDArray[np.intp]]:
        """Rows and columns of the pixels of tiles; what juts out of the image is at the border."""
        step_y, step_x = np.divmod(np.arange(_TILE_PX**2), _TILE_PX)
        y, x = np.divmod(tiles, self._tiles_shape[1])
        y, x = _TILE_PX * y + step_y[:, None], _TILE_PX * x + step_x[:, None]
        return np.minimum(y, self._n_y - 1).ravel(), np.minimum(x, self._n_x - 1).ravel()

    def _cell(self, cell: tuple[int, int]) -> _Cell:
        """Return the linear problem for frames whose drift lies within an eighth of a pixel of `cell` / 4."""
        if cell in self._cells:
            return self._cells[cell]
        whole = [int(np.floor(step / _CELLS_PER_PX + 0.5)) for step in cell]
        part = (cell[0] - whole[0] * _CELLS_PER_PX, cell[1] - whole[1] * _CELLS_PER_PX)
        y, x = self._y, self._x
        image, along_y, along_x = self._spline.read(dy=-part[0] / _CELLS_PER_PX, dx=-part[1] / _CELLS_PER_PX)
        frame_y, frame_x = y + whole[0], x + whole[1]
        # the outermost reference pixels have no slope to trust
        seen = (frame_y >= 0) & (frame_y < self._n_y) & (frame_x >= 0) & (frame_x < self._n_x)
        seen &= (y >= 1) & (y < self._n_y - 1) & (x >= 1) & (x < self._n_x - 1) & self._known[y, x]
        frame_y, frame_x = np.where(seen, frame_y, 0), np.where(seen, frame_x, 0)
        seen &= self._usable[frame_y, frame_x]
        v, u = 2.0 * frame_y / max(self._n_y - 1, 1) - 1.0, 2.0 * frame_x / max(self._n_x - 1, 1) - 1.0
        columns = np.stack([-along_y, -along_x, image, np.ones_like(u), v, u, v * v, v * u, u * u])
        scale = np.where(seen, np.sqrt(self._weights[y, x]), 0.0)
        columns *= scale
        normal = columns @ columns.T
        rows = columns.astype(np.float32)
        if (len(self._cells) + 1) * rows.size > _MOST_CACHED_NUMBERS:
            self._cells.pop(next(iter(self._cells)), None)
        root_in_tile = np.sqrt(np.maximum(_sum_tiles(seen[None].astype(np.float32))[0], 1.0))
        self._cells[cell] = _Cell(
            pixels=(frame_y * self._n_x + frame_x).astype(np.intp),
            scale=scale.astype(np.float32),
            rows=rows,
            normal=normal,
            inverse=np.linalg.pinv(normal, hermitian=True, rcond=1e-12),
            root_in_tile=root_in_tile,
            tile_rows=_sum_tiles(rows) / root_in_tile,
            n_pixels=int(seen.sum()),
            signal=_signal(normal),
        )
        return self._cells[cell]

    def locate(self, frames: NDArray[np.generic], *, dy: FloatArray, dx: FloatArray, max_shift_px: float) -> Fit:
        """Refine the drift of frames from a start that is right to within about a bouton.

        Parameters
        ----------
        frames : (n_frames, y, x) ndarray
            Frames as recorded.
        dy, dx : (n_frames,) ndarray of float
            Where to start, px.
        max_shift_px : float
            No drift leaves +-max_shift_px.

        Returns
        -------
        Fit
        """
        n = len(frames)
        flat = frames.reshape(n, -1)
        limit = int(np.ceil(max_shift_px * _CELLS_PER_PX))
        found = {name: np.zeros(n) for name in Fit.__slots__}
        drift = np.stack([dy, dx], axis=1) @ self._directions
        cells = np.clip(np.rint(drift * _CELLS_PER_PX), -limit, limit).astype(int)
        active = np.arange(n)
        for step in range(_MOST_STEPS):
            moving = []
            for cell, members in _grouped(cells, active):
                problem = self._cell(cell)
                values = self._values(problem, flat, members)
                solution = self._solve(problem, values, members, found)
                move = self._move(solution)
                drift[members] = (np.asarray(cell) / _CELLS_PER_PX + move) @ self._directions
                target = np.clip(np.rint(drift[members] * _CELLS_PER_PX), -limit, limit).astype(int)
                # a little past the cell's edge is as good, and keeps frames from going to and fro
                far = (np.abs(move).max(axis=1) > 0.6 / _CELLS_PER_PX) & (target != cells[members]).any(axis=1)
                far &= step + 1 < _MOST_STEPS
                settled = members[~far]
                if settled.size and problem.n_pixels:
                    here = values if settled.size == members.size else values[~far]
                    found["strangest"][settled] = self._strangest(problem, here, solution[~far])
                cells[members] = target
                moving.append(members[far])
            active = np.concatenate(moving) if moving else active[:0]
            if not active.size:
                break
        found["dy_px"], found["dx_px"] = np.clip(drift, -max_shift_px, max_shift_px).T
        return Fit(**found)

    def _values(self, cell: _Cell, flat: NDArray[np.generic], members: NDArray[np.intp]) -> Single:
        """Pixels of some frames in units of their noise, (n, n_pixels)."""
        chosen = flat if members.size == len(flat) else flat[members]
        values: Single = np.take(chosen, cell.pixels, axis=1).astype(np.float32)
        values -= np.float32(self._level)
        values *= cell.scale
        return values

    def _solve(
        self, cell: _Cell, values: Single, members: NDArray[np.intp], found: dict[str, FloatArray]
    ) -> FloatArray:
        """Least-squares solution of each frame, (n, n_columns); fills in the fit but for the drift."""
        projected = (values @ cell.rows.T).astype(np.float64)
        solution: FloatArray = projected @ cell.inverse
        energy = np.einsum("ij,ij->i", values, values).astype(np.float64)
        left = np.maximum(energy - np.sum(projected * solution, axis=1), 0.0)
        misfit = left / max(cell.n_pixels - len(cell.inverse), 1)
        sd = np.sqrt(misfit) / _steady(solution[:, 2])
        doubt = self._directions @ cell.inverse[:2, :2] @ self._directions
        found["dy_sd_px"][members] = sd * np.sqrt(max(doubt[0, 0], 0.0))
        found["dx_sd_px"][members] = sd * np.sqrt(max(doubt[1, 1], 0.0))
        found["brightness"][members] = solution[:, 2]
        found["misfit"][members] = misfit
        found["signal"][members] = cell.signal
        found["n_pixels"][members] = cell.n_pixels
        return solution

    def _move(self, solution: FloatArray) -> FloatArray:
        """Move from the centre of the cell that solutions ask for, (n, 2) px."""
        move: FloatArray = solution[:, :2] / _steady(solution[:, 2])[:, None] @ self._directions
        return np.clip(move, -0.75, 0.75)

    def _strangest(self, cell: _Cell, values: Single, solution: FloatArray) -> FloatArray:
        """Largest deviation of any place from the reference in each frame, in SD, (n,)."""
        few = slice(None, None, max(1, len(values) // _FEW_FRAMES))
        residual = values[few] - solution[few].astype(np.float32) @ cell.rows
        skewness = float(np.median(_skewness(residual, cell.n_pixels)))
        left = np.einsum("ij,ij->i", values, values) - np.sum((solution @ cell.normal) * solution, axis=1)
        sd = np.sqrt(np.maximum(left, 0.0) / cell.n_pixels) * _further_up(skewness) + 1e-9
        places = cell.places(values)
        places -= solution.astype(np.float32) @ cell.tile_rows
        largest: FloatArray = np.abs(places, out=places).max(axis=1) / sd
        return largest

    def locate_despite_flashes(self, frames: NDArray[np.generic], fit: Fit, *, max_shift_px: float) -> Fit:
        """Locate frames again without the places that differ from the reference: boutons that release.

        A bouton that flashes beside another, or on a bend, would pull the frame towards it. Places where what is left
        over is beyond noise are left out, the worst first, unless that leaves too little to hold on to.

        Parameters
        ----------
        frames : (n_frames, y, x) ndarray
            Frames as recorded.
        fit : Fit
            Where they lie by all of their pixels.
        max_shift_px : float
            No drift leaves +-max_shift_px.

        Returns
        -------
        Fit
        """
        found = {name: getattr(fit, name).copy() for name in Fit.__slots__}
        flat = frames.reshape(len(frames), -1)
        for k in np.flatnonzero(fit.strangest > _FLASH_SD):
            self._refit(flat[k : k + 1], found, int(k), max_shift_px)
        return Fit(**found)

    def _refit(self, frame: NDArray[np.generic], found: dict[str, FloatArray], k: int, max_shift_px: float) -> None:
        """Locate one frame without its flashing places."""
        drift = np.array([found["dy_px"][k], found["dx_px"][k]])
        flashing = np.zeros(self._tiles_shape, dtype=np.bool_)
        at: tuple[int, int] | None = None
        used: FloatArray | None = None  # normal matrix of the last solution
        for round_ in range(_FLASH_ROUNDS):
            y, x = np.rint(drift * _CELLS_PER_PX).astype(int).tolist()
            if at != (y, x):
                at, problem = (y, x), self._cell((y, x))
                values = self._values(problem, frame, np.zeros(1, dtype=np.intp))
                projected_all, energy_all = problem.rows @ values[0], float(values[0] @ values[0])
                places_seen = problem.places(values)[0]
                residual = values - (problem.inverse @ projected_all)[None].astype(np.float32) @ problem.rows
                strangeness = _further_up(float(_skewness(residual, problem.n_pixels)[0]))
            tiles_out = np.flatnonzero(flashing.flat[self._tile])
            out = (tiles_out + np.arange(_TILE_PX**2)[:, None] * len(self._tile)).ravel()
            rows = problem.rows[:, out].astype(np.float64)
            normal = problem.normal - rows @ rows.T
            inverse = np.linalg.pinv(normal, hermitian=True, rcond=1e-9)
            doubt = self._directions @ inverse[:2, :2] @ self._directions
            usual_doubt = self._directions @ problem.inverse[:2, :2] @ self._directions
            n_pixels = problem.n_pixels - int(np.count_nonzero(problem.scale[out]))
            if np.trace(doubt) > 4.0 * np.trace(usual_doubt) or not n_pixels:
                break
            projected = projected_all - rows @ values[0, out]
            solution = inverse @ projected
            energy = energy_all - float(values[0, out] @ values[0, out]) - float(solution @ projected)
            misfit = max(energy, 0.0) / max(n_pixels - len(inverse), 1)
            drift = np.array(at) / _CELLS_PER_PX @ self._directions + self._move(solution[None])[0]
            drift = np.clip(drift, -max_shift_px, max_shift_px)
            found["dy_px"][k], found["dx_px"][k] = drift
            sd = np.sqrt(misfit * np.maximum(np.diag(doubt), 0.0)) / _steady(solution[2])
            found["dy_sd_px"][k], found["dx_sd_px"][k] = sd
            found["brightness"][k], found["misfit"][k] = solution[2], misfit
            found["n_pixels"][k], used = n_pixels, normal
            left = energy_all - 2.0 * float(solution @ projected_all) + float(solution @ problem.normal @ solution)
            spread = np.sqrt(max(left, 0.0) / problem.n_pixels) * strangeness + 1e-9
            places = np.abs(places_seen - solution.astype(np.float32) @ problem.tile_rows) / spread
            # the worst first: they also make the rest of the frame look wrong
            limit = max(_FLASH_SD - 1.0, 0.5 * float(places.max()) * (1.0 - round_ / _FLASH_ROUNDS))
            before, flashing = flashing, np.zeros_like(flashing)
            rows_, columns_ = np.divmod(self._tile[places > limit], self._tiles_shape[1])
            for row, column in zip(rows_.tolist(), columns_.tolist(), strict=True):
                flashing[max(row - 1, 0) : row + 2, max(column - 1, 0) : column + 2] = True
            if (before == flashing).all() and round_ > 1:
                break
        if used is not None:
            found["signal"][k] = _signal(used)

    def find(self, frames: NDArray[np.generic], *, max_shift_px: float) -> tuple[FloatArray, FloatArray]:
        """Coarse drift of frames by cross-correlation, to about a pixel.

        Parameters
        ----------
        frames : (n_frames, y, x) ndarray
            Frames as recorded.
        max_shift_px : float
            Search range along each axis, px.

        Returns
        -------
        dy, dx : (n_frames,) ndarray of float
        """
        coarse = correlate(frames, template=self._template, usable=self._usable, max_shift_px=max_shift_px)
        dy, dx = self._directions @ coarse
        return dy, dx


def _steady(brightness: FloatArray) -> FloatArray:
    """Brightness that a shift is divided by: a hardly visible frame must not jump."""
    return np.maximum(brightness, 0.2)


def _sum_tiles(values: NDArray[Number]) -> NDArray[Number]:
    """Sum over the pixels of each tile, (n, _TILE_PX² * n_tiles) -> (n, n_tiles)."""
    sums: NDArray[Number] = values.reshape(len(values), _TILE_PX**2, -1).sum(axis=1)
    return sums


def _skewness(residual: Single, n_pixels: int) -> FloatArray:
    square = residual * residual
    variance = square.sum(axis=1) / n_pixels + 1e-18
    skewness: FloatArray = np.einsum("ij,ij->i", square, residual) / n_pixels / variance**1.5
    return skewness


def _further_up(skewness: float) -> float:
    """How much further out the tail of a place lies than that of normal noise.

    A few photons scatter further up than down: what a normal tail calls 5 SD is further out by a share of the
    skewness (Cornish & Fisher 1938, Rev Inst Int Stat 5:307).
    """
    return 1.0 + (_FLASH_SD**2 - 1.0) / (6.0 * _FLASH_SD * _TILE_PX) * float(np.clip(skewness, 0.0, 2.0))


def _signal(normal: FloatArray) -> float:
    """Energy of the reference's structure beyond a smooth background."""
    crossed = normal[2, 3:]
    return float(normal[2, 2] - crossed @ np.linalg.pinv(normal[3:, 3:], hermitian=True) @ crossed)


def _grouped(cells: NDArray[np.int_], active: NDArray[np.intp]) -> list[tuple[tuple[int, int], NDArray[np.intp]]]:
    """Frames that share a cell."""
    kinds, which = np.unique(cells[active], axis=0, return_inverse=True)
    which = which.reshape(-1)
    order = np.argsort(which, kind="stable")
    ends = np.cumsum(np.bincount(which, minlength=len(kinds)))[:-1]
    return [((int(y), int(x)), active[members]) for (y, x), members in zip(kinds, np.split(order, ends), strict=True)]
