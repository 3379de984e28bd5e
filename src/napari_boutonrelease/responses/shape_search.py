"""Nonlinear least squares for the parameters of the response shape."""

from __future__ import annotations

from dataclasses import replace
from typing import TYPE_CHECKING

import numpy as np

from ..response_shape import ResponseShape

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from .trial_blocks import TrialBlocks

__all__ = ["ShapeSearch"]

_LATENCY_PRIOR_S = 0.002
_LOG_RISE_PRIOR = 1.0
"""How far (SD) latency and rise may stray from the reference where the frames are too long to tell them apart."""
_LEAST_RISE_FRAMES = 0.02
_SLOW_P = 1e-4
_MAX_STEPS = 40
_WORTH_SEARCHING = 8.0
"""Fall of the misfit, in variances of the noise, below which a slow decay is not even looked for."""


class ShapeSearch:
    """Nonlinear search of the shape; the misfit is the sum of squares that no amplitude can take away."""

    def __init__(
        self, blocks: TrialBlocks, *, interval_s: float, reference: ResponseShape, bounds_s: tuple[float, float]
    ) -> None:
        self._blocks, self._interval_s, self._reference, self._bounds_s = blocks, interval_s, reference, bounds_s
        self._n_values = float(np.sum(blocks.n_values))
        self._spare = max(self._n_values - blocks.n_boutons * blocks.n_linear - 3, 1.0)

    def misfit(self, shape: ResponseShape) -> float:
        """Sum of squared whitened residuals."""
        return float(np.sum(self._blocks.misfit(shape)))

    def single(self, start: ResponseShape) -> ResponseShape:
        """Best shape with one decay."""
        parameters = self._minimise(self._to_parameters(start))
        return self._of_parameters(parameters)

    def with_slow(self, single: ResponseShape) -> tuple[ResponseShape, float]:
        """Find the shape, with a slow decay if it is needed, and the p-value of the slow decay."""
        from scipy.special import fdtrc

        alone = self.single(single)
        worst = self.misfit(alone)
        low_s, high_s = self._bounds_s
        slow = [alone.decay_s * factor for factor in (4.0, 10.0, 25.0) if alone.decay_s * factor < 2 * high_s]
        gains = [self._slow_gain(alone, slow_s, variance=worst / self._spare) for slow_s in slow]
        best, best_misfit, gain = alone, worst, max(gains, default=0.0)
        if gain > _WORTH_SEARCHING:
            for slow_s in slow:
                start = replace(alone, decay_s=max(low_s, 0.8 * alone.decay_s), slow_fraction=0.2, slow_decay_s=slow_s)
                shape = self._of_parameters(self._minimise(self._to_parameters(start)))
                misfit = self.misfit(shape)
                if misfit < best_misfit and shape.slow_decay_s > 2 * shape.decay_s:
                    best, best_misfit = shape, misfit
            gain = (worst - best_misfit) / (best_misfit / self._spare)
        p_value = float(fdtrc(2, self._spare, max(gain, 0.0) / 2))
        by_bic = self._n_values * np.log(worst / best_misfit) > 2 * np.log(self._n_values)
        needed = p_value < _SLOW_P and by_bic and best.slow_fraction > 0.02
        return (best if needed else alone), p_value

    def _slow_gain(self, alone: ResponseShape, slow_s: float, *, variance: float) -> float:
        """Foresee how far the misfit, over the variance, falls with a slow decay (Rao's score test)."""
        parameters = self._to_parameters(alone)
        steps = np.append(self._steps(parameters.size), 1e-3)
        moved = [self._of_parameters(parameters + step) for step in np.diag(steps[:-1])]
        moved.append(replace(alone, slow_fraction=1e-3, slow_decay_s=slow_s))
        curvature, descent = self._blocks.normal_equations(alone, moved, steps)
        known = np.linalg.pinv(curvature[:3, :3], hermitian=True)
        spread = curvature[3, 3] - curvature[3, :3] @ known @ curvature[:3, 3]
        rise = descent[3] - curvature[3, :3] @ known @ descent[:3]
        return float(rise**2 / spread / variance) if rise > 0 and spread > 1e-9 * curvature[3, 3] else 0.0

    def standard_errors(self, shape: ResponseShape) -> tuple[float, float, float]:
        """Give standard errors of latency, rise and decay, in s, from the curvature of the misfit."""
        curvature, _ = self._system(self._to_parameters(shape), variance=self.misfit(shape) / self._spare)
        variance = np.diag(np.linalg.pinv(curvature, hermitian=True))
        errors = np.sqrt(np.where(variance > 0, variance, np.nan))
        return float(errors[0]), float(errors[1] * shape.rise_s), float(errors[2] * shape.decay_s)

    def _pull(self, parameters: NDArray[np.float64]) -> NDArray[np.float64]:
        """Latency and rise minus the reference, in SD of their priors; 0 for the other parameters."""
        pull = np.zeros(parameters.size)
        pull[0] = (parameters[0] - self._reference.latency_s) / _LATENCY_PRIOR_S
        pull[1] = (parameters[1] - np.log(self._reference.rise_s)) / _LOG_RISE_PRIOR
        return pull

    def _penalised(self, parameters: NDArray[np.float64], *, variance: float) -> float:
        """Misfit over the variance of the noise, with the weak pull of the reference."""
        return self.misfit(self._of_parameters(parameters)) / variance + float(np.sum(self._pull(parameters) ** 2))

    def _steps(self, n: int) -> NDArray[np.float64]:
        return np.array([1e-3 * self._interval_s, 1e-3, 1e-3, 1e-3, 1e-3])[:n]

    def _system(
        self, parameters: NDArray[np.float64], *, variance: float
    ) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        steps = self._steps(parameters.size)
        moved = [self._of_parameters(parameters + step) for step in np.diag(steps)]
        curvature, descent = self._blocks.normal_equations(self._of_parameters(parameters), moved, steps)
        looseness = np.array([_LATENCY_PRIOR_S, _LOG_RISE_PRIOR, np.inf, np.inf, np.inf])[: parameters.size]
        curvature = curvature / variance + np.diag(looseness**-2)
        return curvature, descent / variance - self._pull(parameters) / looseness

    def _minimise(self, start: NDArray[np.float64]) -> NDArray[np.float64]:
        """Gauss-Newton steps within bounds, damped where one fails (Levenberg 1944, Marquardt 1963)."""
        low_s, high_s = self._bounds_s
        low = np.array([0.0, np.log(_LEAST_RISE_FRAMES * self._interval_s), np.log(low_s), -5.0, np.log(low_s)])[
            : start.size
        ]
        high = np.array([high_s / 2, np.log(high_s), np.log(high_s * 2), 3.0, np.log(high_s * 4)])[: start.size]
        here = np.clip(start, low, high)
        variance = self.misfit(self._of_parameters(here)) / self._spare
        best, damping = self._penalised(here, variance=variance), 1e-3
        for _ in range(_MAX_STEPS):
            curvature, descent = self._system(here, variance=variance)
            free = ~(((here <= low) & (descent < 0)) | ((here >= high) & (descent > 0)))
            gain = 0.0
            while free.any() and damping < 1e8:
                inner = curvature[np.ix_(free, free)]
                step = np.zeros(here.size)
                step[free] = np.linalg.lstsq(inner + damping * np.diag(np.diag(inner)), descent[free], rcond=None)[0]
                there = np.clip(here + np.clip(step, -1.0, 1.0), low, high)
                value = self._penalised(there, variance=variance)
                if value <= best:
                    gain, here, best, damping = best - value, there, value, max(damping / 10, 1e-9)
                    break
                damping *= 10
            if gain < 1e-3:
                break
        return here

    @staticmethod
    def _to_parameters(shape: ResponseShape) -> NDArray[np.float64]:
        parameters = [shape.latency_s, np.log(shape.rise_s), np.log(shape.decay_s)]
        if shape.slow_fraction:
            fraction = min(shape.slow_fraction, 0.95)
            parameters += [np.log(fraction / (1 - fraction)), np.log(shape.slow_decay_s)]
        return np.array(parameters)

    @staticmethod
    def _of_parameters(parameters: NDArray[np.float64]) -> ResponseShape:
        slow = {}
        if parameters.size > 3:
            slow = {
                "slow_fraction": float(1 / (1 + np.exp(-parameters[3]))),
                "slow_decay_s": float(np.exp(parameters[4])),
            }
        return ResponseShape(
            latency_s=max(float(parameters[0]), 0.0),
            rise_s=float(np.exp(parameters[1])),
            decay_s=float(np.exp(parameters[2])),
            **slow,
        )
