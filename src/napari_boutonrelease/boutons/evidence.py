"""Evidence of stimulus-locked release at each pixel: a mixture of silent trials and releases against silence.

A bouton that releases in 5 % of the trials hardly moves the mean response, but a few of its trials stand out. The
likelihood ratio of "releases q with probability p" against "never" finds both kinds of boutons.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from ..recording.separable import box_sum, convolve, gaussian_kernel

if TYPE_CHECKING:
    from numpy.typing import NDArray

RELEASE_PROBABILITIES = (0.02, 0.05, 0.1, 0.2, 0.4, 0.7)
RELEASE_SIZES_SD = (2.5, 3.5, 5.0, 7.0, 10.0)
# No single trial may argue for more than this: one spark, cosmic ray or passing vesicle does not make a bouton.
MAX_NATS_PER_TRIAL = 10.0
_POOL_SIGMAS = 8.0  # reach, in spot sigmas, over which noise is pooled
_GROUP = 8  # terms multiplied before one logarithm; (49 + e**10)**8, the largest product, still fits float32
_BLOCK_NUMBERS = 160_000  # worked on at a time, so that they stay in the processor's cache


@dataclass(frozen=True, slots=True, kw_only=True)
class MatchedMaps:
    """Responses read with a bouton-sized matched filter, in units of their noise.

    Attributes
    ----------
    evoked, null : (n, y, x) ndarray of float32
        Standardised response of each map; the null has SD 1 at every pixel.
    scale : (y, x) ndarray
        Standardised response per count of a spot's peak: what the filter gives for a spot of height 1, divided by
        its noise.
    pixel_variance : (y, x) ndarray
        Noise variance of one pixel of a map with noise factor 1 (counts²); infinite where excluded.
    """

    evoked: NDArray[np.float32]
    null: NDArray[np.float32]
    scale: NDArray[np.float64]
    pixel_variance: NDArray[np.float64]


def robust_variance(maps: NDArray[np.floating], *, noise_factor: NDArray[np.float64]) -> NDArray[np.float64]:
    """Return the squared MAD-based SD of maps divided by their noise factor, about zero. (n, y, x) -> (y, x)."""
    n_maps = len(maps)
    columns = maps.reshape(n_maps, -1)
    scale = (1.0 / noise_factor)[:, None].astype(maps.dtype)
    median = np.empty(columns.shape[1])
    size = max(64, _BLOCK_NUMBERS // max(n_maps, 1))
    middle = n_maps // 2
    for start in range(0, columns.shape[1], size):
        block = np.abs(columns[:, start : start + size] * scale)
        block.partition(middle, axis=0)
        upper = block[middle]
        lower = upper if n_maps % 2 else block[:middle].max(axis=0)
        median[start : start + size] = 0.5 * (lower + upper)
    return (median * 1.482602).reshape(maps.shape[1:]) ** 2


def pixel_variance(
    null: NDArray[np.float32],
    *,
    noise_factor: NDArray[np.float64],
    mean_image: NDArray[np.floating],
    smooth_px: float,
    exclude: NDArray[np.bool_],
) -> NDArray[np.float64]:
    """Noise variance of each pixel of a map with noise factor 1, measured on the null maps.

    Photon noise follows the mean image along a straight line, which is fitted over all pixels. The ratio of what is
    measured to that line varies slowly (resampling, uneven light) and is pooled widely: noise in a divisor would pass
    for evidence.

    Parameters
    ----------
    null : (n_null, y, x) ndarray
        Responses where nothing was stimulated (counts).
    noise_factor : (n_null,) ndarray
        SD of a map in units of the SD of one frame's pixel.
    mean_image : (y, x) ndarray
        Mean of the frames (counts).
    smooth_px : float
        Gaussian sigma of the pooling (px).
    exclude : (y, x) ndarray of bool
        Pixels without information.

    Returns
    -------
    (y, x) ndarray
        Variance (counts²); infinite where excluded.
    """
    from scipy.ndimage import gaussian_filter

    variance = robust_variance(null, noise_factor=noise_factor)
    usable = ~exclude & (variance > 0)
    if not np.any(usable):
        return np.full(variance.shape, np.inf)
    line = _photon_line(np.asarray(mean_image, dtype=np.float64), variance, usable)
    weight = gaussian_filter(usable.astype(np.float64), smooth_px)
    ratio = gaussian_filter(np.where(usable, variance / line, 0.0), smooth_px) / np.maximum(weight, 1e-9)
    return np.where(usable, line * ratio, np.inf)


def _photon_line(
    mean_image: NDArray[np.float64], variance: NDArray[np.float64], usable: NDArray[np.bool_]
) -> NDArray[np.float64]:
    """Variance of each pixel as a straight line of its mean, from medians over pixels of like brightness."""
    mean, seen = mean_image[usable], variance[usable]
    order = np.argsort(mean, kind="stable")
    # Equal steps of brightness, not of rank: the few bright pixels decide the slope.
    edges = np.linspace(mean[order[0]], mean[order[-1]], 41)
    parts = np.split(order, np.searchsorted(mean[order], edges[1:-1]))
    parts = [part for part in parts if len(part) >= 5]
    level = float(np.median(seen))
    if len(parts) < 3:
        return np.full(mean_image.shape, level)
    x = np.array([np.median(mean[part]) for part in parts])
    y = np.array([np.median(seen[part]) for part in parts])
    # The relative error of a median of variances falls with the root of their number.
    slope, intercept = np.polyfit(x, y, 1, w=np.sqrt([len(part) for part in parts]) / np.maximum(y, 1e-6 * level))
    return np.asarray(np.maximum(intercept + max(float(slope), 0.0) * mean_image, 0.2 * level))


def box_half_px(spot_sigma_px: float) -> int:
    """Return half the side of the box whose mean the matched filter subtracts (px)."""
    return round(6 * spot_sigma_px)


def matched_filter(
    maps: NDArray[np.float32], *, inverse_variance: NDArray[np.float64], spot_sigma_px: float
) -> NDArray[np.float32]:
    """Weighted least-squares height of a Gaussian spot centred on each pixel, above the local mean.

    The sum of the spot times the map, each pixel weighted by its inverse noise variance, divided by the SD that it has
    for independent pixels (Turin 1960). The weighted mean over a box of 12 spot sigmas is subtracted first, so that a
    flash or a diffuse change of the background is not taken for a bouton.

    Parameters
    ----------
    maps : (n, y, x) ndarray
        Responses (counts).
    inverse_variance : (y, x) ndarray
        1 / counts²; 0 where a pixel is excluded.
    spot_sigma_px : float
        Gaussian sigma of a bouton's image (px).

    Returns
    -------
    (n, y, x) ndarray of float32
        Response in units of its approximate noise SD, for a noise factor of 1.
    """
    weight = inverse_variance.astype(np.float32)
    half = box_half_px(spot_sigma_px)
    spot, square = (gaussian_kernel(sigma, truncate=3.5) for sigma in (spot_sigma_px, spot_sigma_px / np.sqrt(2)))
    box_weight = box_sum(box_sum(weight, half, axis=0), half, axis=1)
    per_box_weight = 1.0 / np.maximum(box_weight, 1e-12 * (2 * half + 1) ** 2 * max(float(weight.max()), 1e-30))
    # The spot's square is a Gaussian of sigma / sqrt(2); the kernels have sum 1, hence the areas.
    spot_area = 2 * np.pi * spot_sigma_px**2
    energy = convolve(convolve(weight, square, axis=0), square, axis=1) * (spot_area / 2)
    scale = np.where(energy > 0, spot_area / np.sqrt(np.maximum(energy, 1e-30)), 0.0).astype(np.float32)
    scale[weight == 0] = 0.0
    filtered = np.empty(maps.shape, dtype=np.float32)
    for index, image in enumerate(maps):
        weighted = image * weight
        background = box_sum(box_sum(weighted, half, axis=0), half, axis=1)
        background *= per_box_weight
        background *= weight
        weighted -= background
        np.multiply(convolve(convolve(weighted, spot, axis=0), spot, axis=1), scale, out=filtered[index])
    return filtered


def standardise(
    *,
    evoked: NDArray[np.float32],
    null: NDArray[np.float32],
    evoked_factor: NDArray[np.float64],
    null_factor: NDArray[np.float64],
    mean_image: NDArray[np.floating],
    null_is_silent: bool,
    spot_sigma_px: float,
    exclude: NDArray[np.bool_],
) -> MatchedMaps:
    """Read evoked and null maps with the matched filter and divide both by the SD of the null.

    Parameters
    ----------
    evoked, null : (n, y, x) ndarray
        Responses (counts).
    evoked_factor, null_factor : (n,) ndarray
        SD of each map in units of the SD of one frame's pixel.
    mean_image : (y, x) ndarray
        Mean of the frames (counts).
    null_is_silent : bool
        False where the null maps are differences of trials: they hold releases, and the noise of one place is then
        taken from its negative evoked responses.
    spot_sigma_px : float
        Gaussian sigma of a bouton's image (px).
    exclude : (y, x) ndarray of bool
        Pixels without information.

    Returns
    -------
    MatchedMaps
    """
    variance = pixel_variance(
        null, noise_factor=null_factor, mean_image=mean_image, smooth_px=_POOL_SIGMAS * spot_sigma_px, exclude=exclude
    )
    inverse = np.where(np.isfinite(variance), 1.0 / variance, 0.0)

    def read(maps: NDArray[np.float32], factor: NDArray[np.float64]) -> NDArray[np.float32]:
        filtered = matched_filter(maps, inverse_variance=inverse, spot_sigma_px=spot_sigma_px)
        filtered /= factor[:, None, None].astype(np.float32)
        return filtered

    z_null, z_evoked = read(null, null_factor), read(evoked, evoked_factor)
    usable = inverse > 0
    measured = local_variance(z_null, z_evoked, null_is_silent=null_is_silent)
    sd = np.sqrt(_steady_variance(measured, n_null=len(z_null), usable=usable, spot_sigma_px=spot_sigma_px))
    inverse_sd = np.where(usable & (sd > 0), 1.0 / np.maximum(sd, 1e-9), 0.0).astype(np.float32)
    z_null *= inverse_sd
    z_evoked *= inverse_sd
    return MatchedMaps(evoked=z_evoked, null=z_null, scale=inverse_sd.astype(np.float64), pixel_variance=variance)


def local_variance(
    null: NDArray[np.floating], evoked: NDArray[np.floating], *, null_is_silent: bool
) -> NDArray[np.float64]:
    """Measure the noise variance of each place over its maps (first axis).

    From the null responses; where these hold releases, from the evoked responses below zero, which noise alone makes.
    Places with fewer than eight of those say nothing: 0.
    """
    if null_is_silent:
        return robust_variance(null, noise_factor=np.ones(len(null)))
    n_below = np.zeros(evoked.shape[1:])
    power = np.zeros(evoked.shape[1:])
    for one in evoked:
        below = np.minimum(one, 0)
        n_below += below < 0
        power += below * below
    return np.where(n_below >= 8, power / np.maximum(n_below, 1), 0.0)


def _steady_variance(
    measured: NDArray[np.float64], *, n_null: int, usable: NDArray[np.bool_], spot_sigma_px: float
) -> NDArray[np.float64]:
    """Replace the measured variance of filtered maps by that of the surroundings unless it is clearly larger.

    Photon noise is in the filter's weights already, so that the variance is the same everywhere but where something
    moves or flickers by itself. One place alone has few independent null responses, and noise in the divisor would pass
    for evidence.
    """
    from scipy.ndimage import gaussian_filter

    said = usable & (measured > 0)

    def pooled(sigma_px: float) -> NDArray[np.float64]:
        weight = gaussian_filter(said.astype(np.float64), sigma_px)
        return np.asarray(gaussian_filter(np.where(said, measured, 0.0), sigma_px) / np.maximum(weight, 1e-9))

    wide, local = pooled(_POOL_SIGMAS * spot_sigma_px), pooled(0.5 * spot_sigma_px)
    return np.where(local > clearly_more(n_null) * wide, local, wide)


def clearly_more(n_null: int) -> float:
    """Return the ratio above which a MAD-based variance from `n_null` values is larger than expected by 2.5 SD.

    The relative SD of such a variance is 2.33 / sqrt(n).
    """
    return 1.0 + 2.5 * 2.33 / float(np.sqrt(n_null))


def mixture_evidence(z: NDArray[np.float32]) -> NDArray[np.float32]:
    """Largest log-likelihood ratio of a mixture with releases against silence, over a grid of p and q.

    For standardised responses z_t with unit noise: max over (p, q) of sum_t log(1 - p + p exp(q z_t - q²/2)), the
    likelihood ratio of a two-part normal mixture with known parts; p = 1 with a free q > 0 is the mean response,
    n mean(z)² / 2. A single trial counts at most `MAX_NATS_PER_TRIAL`.

    Parameters
    ----------
    z : (n, ...) ndarray of float32
        Standardised responses, maps first.

    Returns
    -------
    (...) ndarray of float32
        Evidence in nats, at least 0.

    Examples
    --------
    >>> silent = np.zeros((40, 1), dtype=np.float32)
    >>> rare = silent.copy()
    >>> rare[:4] = 5.0
    >>> mixture_evidence(silent).item(), round(mixture_evidence(rare).item(), 1)
    (0.0, 27.0)
    """
    n_maps = z.shape[0]
    columns = z.reshape(n_maps, -1)
    evidence = np.zeros(columns.shape[1], dtype=np.float32)
    size = max(64, _BLOCK_NUMBERS // max(n_maps, 1))
    for start in range(0, columns.shape[1], size):
        evidence[start : start + size] = _block_evidence(columns[:, start : start + size])
    return np.asarray(evidence.reshape(z.shape[1:]))


def _block_evidence(z: NDArray[np.float32]) -> NDArray[np.float32]:
    """Evidence of (n_maps, n_pixels) -> (n_pixels,).

    1 - p + p r = p (r + (1 - p) / p): the sum over maps of its logarithm is n log(p) plus the logarithms of products of
    r + (1 - p) / p, a group of maps at a time.
    """
    n_maps, n_pixels = z.shape
    ceiling = np.float32(np.sqrt(2 * MAX_NATS_PER_TRIAL))
    mean = np.maximum(np.minimum(z, ceiling).sum(axis=0) / n_maps, 0)
    best: NDArray[np.float32] = (0.5 * n_maps * mean**2).astype(np.float32)
    n_groups = -(-n_maps // _GROUP)
    filled_up = np.ones((_GROUP * n_groups, n_pixels), dtype=np.float32)  # the filling rows have a ratio of 1
    ratio = filled_up[:n_maps]
    groups = filled_up.reshape(_GROUP, n_groups, n_pixels)
    product, term = np.empty((2, n_groups, n_pixels), dtype=np.float32)
    for q in RELEASE_SIZES_SD:
        np.multiply(z, np.float32(q), out=ratio)
        ratio -= np.float32(q * q / 2)
        np.minimum(ratio, np.float32(MAX_NATS_PER_TRIAL), out=ratio)
        np.exp(ratio, out=ratio)
        for p in RELEASE_PROBABILITIES:
            odds_against = np.float32((1 - p) / p)
            np.add(groups[0], odds_against, out=product)
            for group in groups[1:]:
                product *= np.add(group, odds_against, out=term)
            sums = np.log(product, out=product).sum(axis=0)
            sums += np.float32(_GROUP * n_groups * np.log(p))
            np.maximum(best, sums, out=best)
    return best


def release_posterior(z: NDArray[np.floating]) -> tuple[NDArray[np.float64], float, float]:
    """Probability that each trial of one place holds a release, with the p and q that fit best.

    Expectation-maximisation of the two-part mixture with unit noise (Dempster, Laird & Rubin 1977), started from the
    best point of the evidence grid.

    Parameters
    ----------
    z : (n,) ndarray
        Standardised responses of one place.

    Returns
    -------
    posterior : (n,) ndarray
        Probability of release in each trial.
    p : float
        Share of trials with release.
    q : float
        Size of a release in noise SD.
    """
    z = np.asarray(z, dtype=np.float64)
    p_grid = np.asarray([*RELEASE_PROBABILITIES, 0.999])[:, None, None]
    q_grid = np.asarray(RELEASE_SIZES_SD)[None, :, None]
    gain = np.log1p(p_grid * np.expm1(np.minimum(q_grid * z - q_grid**2 / 2, MAX_NATS_PER_TRIAL))).sum(axis=-1)
    i_p, i_q = np.unravel_index(int(np.argmax(gain)), gain.shape)
    p, q = float(p_grid[i_p, 0, 0]), float(q_grid[0, i_q, 0])
    posterior = np.zeros_like(z)
    for _ in range(20):
        odds = p / (1 - p) * np.exp(np.clip(q * z - q * q / 2, -50, 50))
        posterior = odds / (1 + odds)
        p = float(np.clip(posterior.mean(), 1e-3, 0.999))
        q = max(float(np.sum(posterior * z) / max(float(posterior.sum()), 1e-9)), 1.0)
    return posterior, p, q
