"""What a perfect observer could know: expected images, their noise, and the Cramér-Rao limit of an amplitude."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from .kinetics import Reporter
from .plan import spot_of

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from .truth import Truth

_BRIM_PX = 3  # image around a spot that helps to tell it from its background


def expected_profile(truth: Truth, spot: int, *, brim_px: int = 0) -> tuple[int, int, NDArray[np.float64]]:
    """Shape of a spot at mean drift, integrated over pixels and cut to the image.

    Parameters
    ----------
    truth : Truth
        A simulated recording.
    spot : int
        Index of the spot.
    brim_px : int
        Pixels added around it.

    Returns
    -------
    y0, x0 : int
        Corner of the patch.
    patch : (h, w) ndarray
        1 in the peak pixel if the spot were centred on a pixel: the spot's photons are `f0_photons[spot] * patch`.
    """
    corner_y, corner_x, patches = spot_of(truth.recipe).patches(truth.y_px[[spot]], truth.x_px[[spot]])
    padded = np.pad(patches[0], brim_px)
    y0, x0 = int(corner_y[0]) - brim_px, int(corner_x[0]) - brim_px
    height, width = truth.shaft_photons.shape
    rows = slice(max(-y0, 0), min(padded.shape[0], height - y0))
    columns = slice(max(-x0, 0), min(padded.shape[1], width - x0))
    return y0 + rows.start, x0 + columns.start, padded[rows, columns]


def rest_image(truth: Truth) -> NDArray[np.float64]:
    """Photons a frame at rest, at mean drift, before bleaching: shaft, diffuse light and all spots, (height, width)."""
    image = truth.shaft_photons + truth.recipe.background_photons
    for spot in range(len(truth.kind)):
        y0, x0, patch = expected_profile(truth, spot)
        image[y0 : y0 + patch.shape[0], x0 : x0 + patch.shape[1]] += truth.f0_photons[spot] * patch
    return image


def noise_variance(truth: Truth) -> NDArray[np.float64]:
    """Variance of a pixel from frame to frame at rest, in counts squared, before bleaching, (height, width)."""
    rounding = 0.0 if truth.recipe.dtype == "float32" else 1.0 / 12.0
    return truth.recipe.gain**2 * _variance_e(truth, light=1.0) + rounding


def amplitude_limit(
    truth: Truth,
    spot: int,
    *,
    pulse: int,
    before_s: float,
    after_s: float,
    offset: bool,
    background: bool,
    neighbours: bool,
) -> float:
    """Smallest SD that an unbiased estimate of one response can have where nothing was released (Cramér-Rao).

    Profile, response shape, drift and noise are taken as known. The amplitudes of all pulses within the window are
    estimated together; photon and read-out noise count, the fluctuation of diffuse light does not.

    Parameters
    ----------
    truth : Truth
        A simulated recording.
    spot : int
        Index of the bouton.
    pulse : int
        Index of the pulse within its trial.
    before_s, after_s : float
        Window around the first pulse of the trial, in s.
    offset : bool
        Whether the brightness at rest is unknown in each trial.
    background : bool
        Whether the light around the bouton is unknown in each frame.
    neighbours : bool
        Whether the brightness of every other spot nearby is unknown in each frame.

    Returns
    -------
    float
        SD in dF/F, root mean square over the trials that have the pulse; NaN if none has.

    References
    ----------
    Kay, S. M. (1993). Fundamentals of Statistical Signal Processing: Estimation Theory, chapter 3.
    """
    recipe = truth.recipe
    reporter = Reporter(recipe)
    variances = []
    for times in truth.stimulus_s:
        if pulse >= times.size or not np.isfinite(times[pulse]):
            continue
        frames = _window(truth, times[0] - before_s, times[0] + after_s)
        since_s = (
            truth.frame_start_s[frames] + recipe.row_time_s * truth.y_px[spot] - recipe.latency_s - recipe.jitter_s
        )
        columns = [reporter.gathered(since_s - time, exposure_s=recipe.exposure) for time in times if np.isfinite(time)]
        if offset:
            columns.append(np.ones(frames.size))
        design = np.column_stack(columns)
        if not frames.size or np.linalg.matrix_rank(design) < design.shape[1]:
            continue
        light = float(truth.light[frames].mean())
        of_frame = _frame_variance(truth, spot, light=light, background=background, neighbours=neighbours)
        variances.append(of_frame * np.linalg.inv(design.T @ design)[pulse, pulse])
    return float(np.sqrt(np.mean(variances))) if variances else float("nan")


def _window(truth: Truth, start_s: float, stop_s: float) -> NDArray[np.int64]:
    """Lit frames of one file that lie within a window."""
    inside = (truth.frame_start_s >= start_s) & (truth.frame_start_s < stop_s) & (truth.light > 0)
    middle = np.searchsorted(truth.frame_start_s, 0.5 * (start_s + stop_s))
    segment = truth.segment[min(int(middle), truth.segment.size - 1)]
    return np.flatnonzero(inside & (truth.segment == segment))


def _variance_e(truth: Truth, *, light: float) -> NDArray[np.float64]:
    excess = 2.0 if truth.recipe.electron_multiplying else 1.0
    return excess * light * rest_image(truth) + truth.recipe.read_noise_e**2


def _frame_variance(truth: Truth, spot: int, *, light: float, background: bool, neighbours: bool) -> float:
    """Variance of the brightness of a spot estimated from one frame, in units of its F0 squared."""
    y0, x0, own = expected_profile(truth, spot, brim_px=_BRIM_PX)
    height, width = own.shape
    columns = [own.ravel()]
    if background:
        columns.append(np.ones(own.size))
    if neighbours:
        for other in range(len(truth.kind)):
            whole = np.zeros(truth.shaft_photons.shape)
            oy, ox, patch = expected_profile(truth, other)
            whole[oy : oy + patch.shape[0], ox : ox + patch.shape[1]] = patch
            seen = whole[y0 : y0 + height, x0 : x0 + width]
            if other != spot and seen.max() > 0.05:
                columns.append(seen.ravel())
    design = np.column_stack(columns)
    variance = _variance_e(truth, light=light)[y0 : y0 + height, x0 : x0 + width].ravel()
    information = design.T @ (design / variance[:, None])
    return float(np.linalg.inv(information)[0, 0] / (truth.f0_photons[spot] * light) ** 2)
