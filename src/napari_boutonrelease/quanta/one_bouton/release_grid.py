"""The likelihood of one bouton's amplitudes on a grid of noise, quantal size, its variation, sites and p_release.

Equal steps of arcsin(sqrt(p_release)) make sums over the grid integrals under the Jeffreys prior; equal steps of log q
make them integrals over log q.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from scipy.special import gammaln

from .vesicle_sizes import gamma_vesicles_logpdf

if TYPE_CHECKING:
    from collections.abc import Iterator

    from numpy.typing import NDArray

    Floats = NDArray[np.float64]

_Q_STEP = 0.07  # of log q
_Q_CVS = (0.1, 0.18, 0.26, 0.35, 0.45, 0.6)
_SMALLEST_Q_SD, _LARGEST_Q_SD = 0.7, 12.0
_NOISE_DOUBT = 0.02  # relative: nulls and evoked amplitudes are not measured at the same moments
_LEAST_MIXTURE = np.float32(1e-37)
N_SCALES = 3


@dataclass(frozen=True, slots=True, kw_only=True)
class ReleaseGrid:
    """The points of the grid.

    Attributes
    ----------
    q, q_cv : (n_q,), (n_cv,) ndarray
        Quantal sizes in equal steps of their logarithm, and their coefficients of variation.
    p_release : (n_p,) ndarray
        Probabilities of at least one vesicle.
    p_site : (n_max, n_p) ndarray
        What they mean for one of 1..n_max sites.
    weights : (n_max * n_p, n_max + 1) ndarray of float32
        Probability of 0, 1, ... vesicles.
    """

    q: Floats
    q_cv: Floats
    p_release: Floats
    p_site: Floats
    weights: NDArray[np.float32]

    @property
    def n_max(self) -> int:
        """Largest number of sites."""
        return len(self.p_site)


def make_grid(*, noise_sd: float, largest: float, n_trials: int, n_max: int) -> ReleaseGrid:
    """Lay out a grid for amplitudes up to `largest` with noise of about `noise_sd`."""
    top = max(_LARGEST_Q_SD * noise_sd, 1.1 * largest)
    q = np.exp(np.arange(np.log(_SMALLEST_Q_SD * noise_sd), np.log(top) + _Q_STEP, _Q_STEP))
    n_points = int(np.clip(5 * np.sqrt(n_trials), 48, 160))
    angle = (np.arange(n_points) + 0.5) * (np.pi / 2 / n_points)
    p_release = np.sin(angle) ** 2
    sites = np.arange(1, n_max + 1)
    log_failure = np.log1p(-p_release)[None, :] / sites[:, None]
    p_site = -np.expm1(log_failure)
    m = np.arange(n_max + 1)
    left = sites[:, None] - m
    with np.errstate(divide="ignore", invalid="ignore"):
        choose = gammaln(sites + 1.0)[:, None] - gammaln(m + 1.0) - gammaln(np.maximum(left, 0) + 1.0)
    log_choose = np.where(left >= 0, choose, -np.inf)[:, None, :]
    log_weight = log_choose + m * np.log(p_site)[..., None] + np.maximum(left, 0)[:, None, :] * log_failure[..., None]
    return ReleaseGrid(
        q=q,
        q_cv=np.array(_Q_CVS),
        p_release=p_release,
        p_site=p_site,
        weights=np.exp(log_weight).reshape(-1, n_max + 1).astype(np.float32),
    )


def noise_scales(n_null: float) -> tuple[Floats, Floats]:
    """Return three Gauss-Hermite nodes for the true noise over the given one, and their weights."""
    doubt = np.sqrt(1.0 / (2.0 * max(n_null, 2.0)) + _NOISE_DOUBT**2)
    return np.exp(np.array([-np.sqrt(3.0), 0.0, np.sqrt(3.0)]) * min(doubt, 0.3)), np.array([1.0, 4.0, 1.0]) / 6.0


def mixtures(
    a: Floats, sd: Floats, grid: ReleaseGrid, *, at: NDArray[np.intp]
) -> Iterator[tuple[int, NDArray[np.float32], NDArray[np.float32], Floats]]:
    """Go through pairs of q and q_cv: the density of every amplitude at every n_sites and p_release.

    Parameters
    ----------
    a, sd : (n_trials,) ndarray
        Amplitudes and their noise, all finite.
    grid : ReleaseGrid
        The points.
    at : (k,) ndarray of int
        Pairs to visit: index of q times the number of q_cv, plus index of q_cv.

    Yields
    ------
    pair : int
    mixture : (n_max * n_p, n_trials) ndarray of float32
        Density over `exp(log_unit)`.
    failure : (n_trials,) ndarray of float32
        Density of an amplitude without vesicle, in the same unit.
    log_unit : (n_trials,) ndarray
    """
    m = np.arange(grid.n_max + 1)[:, None]
    for pair in at:
        i, k = divmod(int(pair), len(grid.q_cv))
        log_density = gamma_vesicles_logpdf(a, vesicles=m, q=grid.q[i], q_cv=grid.q_cv[k], noise_sd=sd)
        log_unit = log_density.max(axis=0)
        density = np.exp(log_density - log_unit).astype(np.float32)
        mixture = grid.weights @ density
        yield int(pair), np.maximum(mixture, _LEAST_MIXTURE, out=mixture), density[0], log_unit


def integrated_likelihood(a: Floats, sd: Floats, scales: Floats, grid: ReleaseGrid) -> Floats:
    """Log-likelihood of one bouton's amplitudes at one pulse, over that of no release, integrated over p_release.

    Returns
    -------
    (n_scales, n_q, n_cv, n_max) ndarray
        0 everywhere without a finite amplitude.
    """
    used = np.isfinite(a)
    n_pairs = len(grid.q) * len(grid.q_cv)
    result = np.zeros((len(scales), n_pairs, grid.n_max))
    if used.any():
        amplitude, noise = a[used], sd[used]
        silent = gamma_vesicles_logpdf(amplitude, vesicles=0, q=1.0, q_cv=0.0, noise_sd=noise)
        for k, scale in enumerate(scales):
            for pair, mixture, _, log_unit in mixtures(amplitude, scale * noise, grid, at=np.arange(n_pairs)):
                at_each = np.log(mixture, out=mixture).sum(axis=1).reshape(grid.n_max, -1)
                total = log_sum(at_each, axis=1) - np.log(at_each.shape[1])
                result[k, pair] = total + float((log_unit - silent).sum())
    return result.reshape(len(scales), len(grid.q), len(grid.q_cv), grid.n_max)


def silent_likelihood(a: Floats, sd: Floats, scales: Floats) -> Floats:
    """Log-likelihood of a bouton that never releases, over that at the noise given, for each noise scale."""
    z = (a / sd)[np.isfinite(a)]
    return np.asarray(-0.5 * np.sum(z**2) * (1.0 / scales**2 - 1.0) - z.size * np.log(scales))


def log_sum(values: NDArray[np.floating], *, axis: int | tuple[int, ...], keepdims: bool = False) -> Floats:
    """Logarithm of the sum of exponentials; an axon without boutons is fine."""
    largest = np.max(values, axis=axis, keepdims=True, initial=-1e30)
    total = np.log(np.sum(np.exp(values - largest), axis=axis, keepdims=True)) + largest
    return np.asarray(total if keepdims else np.squeeze(total, axis=axis))
