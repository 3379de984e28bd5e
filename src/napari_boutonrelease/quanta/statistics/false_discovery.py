"""Many boutons, many tests: which of them to believe."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    from numpy.typing import ArrayLike, NDArray


def benjamini_hochberg(p_values: ArrayLike) -> NDArray[np.float64]:
    """Adjust p-values so that calling all below alpha keeps the false discovery rate under alpha.

    Parameters
    ----------
    p_values : (n,) array_like of float
        NaN marks a test that was not made; it stays NaN and does not count.

    Returns
    -------
    (n,) ndarray of float
        Adjusted p-values (Benjamini & Hochberg 1995).

    Examples
    --------
    >>> benjamini_hochberg([0.01, 0.04, 0.03, float("nan")]).round(3)
    array([0.03, 0.04, 0.04,  nan])
    """
    p = np.asarray(p_values, dtype=np.float64)
    tested = np.flatnonzero(~np.isnan(p))
    order = tested[np.argsort(p[tested], kind="stable")]
    scaled = p[order] * order.size / np.arange(1, order.size + 1)
    adjusted = np.full_like(p, np.nan)
    adjusted[order] = np.minimum(np.minimum.accumulate(scaled[::-1])[::-1], 1.0)
    return adjusted
