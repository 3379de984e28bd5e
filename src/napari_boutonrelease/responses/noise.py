"""Noise of traces: its size, how it follows the brightness, and its correlation in time."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    from numpy.typing import NDArray
    from scipy.sparse import csr_array

__all__ = ["TimeCorrelation", "estimate_time_correlation", "robust_sd", "variance_by_brightness", "white"]

_CLIP_SD = 2.5
_CLIPPED_SD = 0.954597
"""SD of a standard normal that is cut at ±2.5: sqrt(1 - 2·2.5·φ(2.5) / (2Φ(2.5) - 1))."""


def robust_sd(values: NDArray[np.float64], *, centre: float | None = None) -> NDArray[np.float64]:
    """SD of normal values among which some are outliers, along the last axis.

    Starts from the median absolute deviation and then drops what lies beyond 2.5 SD until that settles, allowing for
    the tails that every normal sample loses so. Nearly as precise as the plain SD, and unmoved by a few releases.

    Parameters
    ----------
    values : (..., n) ndarray
        NaN are skipped.
    centre : float, optional
        Mean of the values where it is known; their own where absent.

    Returns
    -------
    (...) ndarray
        NaN where fewer than 3 values are left.

    Examples
    --------
    >>> rng = np.random.default_rng(1)
    >>> values = np.concatenate([rng.normal(0.0, 2.0, 5000), np.full(200, 9.0)])
    >>> bool(abs(robust_sd(values) - 2.0) < 0.1)
    True
    """
    values = np.asarray(values, dtype=np.float64)
    flat = values.reshape(int(np.prod(values.shape[:-1])), values.shape[-1])
    result = np.full(flat.shape[0], np.nan)
    for row, series in enumerate(flat):
        finite = series[np.isfinite(series)]
        if finite.size < 3:
            continue
        middle = np.median(finite) if centre is None else centre
        sd = 1.482602 * np.median(np.abs(finite - middle)) or np.sqrt(np.mean((finite - middle) ** 2))
        # Beyond the mean's degree of freedom: what makes the SD of a small sample, its tails cut, come out right.
        spent = 2.6 if centre is None else 0.9
        for _ in range(20):
            kept = finite[np.abs(finite - middle) <= _CLIP_SD * sd]
            if kept.size < 3:
                break
            middle, before = np.mean(kept) if centre is None else centre, sd
            sd = np.sqrt(np.sum((kept - middle) ** 2) / (kept.size - spent)) / _CLIPPED_SD
            if abs(sd - before) <= 1e-6 * sd:
                break
        result[row] = sd
    return result.reshape(values.shape[:-1])


def variance_by_brightness(
    variance: NDArray[np.float64], *, brightness: NDArray[np.float64], n_values: NDArray[np.float64]
) -> NDArray[np.float64]:
    """Smooth the variance of a bouton's trials by a line in its brightness, as photon noise demands.

    Parameters
    ----------
    variance : (n_boutons, n_trials) ndarray
        Variance measured in each trial, counts²; NaN where there is none.
    brightness : (n_boutons, n_trials) ndarray
        F0 of each trial, counts.
    n_values : (n_boutons, n_trials) ndarray
        Number of values behind each variance.

    Returns
    -------
    (n_boutons, n_trials) ndarray
        v0 + v1·brightness, both at least 0. Where F0 changes by less than a tenth there is nothing to learn a slope
        from and all trials get the mean.
    """
    weight = np.where(np.isfinite(variance), n_values, 0.0)
    filled = np.where(np.isfinite(variance), variance, 0.0)
    total = np.sum(weight, axis=1, keepdims=True)
    share = weight / np.where(total > 0, total, np.nan)
    mean_v = np.sum(share * filled, axis=1, keepdims=True)
    mean_b = np.sum(share * brightness, axis=1, keepdims=True)
    spread = np.sum(share * (brightness - mean_b) ** 2, axis=1, keepdims=True)
    steep = np.sum(share * (brightness - mean_b) * filled, axis=1, keepdims=True) / np.where(spread > 0, spread, np.inf)
    largest = np.where(mean_b > 0, mean_v / np.where(mean_b > 0, mean_b, 1.0), 0.0)
    steep = np.clip(steep, 0.0, largest)
    changes = np.ptp(brightness, axis=1, keepdims=True) > 0.1 * np.abs(mean_b)
    return np.asarray(np.where(changes, mean_v + steep * (brightness - mean_b), mean_v + 0.0 * brightness))


@dataclass(frozen=True, slots=True, kw_only=True)
class TimeCorrelation:
    """Autoregressive noise: the best prediction of a frame from 0, 1, ... frames before it.

    Attributes
    ----------
    prediction : tuple of (k,) ndarray
        Entry k holds the weights of the k frames before, nearest first; the last entry serves all later frames.
    innovation : (n_orders,) ndarray
        Share of the variance that each prediction leaves; 1 for no prediction.
    """

    prediction: tuple[NDArray[np.float64], ...]
    innovation: NDArray[np.float64]

    @property
    def order(self) -> int:
        """How many frames back the prediction looks; 0 for white noise."""
        return len(self.prediction) - 1

    def whitening(self, frame_in_run: NDArray[np.intp]) -> csr_array:
        """Matrix that turns correlated noise of unit variance into white noise of unit variance.

        Parameters
        ----------
        frame_in_run : (n_rows,) ndarray of int
            How many frames without a break lie before each row; rows of a run follow each other.

        Returns
        -------
        (n_rows, n_rows) sparse array
            Lower triangular with `order` bands.
        """
        from scipy.sparse import coo_array

        n = frame_in_run.size
        depth = np.minimum(frame_in_run, self.order)
        rows, columns, values = [np.arange(n)], [np.arange(n)], [1.0 / np.sqrt(self.innovation[depth])]
        for k in range(1, self.order + 1):
            at = np.flatnonzero(depth == k)
            for lag, weight in enumerate(self.prediction[k], start=1):
                rows.append(at)
                columns.append(at - lag)
                values.append(np.full(at.size, -weight / np.sqrt(self.innovation[k])))
        return coo_array(
            (np.concatenate(values), (np.concatenate(rows), np.concatenate(columns))), shape=(n, n)
        ).tocsr()


def white() -> TimeCorrelation:
    """Noise without correlation in time."""
    return TimeCorrelation(prediction=(np.zeros(0),), innovation=np.ones(1))


def estimate_time_correlation(
    residual: NDArray[np.float64], *, frame_in_run: NDArray[np.intp], fitted: NDArray[np.float64], max_order: int
) -> TimeCorrelation:
    """Estimate an autoregressive model of the noise from residuals of fits, pooled over boutons.

    A fit takes part of the noise away and makes its residuals seem negatively correlated. The sums of products of
    residuals are therefore matched to what a fit with design `fitted` leaves of noise with given correlations.

    Parameters
    ----------
    residual : (n_rows, n_boutons) ndarray
        Residuals of ordinary least squares, frames of a window after each other.
    frame_in_run : (n_rows,) ndarray of int
        How many frames without a break lie before each row.
    fitted : (n_frames, n_columns) ndarray
        Design of one typical window.
    max_order : int
        Largest number of frames that the prediction looks back.

    Returns
    -------
    TimeCorrelation
        Of the order with the smallest BIC; white where no correlation exceeds 0.03 or chance.
    """
    from scipy.linalg import solve_toeplitz

    sd = robust_sd(residual.T)
    good = np.isfinite(sd) & (sd > 0)
    n = fitted.shape[0]
    max_order = min(max_order, n // 4)
    if not good.any() or max_order < 1:
        return white()
    # Clipped, lest a single spontaneous release passes for correlated noise.
    scaled = np.clip(residual[:, good] / sd[good], -3.0, 3.0)
    products = np.empty(max_order + 1)
    n_pairs = np.empty(max_order + 1)
    for lag in range(max_order + 1):
        at = np.flatnonzero(frame_in_run >= lag)
        products[lag] = np.sum(scaled[at] * scaled[at - lag]) / scaled.shape[1]
        n_pairs[lag] = at.size
    basis = np.linalg.qr(fitted)[0]
    left = np.eye(n) - basis @ basis.T
    expected = np.empty((max_order + 1, max_order + 1))
    for k in range(max_order + 1):
        shifted = np.eye(n, k=k) + (np.eye(n, k=-k) if k else 0.0)
        remains = left @ shifted @ left
        expected[:, k] = [np.trace(remains, offset=lag) / (n - lag) for lag in range(max_order + 1)]
    covariance = np.linalg.solve(expected, products / np.maximum(n_pairs, 1))
    if covariance[0] <= 0:
        return white()
    rho = covariance / covariance[0]
    n_values = n_pairs[0] * scaled.shape[1]
    if np.max(np.abs(rho[1:])) < max(0.03, 4.0 / np.sqrt(n_values)):
        return white()
    prediction, innovation = [np.zeros(0)], [1.0]
    for order in range(1, max_order + 1):
        weights = solve_toeplitz(rho[:order], rho[1 : order + 1])
        left_over = 1.0 - weights @ rho[1 : order + 1]
        if not 0.0 < left_over <= innovation[-1]:
            break
        prediction.append(weights)
        innovation.append(float(left_over))
    # BIC with the values counted as one bouton's, since neighbours may share their noise.
    criterion = n_pairs[0] * np.log(innovation) + np.arange(len(innovation)) * np.log(n_pairs[0])
    order = int(np.argmin(criterion))
    return TimeCorrelation(prediction=tuple(prediction[: order + 1]), innovation=np.array(innovation[: order + 1]))
