"""What the amplitudes of each bouton say of its p_release, once what all boutons share is taken as known."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from ...checks import check_array, check_not_negative, check_positive
from .stimulus_failures import release_log_ratio

if TYPE_CHECKING:
    from numpy.typing import ArrayLike, NDArray

    Floats = NDArray[np.float64]

_NODES = 9  # of Gauss-Hermite, over the size of one vesicle


def release_curves(
    amplitude: ArrayLike,
    amplitude_sd: ArrayLike,
    *,
    q: float,
    q_log_sd: float,
    q_cv: float,
    n_sites: ArrayLike,
    p_site: ArrayLike,
    p_release: ArrayLike,
) -> Floats:
    """Likelihood of p_release at one pulse for each bouton, integrated over its own vesicle size.

    How large the axon's median vesicle is, and how much vesicles vary, is unknown to all boutons alike: an error of it
    moves their p_release together and makes no difference between them. It is therefore taken as known here, unlike in
    `fit_axon_release`; a comparison of boutons by intervals that carry it would find too little.

    Parameters
    ----------
    amplitude, amplitude_sd : (n_boutons, n_trials) array_like
        Responses to that pulse and their noise, dF/F; NaN where not measured.
    q, q_log_sd : float
        Median vesicle of the axon (dF/F), and SD between boutons of its logarithm.
    q_cv : float
        Coefficient of variation of one vesicle's size.
    n_sites, p_site : (n_boutons,) array_like
        Sites, and their release probability: what share of the releases holds several vesicles.
    p_release : (n_p,) array_like
        Where to evaluate.

    Returns
    -------
    (n_boutons, n_p) ndarray
        Largest 1; NaN where no amplitude is known.

    Examples
    --------
    >>> p = np.linspace(0.005, 0.995, 100)
    >>> curves = release_curves(
    ...     [[0.0, 0.1, 0.1, 0.0]], np.full((1, 4), 0.01), q=0.1, q_log_sd=0.1, q_cv=0.3, n_sites=[1], p_site=[0.5],
    ...     p_release=p,
    ... )
    >>> round(float(p[curves[0].argmax()]), 2)
    0.51
    """
    a, sd = check_array("amplitude", amplitude, n_dims=2), check_array("amplitude_sd", amplitude_sd, n_dims=2)
    p = check_array("p_release", p_release, n_dims=1)
    check_positive("q", q)
    check_not_negative("q_log_sd", q_log_sd)
    nodes, weights = np.polynomial.hermite_e.hermegauss(_NODES)
    total = np.full((len(a), p.size), -np.inf)
    for node, weight in zip(nodes, weights, strict=True):
        ratio = release_log_ratio(
            a[:, :, None],
            sd[:, :, None],
            q=np.full(len(a), q * np.exp(q_log_sd * node)),
            q_cv=q_cv,
            n_sites=n_sites,
            p_site=np.asarray(p_site, dtype=np.float64)[:, None],
        )[:, :, 0]
        known = np.isfinite(ratio)
        each = np.logaddexp(np.log1p(-p), np.log(p) + np.where(known, ratio, 0.0)[..., None])
        total = np.logaddexp(total, np.log(weight) + np.where(known[..., None], each, 0.0).sum(axis=1))
    curves = np.exp(total - total.max(axis=1, keepdims=True))
    curves[~np.isfinite(np.where(sd > 0, a, np.nan)).any(axis=1)] = np.nan
    return np.asarray(curves)
