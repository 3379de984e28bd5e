"""Sums of exponentials fitted by least squares, with the linear parameters solved for at every step.

Golub GH, Pereyra V, 1973, SIAM J Numer Anal 10:413 (variable projection); the derivative is that of Kaufman L, 1975,
BIT 15:49, which leaves the gradient exact.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Literal

import numpy as np

from ..checks import check_array
from ..errors import InputError

if TYPE_CHECKING:
    from numpy.typing import ArrayLike, NDArray

__all__ = ["ExponentialFit", "fit_exponential"]

Form = Literal["decay", "saturation"]


@dataclass(frozen=True, slots=True, kw_only=True)
class ExponentialFit:
    """A fitted sum of exponentials.

    Attributes
    ----------
    form : {"decay", "saturation"}
        Terms c·exp(-r·x), or c·(1 - exp(-r·x)).
    rates, rates_se : (n_terms,) ndarray
        r of each term and its standard error, in 1/x, in the order of the starting rates.
    amplitudes, amplitudes_se : (n_terms,) ndarray
        c of each term, in the units of y.
    offset, offset_se : float
        Constant term; 0 and NaN where none was fitted.
    residual_sum : float
        Weighted sum of squared residuals.
    """

    form: Form
    rates: NDArray[np.float64]
    rates_se: NDArray[np.float64]
    amplitudes: NDArray[np.float64]
    amplitudes_se: NDArray[np.float64]
    offset: float
    offset_se: float
    residual_sum: float

    def value(self, x: ArrayLike) -> NDArray[np.float64]:
        """Height of the fitted curve at `x` (any shape)."""
        return _terms(np.asarray(x, dtype=np.float64), self.rates, self.form) @ self.amplitudes + self.offset


def fit_exponential(
    x: ArrayLike,
    y: ArrayLike,
    *,
    start_rates: ArrayLike,
    form: Form,
    offset: bool,
    weights: ArrayLike | None = None,
) -> ExponentialFit:
    """Fit a sum of exponentials, with as many terms as there are starting rates.

    Parameters
    ----------
    x, y : (n_points,) array_like of float
        Abscissa and values.
    start_rates : (n_terms,) array_like of float
        Where the search for the rates starts, greater than 0, in 1/x.
    form : {"decay", "saturation"}
        Terms c·exp(-r·x), or c·(1 - exp(-r·x)).
    offset : bool
        Fit a constant as well.
    weights : (n_points,) array_like of float, optional
        Inverse variances; equal where absent.

    Returns
    -------
    ExponentialFit
        Estimates with standard errors from the residuals (NaN without degrees of freedom).

    Raises
    ------
    InputError
        If the lengths differ, a rate is not positive or there are fewer points than parameters.

    Examples
    --------
    >>> x = np.arange(8.0)
    >>> fit = fit_exponential(x, 3.0 + 2.0 * np.exp(-0.5 * x), start_rates=[1.0], form="decay", offset=True)
    >>> round(float(fit.rates[0]), 6), round(float(fit.amplitudes[0]), 6), round(fit.offset, 6)
    (0.5, 2.0, 3.0)
    """
    from scipy.optimize import least_squares

    x, y = check_array("x", x, n_dims=1), check_array("y", y, n_dims=1)
    start = check_array("start_rates", start_rates, n_dims=1)
    root = np.ones_like(y) if weights is None else np.sqrt(check_array("weights", weights, n_dims=1))
    n_parameters = 2 * start.size + offset
    if not x.shape == y.shape == root.shape:
        raise InputError(f"x, y and weights must be equally long (given {x.size}, {y.size} and {root.size}).")
    if not (start.size and np.all(start > 0)):
        raise InputError(f"start_rates must hold at least one rate, each greater than 0 (given {start.tolist()}).")
    if x.size < n_parameters:
        raise InputError(
            f"{x.size} points cannot determine {n_parameters} parameters; give more points or fewer terms."
        )

    def solve(log_rates: NDArray[np.float64]) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        design = _terms(x, np.exp(log_rates), form)
        if offset:
            design = np.column_stack([design, np.ones_like(x)])
        design = design * root[:, None]
        return design, np.asarray(np.linalg.lstsq(design, y * root, rcond=None)[0], dtype=np.float64)

    def slopes(log_rates: NDArray[np.float64], linear: NDArray[np.float64]) -> NDArray[np.float64]:
        """Differentiate the curve by the logarithm of each rate, (n_points, n_terms)."""
        rates = np.exp(log_rates)
        sign = -1.0 if form == "decay" else 1.0
        steep: NDArray[np.float64] = sign * linear[: start.size] * x[:, None] * rates * np.exp(-x[:, None] * rates)
        return steep * root[:, None]

    def residuals(log_rates: NDArray[np.float64]) -> NDArray[np.float64]:
        design, linear = solve(log_rates)
        return np.asarray(design @ linear - y * root)

    def jacobian(log_rates: NDArray[np.float64]) -> NDArray[np.float64]:
        design, linear = solve(log_rates)
        steep = slopes(log_rates, linear)
        return np.asarray(steep - design @ np.linalg.lstsq(design, steep, rcond=None)[0])

    found = least_squares(residuals, np.log(start), jac=jacobian, method="lm", xtol=1e-15, ftol=1e-15, gtol=1e-15)
    design, linear = solve(found.x)
    rates = np.exp(found.x)
    residual_sum = float(np.sum((design @ linear - y * root) ** 2))
    full = np.column_stack([slopes(found.x, linear) / rates, design])
    scale = np.linalg.norm(full, axis=0)
    spare = x.size - n_parameters
    inverse = np.linalg.pinv(full / np.where(scale > 0, scale, 1.0))
    variance = residual_sum / spare if spare else np.nan
    se = np.sqrt(np.sum(inverse**2, axis=1) * variance) / np.where(scale > 0, scale, 1.0)
    n = start.size
    return ExponentialFit(
        form=form,
        rates=rates,
        rates_se=se[:n],
        amplitudes=linear[:n],
        amplitudes_se=se[n : 2 * n],
        offset=float(linear[n]) if offset else 0.0,
        offset_se=float(se[2 * n]) if offset else np.nan,
        residual_sum=residual_sum,
    )


def _terms(x: NDArray[np.float64], rates: NDArray[np.float64], form: Form) -> NDArray[np.float64]:
    decay = -x[..., None] * rates
    return np.exp(decay) if form == "decay" else -np.expm1(decay)
