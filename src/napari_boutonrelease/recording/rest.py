"""The noise of a sample that trembles: the photon-transfer line with the movement taken out."""

from __future__ import annotations

from dataclasses import replace
from typing import TYPE_CHECKING

import numpy as np

from .cubic_convolution import DisplacedPixels
from .photon_transfer import above_median, photon_transfer_line, telling_pixels

if TYPE_CHECKING:
    from .light import Light
    from .motion import Drift
    from .movie import Movie

__all__ = ["light_at_rest"]

_MOST_PAIRS = 200
"""Pairs of frames: they leave a pixel's variance 13 % in doubt, a bin of 200 pixels 1 %, and the whole line less."""


def light_at_rest(movie: Movie, *, light: Light, drift: Drift) -> Light:
    """Measure the noise again with the movement taken out: a sample that trembles looks noisier than its light is.

    The change that the movement between two successive frames makes in the reference is taken from their difference,
    as strongly as the difference shows it; what is left gives the photon-transfer line as in `measure_light`.

    Parameters
    ----------
    movie : Movie
        The recording.
    light : Light
        As measured without regard to movement.
    drift : Drift
        Its movement.

    Returns
    -------
    Light
        With gain, interval and read variance replaced; `light` itself where nothing moved or the line is not told.
    """
    firsts = np.flatnonzero(drift.used[:-1] & drift.used[1:])
    n_pairs = min(len(firsts), _MOST_PAIRS)
    inside = ~(light.saturated | light.dead)
    for axis, shift in enumerate((drift.dy_px, drift.dx_px)):
        margin = int(np.ceil(np.abs(shift[drift.used]).max())) + 2 if drift.used.any() else 0
        at = np.arange(inside.shape[axis])
        inside &= np.expand_dims((at >= margin) & (at < inside.shape[axis] - margin), 1 - axis)
    if not drift.corrected or not n_pairs or not inside.any():
        return light
    _, pixels = telling_pixels(drift.reference, inside)
    mean, falling = np.zeros(pixels.size), np.zeros(pixels.size)
    expected_at = DisplacedPixels(drift.reference, pixels)
    firsts = firsts[np.linspace(0, len(firsts) - 1, n_pairs).round().astype(int)]
    for k in firsts:
        frames = movie.read(k, k + 2).reshape(2, -1)[:, pixels].astype(np.float64)
        before, after = (expected_at.read(dy=-drift.dy_px[i], dx=-drift.dx_px[i]) for i in (k, k + 1))
        change, expected = frames[1] - frames[0], after - before
        power = float(expected @ expected)
        change -= expected * (float(change @ expected) / power if power > 0 else 0.0)
        mean += frames.mean(axis=0) / n_pairs
        falling += np.minimum(change, 0.0) ** 2 / n_pairs
    falling *= above_median(n_pairs, n_linked=int(np.sum(np.diff(firsts) == 1)))
    gain, gain_se, read_variance = photon_transfer_line(mean, falling, n_frames=2 * n_pairs)
    if not np.isfinite(gain):
        return light
    half_width = 1.96 * gain_se
    return replace(light, gain=gain, gain_lo=gain - half_width, gain_hi=gain + half_width, read_variance=read_variance)
