"""Poisson release fitted to a histogram, as the classical end-plate studies printed it."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from scipy.special import logsumexp, ndtr

from ...checks import check_array, check_positive
from ...errors import InputError
from .likelihoods import poisson_log_weights

if TYPE_CHECKING:
    from collections.abc import Callable

    from numpy.typing import ArrayLike, NDArray


@dataclass(frozen=True, slots=True, kw_only=True)
class PoissonHistogramFit:
    """Poisson release fitted to classes of amplitudes.

    Attributes
    ----------
    mean_vesicles, q, q_sd : float
        Mean number of vesicles a stimulus; mean response to one and its SD, in the unit of the classes.
    mean_vesicles_se, q_se, q_sd_se : float
        Standard errors from the curvature of the log likelihood.
    log_likelihood : float
        At the maximum, in nats, without the multinomial constant.
    n_trials : int
        Trials, failures included.
    converged : bool
        Whether the search ended within its tolerance.
    """

    mean_vesicles: float
    q: float
    q_sd: float
    mean_vesicles_se: float
    q_se: float
    q_sd_se: float
    log_likelihood: float
    n_trials: int
    converged: bool


def fit_poisson_histogram(
    class_centres: ArrayLike, class_counts: ArrayLike, *, n_failures: int, class_width: float, m_max: int
) -> PoissonHistogramFit:
    """Fit mean vesicles, q and its SD to a histogram of responses and the count of failures.

    A failure has probability exp(-m); class j has that of Poisson(k; m) times the mass of Normal(k q, k q_sd²)
    within half a class width of its centre, summed over k = 1..m_max (del Castillo & Katz 1954; Boyd & Martin 1956).

    Parameters
    ----------
    class_centres, class_counts : (J,) array_like of float
        Centre of each class and the responses in it.
    n_failures : int
        Stimuli without a response.
    class_width : float
        Width of the classes, in the unit of the centres.
    m_max : int
        Largest number of vesicles considered.

    Raises
    ------
    InputError
        If there is no response, or counts and centres do not match.

    Examples
    --------
    >>> fit = fit_poisson_histogram([1, 2, 3, 4], [37, 18, 6, 2], n_failures=37, class_width=1.0, m_max=20)
    >>> round(fit.mean_vesicles, 1), round(fit.q, 1)
    (1.0, 1.0)
    """
    from scipy.optimize import minimize

    centres = check_array("class_centres", class_centres, n_dims=1)
    counts = check_array("class_counts", class_counts, n_dims=1)
    check_positive("class_width", class_width)
    if centres.shape != counts.shape or counts.sum() <= 0:
        raise InputError(
            f"class_counts must give a count for each of {centres.size} classes and hold a response "
            f"(given {counts.size} counts with sum {counts.sum():g})."
        )
    n_trials = int(counts.sum() + n_failures)
    mean = float(counts @ centres) / n_trials
    start_m = -np.log(max(n_failures, 0.5) / n_trials)
    start = np.log([start_m, mean / start_m, 0.2 * mean / start_m])

    def cost(log_parameters: NDArray[np.float64]) -> float:
        m, q, q_sd = np.exp(log_parameters)
        classes = _class_log_probability(centres, m=m, q=q, q_sd=q_sd, class_width=class_width, m_max=m_max)
        return float(n_failures * m - counts @ classes)

    search = minimize(cost, start, method="Nelder-Mead", options={"xatol": 1e-9, "fatol": 1e-10, "maxiter": 4000})
    parameters = np.exp(search.x)
    se = parameters * np.sqrt(np.diag(np.linalg.pinv(_hessian(cost, search.x))).clip(min=0.0))
    return PoissonHistogramFit(
        mean_vesicles=float(parameters[0]),
        q=float(parameters[1]),
        q_sd=float(parameters[2]),
        mean_vesicles_se=float(se[0]),
        q_se=float(se[1]),
        q_sd_se=float(se[2]),
        log_likelihood=-float(search.fun),
        n_trials=n_trials,
        converged=bool(search.success),
    )


def _class_log_probability(
    centres: NDArray[np.float64], *, m: float, q: float, q_sd: float, class_width: float, m_max: int
) -> NDArray[np.float64]:
    k = np.arange(1, m_max + 1)[:, None]
    spread = np.sqrt(k) * q_sd
    upper, lower = (centres + 0.5 * class_width - k * q) / spread, (centres - 0.5 * class_width - k * q) / spread
    # mirrored to the lower tail, where differences of the normal distribution keep their digits
    mass = np.where(lower > 0, ndtr(-lower) - ndtr(-upper), ndtr(upper) - ndtr(lower))
    log_weights = poisson_log_weights(m, m_max=m_max)[1:, None]
    log_probability: NDArray[np.float64] = logsumexp(log_weights, axis=0, b=np.maximum(mass, 1e-300))
    return log_probability


def _hessian(function: Callable[[NDArray[np.float64]], float], at: NDArray[np.float64]) -> NDArray[np.float64]:
    """Second derivatives by central differences."""
    step = 1e-4
    unit = np.eye(at.size) * step
    return np.array(
        [
            [
                (function(at + a + b) - function(at + a - b) - function(at - a + b) + function(at - a - b))
                / (4 * step**2)
                for b in unit
            ]
            for a in unit
        ]
    )
