"""Where does a frame lie on a reference image? Weighted least squares on the pixels themselves.

Near a shift, a frame is the reference there, plus its two slopes times what the shift still lacks, plus changes of
brightness that are no movement: a factor and a smooth background. All are linear, so that one small matrix, computed
once per quarter-pixel cell of shifts and weighted by the photon noise, turns every frame in that cell into its shift,
with the precision that photon noise allows (Cramér-Rao bound). A cross-correlation finds the cell to start in: not
normalised in phase, which fails on noisy images.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from .correlation import correlate, likelihood_template

if TYPE_CHECKING:
    from numpy.typing import NDArray

    FloatArray = NDArray[np.float64]
    Single = NDArray[np.float32]

__all__ = ["Fit", "Reference"]

_CELLS_PER_PX = 4
_MOST_STEPS = 12
_ENOUGH_INFORMATION = 0.98
_FEW_PIXELS = 20_000  # below this every pixel is used
_MOST_CACHED_NUMBERS = 20_000_000
_TILE_PX = 3  # width of the places that are looked at for flashes
_FLASH_SD = 5.0  # a place this far from the reference flashes, and the places about it are left out, too
_FLASH_ROUNDS = 6


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
    """

    dy_px: FloatArray
    dx_px: FloatArray
    dy_sd_px: FloatArray
    dx_sd_px: FloatArray
    brightness: FloatArray
    misfit: FloatArray
    signal: FloatArray
    n_pixels: FloatArray


@dataclass(frozen=True, slots=True)
class _Cell:
    """The linear problem of one quarter-pixel cell: which pixels, and the columns that explain them."""

    pixels: NDArray[np.intp]
    weights: Single  # (n_pixels,)
    rows: Single  # (n_columns, n_pixels): columns times weights
    normal: FloatArray
    inverse: FloatArray  # of the normal matrix
    tile: NDArray[np.intp]  # (n_pixels,) place of each pixel, ascending
    tile_starts: NDArray[np.intp]
    signal: float


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
        from scipy.interpolate import RectBivariateSpline

        self.image, self._known, self._usable, self._directions = image, known, usable, directions
        self._n_y, self._n_x = image.shape
        self._spline = RectBivariateSpline(np.arange(self._n_y), np.arange(self._n_x), image, kx=3, ky=3)
        self._weights = 1.0 / variance
        self._level = float(np.mean(image))
        y, x = self._choose_pixels()
        self._tiles_shape = (-(-self._n_y // _TILE_PX), -(-self._n_x // _TILE_PX))
        tile = y // _TILE_PX * self._tiles_shape[1] + x // _TILE_PX
        order = np.argsort(tile, kind="stable")
        self._informative, self._tile = (y[order], x[order]), tile[order]
        self._pictures: dict[tuple[int, int], FloatArray] = {}  # slopes and image at the informative pixels
        self._cells: dict[tuple[int, int], _Cell] = {}

    def _choose_pixels(self) -> tuple[NDArray[np.intp], NDArray[np.intp]]:
        """Rows and columns of the pixels that hold nearly all of the information on movement."""
        from scipy.ndimage import gaussian_filter

        y, x = np.indices(self.image.shape)
        if self.image.size <= _FEW_PIXELS:
            return y.ravel(), x.ravel()
        along_y, along_x = (gaussian_filter(self.image, 1.0, order=order) for order in ((1, 0), (0, 1)))
        information = ((along_y**2 + along_x**2) * self._weights).ravel()
        order = np.argsort(information)[::-1]
        share = np.cumsum(information[order])
        n_enough = int(np.searchsorted(share, _ENOUGH_INFORMATION * share[-1]))
        chosen = np.sort(order[: int(np.clip(n_enough, _FEW_PIXELS // 2, 4 * _FEW_PIXELS))])
        return y.ravel()[chosen], x.ravel()[chosen]

    def _cell(self, cell: tuple[int, int]) -> _Cell:
        """Return the linear problem for frames whose drift lies within an eighth of a pixel of `cell` / 4."""
        if cell in self._cells:
            return self._cells[cell]
        whole = [int(np.floor(step / _CELLS_PER_PX + 0.5)) for step in cell]
        part = (cell[0] - whole[0] * _CELLS_PER_PX, cell[1] - whole[1] * _CELLS_PER_PX)
        y, x = self._informative
        if part not in self._pictures:
            at_y = np.arange(self._n_y) - part[0] / _CELLS_PER_PX
            at_x = np.arange(self._n_x) - part[1] / _CELLS_PER_PX
            self._pictures[part] = np.stack(  # the spline calls its first axis x
                [
                    -self._spline(at_y, at_x, dx=1)[y, x],
                    -self._spline(at_y, at_x, dy=1)[y, x],
                    self._spline(at_y, at_x)[y, x] - self._level,
                ]
            )
        frame_y, frame_x = y + whole[0], x + whole[1]
        # the outermost reference pixels have no slope to trust
        seen = (frame_y >= 0) & (frame_y < self._n_y) & (frame_x >= 0) & (frame_x < self._n_x)
        seen &= (y >= 1) & (y < self._n_y - 1) & (x >= 1) & (x < self._n_x - 1) & self._known[y, x]
        seen[seen] = self._usable[frame_y[seen], frame_x[seen]]
        y, x, frame_y, frame_x = y[seen], x[seen], frame_y[seen], frame_x[seen]
        v, u = 2.0 * frame_y / max(self._n_y - 1, 1) - 1.0, 2.0 * frame_x / max(self._n_x - 1, 1) - 1.0
        smooth = np.stack([np.ones_like(u), v, u, v * v, v * u, u * u])
        columns = np.concatenate([self._pictures[part][:, seen], smooth])
        weights = self._weights[y, x]
        rows = columns * weights
        normal = rows @ columns.T
        if (len(self._cells) + 1) * rows.size > _MOST_CACHED_NUMBERS:
            self._cells.pop(next(iter(self._cells)), None)
        self._cells[cell] = _Cell(
            pixels=(frame_y * self._n_x + frame_x).astype(np.intp),
            weights=weights.astype(np.float32),
            rows=rows.astype(np.float32),
            normal=normal,
            inverse=np.linalg.pinv(normal, hermitian=True, rcond=1e-12),
            tile=self._tile[seen],
            tile_starts=np.flatnonzero(np.diff(self._tile[seen], prepend=-1)),
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
        for _ in range(_MOST_STEPS):
            if not active.size:
                break
            moving = []
            for cell, members in _grouped(cells, active):
                centre = np.asarray(cell) / _CELLS_PER_PX
                problem = self._cell(cell)
                move = self._solve(problem, flat, members, found)
                drift[members] = (centre + move) @ self._directions
                # a little past the cell's edge is as good, and keeps frames from going to and fro
                far = np.abs(move).max(axis=1) > 0.6 / _CELLS_PER_PX
                moving.append(members[far])
            active = np.concatenate(moving)
            target = np.clip(np.rint(drift[active] * _CELLS_PER_PX), -limit, limit).astype(int)
            stuck = (target == cells[active]).all(axis=1)
            cells[active] = target
            active = active[~stuck]
        found["dy_px"], found["dx_px"] = np.clip(drift, -max_shift_px, max_shift_px).T
        return Fit(**found)

    def _solve(
        self, cell: _Cell, flat: NDArray[np.generic], members: NDArray[np.intp], found: dict[str, FloatArray]
    ) -> FloatArray:
        """Move of each frame from the centre of the cell, (n, 2) px; fills in the rest of the fit."""
        values = self._values(cell, flat, members)
        projected = (values @ cell.rows.T).astype(np.float64)
        solution = projected @ cell.inverse
        energy = np.einsum("ij,ij,j->i", values, values, cell.weights, optimize=False).astype(np.float64)
        left = np.maximum(energy - np.sum(projected * solution, axis=1), 0.0)
        n_pixels = len(cell.pixels)
        misfit = left / max(n_pixels - len(cell.inverse), 1)
        brightness = solution[:, 2]
        factor = np.maximum(brightness, 0.2)  # a hardly visible frame must not jump
        sd = np.sqrt(misfit) / factor
        doubt = self._directions @ cell.inverse[:2, :2] @ self._directions
        found["dy_sd_px"][members] = sd * np.sqrt(max(doubt[0, 0], 0.0))
        found["dx_sd_px"][members] = sd * np.sqrt(max(doubt[1, 1], 0.0))
        found["brightness"][members] = brightness
        found["misfit"][members] = misfit
        found["signal"][members] = cell.signal
        found["n_pixels"][members] = n_pixels
        move: FloatArray = np.clip(solution[:, :2] / factor[:, None] @ self._directions, -0.75, 0.75)
        return move

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
        cells = np.rint(np.stack([fit.dy_px, fit.dx_px], axis=1) * _CELLS_PER_PX).astype(int)
        for cell, members in _grouped(cells, np.arange(len(frames))):
            problem = self._cell(cell)
            if not problem.pixels.size:
                continue
            values = self._values(problem, flat, members)
            worst = np.abs(self._places(problem, values, values @ problem.rows.T @ problem.inverse)).max(axis=1)
            for k in members[worst > _FLASH_SD]:
                self._refit(flat[k : k + 1], found, int(k), max_shift_px)
        return Fit(**found)

    def _values(self, cell: _Cell, flat: NDArray[np.generic], members: NDArray[np.intp]) -> Single:
        chosen = flat if members.size == len(flat) else flat[members]
        values: Single = np.take(chosen, cell.pixels, axis=1).astype(np.float32)
        values -= np.float32(self._level)
        return values

    def _places(self, cell: _Cell, values: Single, solution: FloatArray) -> FloatArray:
        """Sum up what the solution leaves over in each tile that has pixels, in SD, (n_frames, n_tiles).

        A few photons scatter further up than down: what a normal tail calls 5 SD is further out by a share of the
        skewness (Cornish & Fisher 1938, Rev Inst Int Stat 5:307).
        """
        scale = np.sqrt(cell.weights)
        residual = values * scale
        residual -= solution.astype(np.float32) @ (cell.rows / scale)
        square = residual * residual
        spread = np.sqrt(np.mean(square, axis=1, keepdims=True)) + np.float32(1e-9)
        skewness = np.einsum("ij,ij->i", square, residual)[:, None] / residual.shape[1] / spread**3
        spread *= 1.0 + (_FLASH_SD**2 - 1.0) / (6.0 * _FLASH_SD * _TILE_PX) * np.clip(skewness, 0.0, 2.0)
        n_in_tile = np.diff(cell.tile_starts, append=len(cell.tile))
        places: FloatArray = np.add.reduceat(residual, cell.tile_starts, axis=1) / np.sqrt(n_in_tile) / spread
        return places

    def _refit(self, frame: NDArray[np.generic], found: dict[str, FloatArray], k: int, max_shift_px: float) -> None:
        """Locate one frame without its flashing places."""
        from scipy.ndimage import maximum_filter

        drift = np.array([found["dy_px"][k], found["dx_px"][k]])
        flashing = np.zeros(self._tiles_shape, dtype=np.bool_)
        for round_ in range(_FLASH_ROUNDS):
            cell = np.rint(drift * _CELLS_PER_PX).astype(int)
            problem = self._cell((int(cell[0]), int(cell[1])))
            values = self._values(problem, frame, np.zeros(1, dtype=np.intp))
            out = flashing.flat[problem.tile]
            rows = problem.rows[:, out]
            normal = problem.normal - rows @ (rows / problem.weights[out]).T
            inverse = np.linalg.pinv(normal, hermitian=True, rcond=1e-9)
            doubt = self._directions @ inverse[:2, :2] @ self._directions
            usual_doubt = self._directions @ problem.inverse[:2, :2] @ self._directions
            if np.trace(doubt) > 4.0 * np.trace(usual_doubt) or out.all():
                return
            projected = problem.rows @ values[0] - rows @ values[0, out]
            solution = inverse @ projected
            n_pixels = out.size - int(out.sum())
            energy = float((values[0] ** 2 * ~out) @ problem.weights) - float(solution @ projected)
            misfit = max(energy, 0.0) / max(n_pixels - len(inverse), 1)
            factor = max(float(solution[2]), 0.2)
            move = np.clip(solution[:2] / factor @ self._directions, -0.75, 0.75)
            drift = np.clip(cell / _CELLS_PER_PX @ self._directions + move, -max_shift_px, max_shift_px)
            found["dy_px"][k], found["dx_px"][k] = drift
            found["dy_sd_px"][k], found["dx_sd_px"][k] = np.sqrt(misfit * np.maximum(np.diag(doubt), 0.0)) / factor
            found["brightness"][k], found["misfit"][k] = solution[2], misfit
            found["signal"][k], found["n_pixels"][k] = _signal(normal), n_pixels
            places = np.zeros(self._tiles_shape)
            places.flat[problem.tile[problem.tile_starts]] = np.abs(self._places(problem, values, solution[None])[0])
            # the worst first: they also make the rest of the frame look wrong
            limit = max(_FLASH_SD - 1.0, 0.5 * float(places.max()) * (1.0 - round_ / _FLASH_ROUNDS))
            before, flashing = flashing, maximum_filter(places, size=3) > limit
            if (before == flashing).all() and round_ > 1:
                return

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
        template = likelihood_template(self.image, self._weights)
        coarse = correlate(frames, template=template, usable=self._usable, max_shift_px=max_shift_px)
        dy, dx = self._directions @ coarse
        return dy, dx


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
