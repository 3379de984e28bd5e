"""What a slow drift was, given noisy sights of it: a random walk with jumps, filtered forwards and backwards.

How fast it walks is learned from the measurements, so that a still sample is averaged over many frames and a fast one
is taken frame by frame. A step too large for the walk starts it afresh, so that jumps stay sharp.

Kalman 1960, J Basic Eng 82:35; Rauch, Tung & Striebel 1965, AIAA J 3:1445.
"""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    from numpy.typing import NDArray

    FloatArray = NDArray[np.float64]

__all__ = ["smooth_random_walk"]

_JUMP_SD = 5.0  # a step this unlikely is a jump
_JUMP_COST = 7.0  # nats: one frame in a thousand


def smooth_random_walk(measured: FloatArray, sd: FloatArray, *, known: NDArray[np.bool_]) -> FloatArray:
    """Estimate a random walk at every step from noisy measurements of it.

    Parameters
    ----------
    measured, sd : (n,) ndarray of float
        Measurement and its standard error at each step.
    known : (n,) ndarray of bool
        Steps that were measured; the others are bridged.

    Returns
    -------
    (n,) ndarray of float
        0 everywhere where nothing is known.
    """
    known = known & np.isfinite(measured) & np.isfinite(sd) & (sd > 0)
    if not known.any():
        return np.zeros(len(measured))
    noise = np.where(known, sd, 1.0) ** 2
    speeds = np.median(noise[known]) * np.logspace(-6, 2, 17)
    likelihood = _log_likelihood(measured, noise, known, speeds)
    speed = float(speeds[int(np.argmax(likelihood))])
    return _filter_both_ways(measured.tolist(), noise.tolist(), known.tolist(), speed)


def _log_likelihood(
    measured: FloatArray, noise: FloatArray, known: NDArray[np.bool_], speeds: FloatArray
) -> FloatArray:
    """Log likelihood of the measurements for each variance per step of the walk."""
    total = np.zeros(len(speeds))
    first = int(np.argmax(known))
    at, spread = np.full(len(speeds), measured[first]), np.full(len(speeds), noise[first])
    for value, variance, is_known in zip(
        measured[first + 1 :].tolist(), noise[first + 1 :].tolist(), known[first + 1 :].tolist(), strict=True
    ):
        spread = spread + speeds
        if not is_known:
            continue
        error = value - at
        expected = spread + variance
        jumped = error * error > _JUMP_SD**2 * expected
        if jumped.any():
            spread = np.where(jumped, spread + error * error, spread)
            expected = spread + variance
            total -= _JUMP_COST * jumped
        total -= 0.5 * (np.log(expected) + error * error / expected)
        gain = spread / expected
        at = at + gain * error
        spread = (1.0 - gain) * spread
    return total


def _filter_both_ways(measured: list[float], noise: list[float], known: list[bool], speed: float) -> FloatArray:
    """Forward filter, backward smoother for one variance per step."""
    n = len(measured)
    first = known.index(True)
    at, spread = measured[first], noise[first]
    filtered, spreads, foreseen = [at] * n, [spread] * n, [spread] * n
    for k in range(first + 1, n):
        spread += speed
        if known[k]:
            error = measured[k] - at
            if error * error > _JUMP_SD**2 * (spread + noise[k]):
                spread += error * error
            foreseen[k] = spread
            gain = spread / (spread + noise[k])
            at += gain * error
            spread *= 1.0 - gain
        else:
            foreseen[k] = spread
        filtered[k], spreads[k] = at, spread
    smooth = filtered.copy()
    for k in range(n - 2, first - 1, -1):
        smooth[k] += spreads[k] / foreseen[k + 1] * (smooth[k + 1] - filtered[k])
    smooth[:first] = [smooth[first]] * first
    return np.array(smooth)
