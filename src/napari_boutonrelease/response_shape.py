"""The time course of one response, averaged in closed form over the exposure of each frame.

A response starts `latency_s` after its stimulus, rises and decays exponentially, and is scaled to peak 1, so that an
amplitude is the height of the peak in continuous time whatever the frame in which the stimulus fell.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from .checks import check_fraction, check_not_negative, check_positive

if TYPE_CHECKING:
    from numpy.typing import ArrayLike, NDArray


@dataclass(frozen=True, slots=True, kw_only=True)
class ResponseShape:
    """h(t) = (1 - exp(-t/rise)) * ((1 - f) exp(-t/decay) + f exp(-t/slow_decay)), scaled to peak 1.

    Attributes
    ----------
    latency_s : float
        Time from the stimulus to the start of the response, at least 0, in s.
    rise_s, decay_s : float
        Time constants of rise and decay, greater than 0, in s.
    slow_fraction : float
        Share f of the slow decay, in [0, 1). 0 where the data show no second component.
    slow_decay_s : float
        Time constant of the slow decay, in s; ignored where `slow_fraction` is 0.
    """

    latency_s: float
    rise_s: float
    decay_s: float
    slow_fraction: float = 0.0
    slow_decay_s: float = 1.0

    def __post_init__(self) -> None:
        check_not_negative("latency_s", self.latency_s, unit="s")
        check_positive("rise_s", self.rise_s, unit="s")
        check_positive("decay_s", self.decay_s, unit="s")
        check_fraction("slow_fraction", self.slow_fraction)
        check_positive("slow_decay_s", self.slow_decay_s, unit="s")

    def _terms(self) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        """Weights and rates of the exponentials whose sum is the unscaled shape."""
        rise = 1.0 / self.rise_s
        decays = ((1.0 - self.slow_fraction, 1.0 / self.decay_s), (self.slow_fraction, 1.0 / self.slow_decay_s))
        parts = ((1.0, 0.0), (-1.0, rise))
        terms = [(sign * share, rate + extra) for share, rate in decays if share for sign, extra in parts]
        weights, rates = zip(*terms, strict=True)
        return np.asarray(weights), np.asarray(rates)

    def peak(self) -> tuple[float, float]:
        """Time of the peak after the start of the response, in s, and the unscaled height there."""
        weights, rates = (terms.tolist() for terms in self._terms())
        time = self.rise_s * math.log1p(self.decay_s / self.rise_s)
        if self.slow_fraction:
            low, high = 0.0, self.rise_s * math.log1p(max(self.decay_s, self.slow_decay_s) / self.rise_s)
            for _ in range(60):  # bisection on the slope, which falls through zero once
                time = 0.5 * (low + high)
                slope = -sum(w * r * math.exp(-r * time) for w, r in zip(weights, rates, strict=True))
                low, high = (time, high) if slope > 0 else (low, time)
        return time, sum(w * math.exp(-r * time) for w, r in zip(weights, rates, strict=True))

    def end_s(self, *, remaining: float = 1e-3) -> float:
        """Time after the stimulus at which the response has fallen to about `remaining` of its peak, in s."""
        slow = self.slow_decay_s * math.log(self.slow_fraction / remaining) if self.slow_fraction > remaining else 0.0
        return self.latency_s + max(-self.decay_s * math.log(remaining), slow) + self.rise_s

    def value(self, since_stimulus_s: ArrayLike) -> NDArray[np.float64]:
        """Height at instants after the stimulus (any shape, in s); 0 before the start, 1 at the peak."""
        elapsed = np.asarray(since_stimulus_s, dtype=np.float64) - self.latency_s
        weights, rates = self._terms()
        started = np.maximum(elapsed, 0.0)[..., None]
        return np.where(elapsed > 0, np.sum(weights * np.exp(-rates * started), axis=-1), 0.0) / self.peak()[1]

    def frame_average(self, since_stimulus_s: ArrayLike, *, exposure_s: float) -> NDArray[np.float64]:
        """Mean height over exposures of `exposure_s` that begin `since_stimulus_s` after the stimulus.

        Parameters
        ----------
        since_stimulus_s : array_like of float
            Start of each exposure minus the stimulus time, any shape, in s; negative before the stimulus.
        exposure_s : float
            Length of an exposure, greater than 0, in s.

        Returns
        -------
        ndarray of float
            Same shape; what a frame of that exposure shows of a response with peak 1.

        Examples
        --------
        >>> shape = ResponseShape(latency_s=0.0, rise_s=1e-4, decay_s=0.05)
        >>> shape.frame_average([-0.02, 0.0, 0.01], exposure_s=0.01).round(3)
        array([0.   , 0.909, 0.753])
        """
        check_positive("exposure_s", exposure_s, unit="s")
        begin = np.asarray(since_stimulus_s, dtype=np.float64) - self.latency_s
        weights, rates = self._terms()
        start = np.maximum(begin, 0.0)[..., None]
        stop = np.maximum(begin + exposure_s, 0.0)[..., None]
        area = np.sum(weights / rates * (np.exp(-rates * start) - np.exp(-rates * stop)), axis=-1)
        return np.asarray(area / (exposure_s * self.peak()[1]))
