"""The share of boutons that a detection finds, against their release probability."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from ...checks import check_array
from ...errors import InputError
from ..statistics.intervals import Estimate

if TYPE_CHECKING:
    from numpy.typing import ArrayLike, NDArray

    Floats = NDArray[np.float64]


@dataclass(frozen=True, slots=True, kw_only=True)
class DetectionCurve:
    """Share found, rising with p_release.

    Attributes
    ----------
    p_release : (n,) ndarray
        Where it was measured.
    share : (n,) ndarray
        Non-decreasing shares that fit best.
    draws : (n_draws, n) ndarray
        The same from counts drawn anew: how well it is known.
    """

    p_release: Floats
    share: Floats
    draws: Floats

    def at(self, p_release: ArrayLike) -> Floats:
        """Return the share found at other values, (n_p,); a bouton that never releases is not found."""
        return np.asarray(_between(self.p_release, self.share[None], p_release)[0])

    def draws_at(self, p_release: ArrayLike) -> Floats:
        """Return the same of every draw, (n_draws, n_p)."""
        return _between(self.p_release, self.draws, p_release)

    def smallest(self, share: float, *, confidence: float) -> Estimate:
        """Return the smallest p_release of which at least `share` is found, not below the smallest measured.

        NaN where no p_release reaches it; an upper end is infinite where draws do not.
        """
        value = _first_reach(self.p_release, self.share, share)
        if not np.isfinite(value):
            return Estimate(value=np.nan, lo=np.nan, hi=np.nan, method=f"none: no p_release is found with {share:g}")
        drawn = np.array([_first_reach(self.p_release, one, share) for one in self.draws])
        drawn = np.sort(np.where(np.isfinite(drawn), drawn, np.inf))
        tail = int(np.floor((1.0 - confidence) / 2 * len(drawn)))
        return Estimate(
            value=value, lo=float(min(drawn[tail], value)), hi=float(max(drawn[-1 - tail], value)), method="bootstrap"
        )


def fit_detection_curve(
    p_release: ArrayLike, found: ArrayLike, planted: ArrayLike, *, n_draws: int, rng: np.random.Generator
) -> DetectionCurve:
    """Fit a share that never falls with p_release, by isotonic regression (Ayer et al. 1955).

    Parameters
    ----------
    p_release : (n,) array_like
        Increasing, above 0.
    found, planted : (n,) array_like of int
        Boutons found, of those there.
    n_draws : int
        Curves to draw from the posterior of each share, Beta(found + 1/2, missed + 1/2).
    rng : Generator

    Returns
    -------
    DetectionCurve

    Raises
    ------
    InputError
        If p_release does not increase or counts are impossible.

    Examples
    --------
    >>> curve = fit_detection_curve(
    ...     [0.1, 0.2, 0.4], [4, 2, 10], [10, 10, 10], n_draws=10, rng=np.random.default_rng(1)
    ... )
    >>> curve.share
    array([0.3, 0.3, 1. ])
    """
    p = check_array("p_release", p_release, n_dims=1)
    k, n = check_array("found", found, n_dims=1), check_array("planted", planted, n_dims=1)
    if p.shape != k.shape or k.shape != n.shape or not p.size:
        raise InputError(f"p_release, found and planted must have one value each (given {p.size}, {k.size}, {n.size}).")
    if p[0] <= 0 or p[-1] > 1 or np.any(np.diff(p) <= 0):
        raise InputError("p_release must increase from above 0 to at most 1.")
    if np.any(n < 1) or np.any(k < 0) or np.any(k > n):
        raise InputError("found must lie between 0 and planted, and planted must be at least 1.")
    drawn = rng.beta(k + 0.5, n - k + 0.5, (n_draws, p.size))
    return DetectionCurve(
        p_release=p,
        share=_rising(k / n, n),
        draws=np.array([_rising(one, n) for one in drawn]).reshape(n_draws, p.size),
    )


def _rising(share: Floats, weight: Floats) -> Floats:
    """Pool adjacent violators: the non-decreasing values closest to `share`."""
    blocks: list[tuple[float, float, int]] = []
    for value, mass in zip(share, weight, strict=True):
        blocks.append((float(value), float(mass), 1))
        while len(blocks) > 1 and blocks[-2][0] > blocks[-1][0]:
            (a, m, i), (b, n, j) = blocks[-2:]
            blocks[-2:] = [((a * m + b * n) / (m + n), m + n, i + j)]
    return np.repeat([value for value, _, _ in blocks], [count for _, _, count in blocks])


def _between(p: Floats, shares: Floats, at: ArrayLike) -> Floats:
    """Join the points by straight lines over arcsin(sqrt(p_release)), from 0 at 0."""
    where = np.concatenate([[0.0], np.arcsin(np.sqrt(p))])
    wanted = np.arcsin(np.sqrt(np.asarray(at, dtype=np.float64)))
    return np.array([np.interp(wanted, where, np.concatenate([[0.0], one])) for one in shares])


def _first_reach(p: Floats, shares: Floats, share: float) -> float:
    where = np.concatenate([[0.0], np.arcsin(np.sqrt(p))])
    heights = np.concatenate([[0.0], shares])
    if heights[-1] < share:
        return float("nan")
    i = int(np.argmax(heights >= share))
    if i <= 1:
        return float(p[0])
    between = (share - heights[i - 1]) / (heights[i] - heights[i - 1])
    return float(np.sin(where[i - 1] + between * (where[i] - where[i - 1])) ** 2)
