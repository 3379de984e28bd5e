"""Light of a response gathered over exposures: the reporter's time course, integrated term by term."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    from numpy.typing import ArrayLike, NDArray

    from .recipe import Recipe

_FORGOTTEN = 1e-6  # share of the peak below which a response is taken as over


class Reporter:
    """Time course (1 - exp(-t/rise)) ((1 - f) exp(-t/decay) + f exp(-t/slow)) from the moment of release, peak 1.

    Parameters
    ----------
    recipe : Recipe
        Its `rise_s`, `decay_s`, `slow_fraction`, `slow_decay_s` count.
    """

    def __init__(self, recipe: Recipe) -> None:
        rise, decay, slow, share = recipe.rise_s, recipe.decay_s, recipe.slow_decay_s, recipe.slow_fraction
        self._weight = np.array([1 - share, share, share - 1, -share])
        self._tau_s = np.array([decay, slow, decay * rise / (decay + rise), slow * rise / (slow + rise)])
        longest = slow if share > 0 else decay
        self._scale = 1.0
        # A single decay peaks at rise * log(1 + decay / rise), a mixed one before the slower's; two passes find it.
        span = np.linspace(0.0, rise * np.log1p(longest / rise), 20_001)
        around = int(np.argmax(self.height(span)))
        fine = np.linspace(span[max(around - 1, 0)], span[min(around + 1, span.size - 1)], 20_001)
        self.peak_s = float(fine[np.argmax(self.height(fine))])
        self._scale = 1.0 / float(self.height(self.peak_s))
        self.duration_s = float(-np.log(_FORGOTTEN) * longest + self.peak_s)

    def height(self, since_release_s: ArrayLike) -> NDArray[np.float64]:
        """Height of the response at instants after the release (s, any shape); 0 before it."""
        elapsed = np.asarray(since_release_s, dtype=np.float64)[..., None]
        terms = self._weight * np.exp(-np.maximum(elapsed, 0.0) / self._tau_s)
        height: NDArray[np.float64] = self._scale * terms.sum(axis=-1) * (elapsed[..., 0] >= 0)
        return height

    def gathered(self, since_release_s: ArrayLike, *, exposure_s: float) -> NDArray[np.float64]:
        """Mean height over exposures that begin at the given times after the release (s, any shape)."""
        start = np.asarray(since_release_s, dtype=np.float64)
        return (self._area(start + exposure_s) - self._area(start)) / exposure_s

    def _area(self, since_release_s: NDArray[np.float64]) -> NDArray[np.float64]:
        """Integral of the response from its release to the given times."""
        elapsed = np.maximum(since_release_s, 0.0)[..., None]
        terms = -self._weight * self._tau_s * np.expm1(-elapsed / self._tau_s)
        area: NDArray[np.float64] = self._scale * terms.sum(axis=-1)
        return area


def activity(
    *,
    reporter: Reporter,
    release_s: NDArray[np.float64],
    size_dff: NDArray[np.float64],
    start_s: NDArray[np.float64],
    exposure_s: float,
    saturation_dff: float | None,
) -> NDArray[np.float64]:
    """dF/F of one bouton, averaged over each exposure.

    Parameters
    ----------
    reporter : Reporter
        Time course of one vesicle.
    release_s, size_dff : (n_vesicles,) ndarray
        When each vesicle was released (s) and its response (dF/F at the peak).
    start_s : (n_frames, ...) ndarray
        Start of each exposure, increasing over frames, in s.
    exposure_s : float
        Length of an exposure, in s.
    saturation_dff : float or None
        dF/F of a saturated reporter; None is a linear one.

    Returns
    -------
    (n_frames, ...) ndarray
        Mean dF/F of each exposure.
    """
    if saturation_dff is None:
        return _summed(reporter, release_s, size_dff, start_s, exposure_s)
    # Saturation acts at every instant: average it over slices of the exposure (midpoint rule).
    slices = 10
    slice_s = exposure_s / slices
    total = np.zeros(start_s.shape)
    for number in range(slices):
        linear = _summed(reporter, release_s, size_dff, start_s + number * slice_s, slice_s)
        total += linear / (1.0 + linear / saturation_dff)
    return total / slices


def _summed(
    reporter: Reporter,
    release_s: NDArray[np.float64],
    size_dff: NDArray[np.float64],
    start_s: NDArray[np.float64],
    exposure_s: float,
) -> NDArray[np.float64]:
    total = np.zeros(start_s.shape)
    by_frame = start_s.reshape(start_s.shape[0], -1)
    first_row, last_row = by_frame.min(axis=1), by_frame.max(axis=1)
    begin = np.searchsorted(last_row, release_s - exposure_s, side="right")
    end = np.searchsorted(first_row, release_s + reporter.duration_s)
    for vesicle in np.flatnonzero(begin < end):
        during = slice(begin[vesicle], end[vesicle])
        share = reporter.gathered(start_s[during] - release_s[vesicle], exposure_s=exposure_s)
        total[during] += size_dff[vesicle] * share
    return total
