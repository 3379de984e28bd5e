"""Density of an amplitude that holds a given number of vesicles whose sizes vary as a gamma law."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
from scipy.special import gammaln

if TYPE_CHECKING:
    from numpy.typing import ArrayLike, NDArray

_LEAST_SKEW = 0.02  # stands for the normal limit


def gamma_vesicles_logpdf(
    amplitude: ArrayLike, *, vesicles: ArrayLike, q: ArrayLike, q_cv: ArrayLike, noise_sd: ArrayLike
) -> NDArray[np.float64]:
    """Log density of an amplitude that is the sum of so many vesicles and normal noise.

    A vesicle's size is gamma distributed with mean q and coefficient of variation q_cv. The sum with the noise is taken
    as the Pearson type III density (a shifted gamma) of the same mean, variance and skewness; without vesicles that
    is the normal density, to a skewness of 0.02.

    Parameters
    ----------
    amplitude : array_like of float
        Amplitudes, dF/F.
    vesicles : array_like of int
        Number of vesicles.
    q, q_cv : array_like of float
        Mean size of one vesicle (dF/F) and its coefficient of variation.
    noise_sd : array_like of float
        SD of the noise, dF/F. All five broadcast against one another.

    Returns
    -------
    ndarray of float
        In nats.

    References
    ----------
    Pearson 1895 Phil Trans R Soc A 186:343.

    Examples
    --------
    >>> gamma_vesicles_logpdf(0.1, vesicles=[0, 1], q=0.1, q_cv=0.3, noise_sd=0.02).round(2)
    array([-9.15,  2.4 ])
    """
    a, m, size = np.asarray(amplitude), np.asarray(vesicles), np.asarray(q)
    quantal_sd = size * np.asarray(q_cv)
    variance = np.asarray(noise_sd) ** 2 + m * quantal_sd**2
    skew = np.maximum(2.0 * m * (np.asarray(q_cv) * quantal_sd**3) / variance**1.5, _LEAST_SKEW)
    shape = 4.0 / skew**2
    z = np.maximum((a - m * size) / np.sqrt(variance), -1.95 / skew)  # the density ends at -2/skew
    log_scale = np.log(2.0 / skew) + (shape - 1.0) * np.log(shape) - shape - gammaln(shape) - 0.5 * np.log(variance)
    log_density = log_scale + (shape - 1.0) * np.log1p(z * skew / 2.0) - 2.0 * z / skew
    return np.asarray(log_density, dtype=np.float64)
