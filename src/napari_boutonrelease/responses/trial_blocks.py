"""The misfit of a response shape: what is left of all trials when every amplitude and baseline has been fitted.

The same model as in `response_design`, laid out as equal blocks so that thousands of small fits run as one, for the
search of the shape. A tail that reaches into the following trials is carried over from the amplitudes found in the
sweep before.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from .bouton_groups import groups_of_boutons

if TYPE_CHECKING:
    from collections.abc import Sequence

    from numpy.typing import NDArray

    from ..recording.timing import Timing
    from ..response_shape import ResponseShape
    from .noise import TimeCorrelation
    from .windows import Windows

__all__ = ["TrialBlocks"]

_SWEEPS = 3
_MOST_CARRIED = 4
_CARRIED_HEIGHT = 0.003
"""Tails are carried into a window that starts while they stand higher than this share of the peak."""


@dataclass(frozen=True, slots=True, kw_only=True)
class _Group:
    boutons: NDArray[np.intp]
    offset_s: float
    valid: NDArray[np.bool_]
    y: NDArray[np.float64]
    depth: NDArray[np.intp]


@dataclass(frozen=True, slots=True, kw_only=True)
class _Solution:
    design: NDArray[np.float64]
    gram: NDArray[np.float64]
    amplitude: NDArray[np.float64]
    residual: NDArray[np.float64]


class TrialBlocks:
    """Trials of several boutons as blocks of (trial, frame).

    Parameters
    ----------
    y : (n_boutons, n_frames) ndarray
        Traces, of about unit noise; NaN in frames without a value.
    offset_s : (n_boutons,) ndarray
        How much later than row 0 each is exposed, in s.
    windows : Windows
        Frames of each trial; no frame in two of them.
    timing : Timing
        Times of the frames.
    correlation : TimeCorrelation
        Correlation of the noise in time.
    """

    def __init__(
        self,
        y: NDArray[np.float64],
        *,
        offset_s: NDArray[np.float64],
        windows: Windows,
        timing: Timing,
        correlation: TimeCorrelation,
    ) -> None:
        order = np.argsort(windows.start, kind="stable")
        order = order[windows.stop[order] > windows.start[order]]
        start, stop = windows.start[order], windows.stop[order]
        self._timing, self._correlation = timing, correlation
        self._pulse_s = windows.pulse_s[order]
        self._segment = timing.segment[start]
        length = int(np.max(stop - start, initial=1))
        frame = start[:, None] + np.arange(length)
        inside = frame < stop[:, None]
        frame = np.minimum(frame, y.shape[1] - 1)
        self._time_s = timing.frame_start_s[frame]
        last_s = np.fmax.reduce(self._pulse_s, axis=1)
        lags = range(1, min(_MOST_CARRIED, order.size - 1) + 1)
        self._gap_s = [float(np.min(self._time_s[lag:, 0] - last_s[:-lag])) for lag in lags]
        self._groups = []
        self.n_boutons = y.shape[0]
        self.n_values = np.zeros(y.shape[0])
        self.n_trials = order.size
        self.n_pulses = int(np.count_nonzero(np.isfinite(self._pulse_s)))
        for boutons, offset, usable in groups_of_boutons(y, offset_s=offset_s, used=np.ones(y.shape[1], dtype=bool)):
            valid = inside & usable[frame]
            steps = np.arange(length) + 0 * frame
            last_break = np.maximum.accumulate(np.where(valid, -1, steps), axis=1)
            depth = np.clip(steps - last_break - 1, 0, correlation.order)
            values = np.where(valid[:, :, None], np.moveaxis(y[boutons][:, frame], 0, 2), 0.0)
            group = _Group(boutons=boutons, offset_s=offset, valid=valid, y=values, depth=depth)
            self._groups.append(group)
            self.n_values[boutons] = np.count_nonzero(valid)

    @property
    def n_linear(self) -> int:
        """Amplitudes and baselines that one bouton's fit determines."""
        return self.n_trials + self.n_pulses

    def misfit(self, shape: ResponseShape | None) -> NDArray[np.float64]:
        """Sum of squared whitened residuals of each bouton, (n_boutons,); without any response for None."""
        result = np.zeros(self.n_boutons)
        for group in self._groups:
            result[group.boutons] = np.sum(self._solve(group, shape).residual ** 2, axis=(0, 1))
        return result

    def normal_equations(
        self, shape: ResponseShape, moved: Sequence[ResponseShape], steps: NDArray[np.float64]
    ) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        """Gauss-Newton system for the parameters of the shape, all linear ones eliminated (Kaufman 1975, BIT 15:49).

        Parameters
        ----------
        shape : ResponseShape
            Where the model is linearised.
        moved : sequence of n ResponseShape
            The shape with one parameter moved, each.
        steps : (n,) ndarray
            By how much.

        Returns
        -------
        curvature : (n, n) ndarray
            Products of the derivatives of the residuals.
        descent : (n,) ndarray
            Minus half the gradient of the misfit.
        """
        curvature, descent = np.zeros((len(moved), len(moved))), np.zeros(len(moved))
        for group in self._groups:
            solution = self._solve(group, shape)
            here = self._predict(group, shape, solution.amplitude)
            derivatives = []
            for other, step in zip(moved, steps, strict=True):
                change = self._whiten((self._predict(group, other, solution.amplitude) - here) / step, group)
                turned = solution.design.transpose(0, 2, 1)
                derivatives.append(change - solution.design @ np.linalg.solve(solution.gram, turned @ change))
            stacked = np.array(derivatives).reshape(len(moved), -1)
            curvature += stacked @ stacked.T
            descent += stacked @ solution.residual.ravel()
        return curvature, descent

    def _solve(self, group: _Group, shape: ResponseShape | None) -> _Solution:
        columns = [group.valid[:, :, None].astype(np.float64)]
        if shape is not None:
            columns.append(self._heights(group, shape, carried=0))
        design = self._whiten(np.concatenate(columns, axis=2), group)
        y = self._whiten(group.y, group)
        turned = design.transpose(0, 2, 1)
        gram = turned @ design
        diagonal = np.einsum("wkk->wk", gram)
        gram = gram + (np.where(diagonal > 0, 1e-9 * diagonal, 1.0))[:, :, None] * np.eye(design.shape[2])
        solved = np.asarray(np.linalg.solve(gram, turned @ y), dtype=np.float64)
        tails = [] if shape is None else self._tails(group, shape)
        for _ in range(_SWEEPS if tails else 0):
            y = self._whiten(group.y - self._carry(tails, solved[:, 1:]), group)
            solved = np.asarray(np.linalg.solve(gram, turned @ y), dtype=np.float64)
        return _Solution(design=design, gram=gram, amplitude=solved[:, 1:], residual=y - design @ solved)

    def _predict(self, group: _Group, shape: ResponseShape, amplitude: NDArray[np.float64]) -> NDArray[np.float64]:
        """Responses in every frame, tails of earlier trials included, (n_trials, n_frames, n_boutons)."""
        own = self._heights(group, shape, carried=0) @ amplitude
        tails = self._tails(group, shape)
        return own + self._carry(tails, amplitude) if tails else own

    def _heights(self, group: _Group, shape: ResponseShape, *, carried: int) -> NDArray[np.float64]:
        """Heights of responses in the window `carried` trials later, (n_trials - carried, n_frames, n_pulses)."""
        n = self.n_trials - carried
        since_s = (self._time_s[carried:] + group.offset_s)[:, :, None] - self._pulse_s[:n, None, :]
        reached = np.isfinite(since_s) & group.valid[carried:, :, None] & (since_s < shape.end_s())
        reached &= (self._segment[carried:] == self._segment[:n])[:, None, None]
        reached &= since_s > -self._timing.exposure_s
        height = np.zeros(since_s.shape)
        height[reached] = shape.frame_average(since_s[reached], exposure_s=self._timing.exposure_s)
        return height

    def _tails(self, group: _Group, shape: ResponseShape) -> list[NDArray[np.float64]]:
        end_s = shape.end_s(remaining=_CARRIED_HEIGHT)
        carried = [lag for lag, gap_s in enumerate(self._gap_s, start=1) if not gap_s > end_s]
        return [self._heights(group, shape, carried=lag) for lag in carried]

    @staticmethod
    def _carry(tails: list[NDArray[np.float64]], amplitude: NDArray[np.float64]) -> NDArray[np.float64]:
        total = np.zeros((amplitude.shape[0], tails[0].shape[1], amplitude.shape[2]))
        for carried, heights in enumerate(tails, start=1):
            total[carried:] += heights @ amplitude[:-carried]
        return total

    def _whiten(self, values: NDArray[np.float64], group: _Group) -> NDArray[np.float64]:
        """Whiten along the frames, (n_trials, n_frames, ...), zero where a frame holds no value."""
        if not self._correlation.order:
            return values
        shrink = 1.0 / np.sqrt(self._correlation.innovation)
        whitened = values * shrink[group.depth][:, :, None]
        for lag in range(1, self._correlation.order + 1):
            weights = np.array([p[lag - 1] if p.size >= lag else 0.0 for p in self._correlation.prediction]) * shrink
            whitened[:, lag:] -= weights[group.depth][:, lag:, None] * values[:, :-lag]
        return np.asarray(whitened * group.valid[:, :, None])
