"""Static non-linearity of a reporter: what it shows of a response, and the response behind what it shows.

A reporter whose binding sites fill up shows less of a large response than of a small one. The relation is taken as
static, which means that binding is fast against the response: it holds at every moment, so it is undone on dF/F itself,
before responses that overlap are added. Linear and shown dF/F agree for small responses: the slope at rest is 1. Below
rest there is nothing but noise, and both agree.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from ...checks import check_positive
from ...errors import InputError

if TYPE_CHECKING:
    from numpy.typing import ArrayLike, NDArray

    Floats = NDArray[np.float64]


@dataclass(frozen=True, slots=True, kw_only=True)
class UndoneSaturation:
    """dF/F that a linear reporter would have shown.

    Attributes
    ----------
    dff : ndarray
        Shape of what was given; NaN at or above the ceiling, and where nothing was given.
    slope : ndarray
        By how much the noise of a single value has grown: derivative of the linear dF/F by that shown.
    n_above : int
        Values at or above the ceiling.
    reason : str
        Empty, or what that means, in words.
    """

    dff: Floats
    slope: Floats
    n_above: int
    reason: str


def undo_saturation(dff: ArrayLike, *, max_dff: float, hill: float, rest_share: float | None) -> UndoneSaturation:
    """Find the dF/F that a linear reporter would have shown.

    With y shown and x linear: y = x / (1 + x / max_dff) for a Hill coefficient of 1. Else the share of the reporter
    that is bound follows the Hill equation in the transmitter, from `rest_share` at rest to 1 at `max_dff`.

    Parameters
    ----------
    dff : array_like of float
        dF/F as shown. NaN is passed on.
    max_dff : float
        dF/F of a fully bound reporter.
    hill : float
        Hill coefficient of binding (Hill 1910).
    rest_share : float or None
        Share of the reporter that is bound at rest, above 0 and below 1. It only matters where `hill` is not 1, and
        may be None where it is.

    Returns
    -------
    UndoneSaturation

    Raises
    ------
    InputError
        If a parameter is out of range or `rest_share` is missing.

    Examples
    --------
    >>> undone = undo_saturation([0.5, 1.0, 2.0], max_dff=2.0, hill=1.0, rest_share=None)
    >>> undone.dff, undone.n_above
    (array([0.66666667, 2.        ,        nan]), 1)
    """
    _check(max_dff, hill, rest_share)
    shown = np.asarray(dff, dtype=np.float64)
    above = shown >= max_dff
    inside = np.where(above, np.nan, np.maximum(shown, 0.0))
    free = 1.0 - inside / max_dff
    if hill == 1.0 or rest_share is None:
        linear, slope = inside / free, free**-2.0
    else:
        bound = 1.0 + inside * (1.0 - rest_share) / (rest_share * max_dff)  # over that at rest
        concentration = (bound / free) ** (1.0 / hill)  # over that at rest
        linear = hill * rest_share * max_dff * (concentration - 1.0)
        slope = concentration * ((1.0 - rest_share) / bound + rest_share / free)
    n_above = int(np.count_nonzero(above))
    reason = f"{n_above} of {np.count_nonzero(np.isfinite(shown))} values reach max_dff = {max_dff:g}: left out"
    return UndoneSaturation(
        dff=np.where(shown < 0.0, shown, linear),
        slope=np.where(shown < 0.0, 1.0, slope),
        n_above=n_above,
        reason=reason if n_above else "",
    )


def saturate(dff: ArrayLike, *, max_dff: float, hill: float, rest_share: float | None) -> NDArray[np.float64]:
    """Return what a reporter shows of a linear dF/F; the inverse of `undo_saturation`, with the same parameters.

    Examples
    --------
    >>> float(saturate(2.0, max_dff=2.0, hill=1.0, rest_share=None))
    1.0
    """
    _check(max_dff, hill, rest_share)
    linear = np.asarray(dff, dtype=np.float64)
    risen = np.maximum(linear, 0.0)
    if hill == 1.0 or rest_share is None:
        shown = risen / (1.0 + risen / max_dff)
    else:
        binding = (1.0 + risen / (hill * rest_share * max_dff)) ** hill * rest_share  # times the share free at rest
        shown = max_dff * (binding / (binding + 1.0 - rest_share) - rest_share) / (1.0 - rest_share)
    return np.where(linear < 0.0, linear, shown)


def _check(max_dff: float, hill: float, rest_share: float | None) -> None:
    check_positive("max_dff", max_dff, unit="dF/F")
    check_positive("hill", hill)
    if rest_share is not None and not 0.0 < rest_share < 1.0:
        raise InputError(f"rest_share must lie between 0 and 1, both excluded (given {rest_share:g}).")
    if hill != 1.0 and rest_share is None:
        raise InputError(f"A Hill coefficient other than 1 (given {hill:g}) needs rest_share, the share bound at rest.")
