"""Mean, variance and higher cumulants of what a bouton releases, with quanta and probabilities that differ.

A bouton has n_sites release sites. Each releases a vesicle with its own probability; the vesicle's size varies from
trial to trial (within a site, type I) and its mean from site to site (between sites, type II).
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Literal

import numpy as np

from ...checks import check_not_negative, check_positive
from ...errors import InputError

if TYPE_CHECKING:
    from numpy.typing import ArrayLike, NDArray

    Floats = NDArray[np.float64]

_TINY = 1e-9
_LEAST_SHAPE = 1e-6


@dataclass(frozen=True, slots=True, kw_only=True)
class ReleaseVariation:
    """How vesicles and sites of one bouton differ.

    Attributes
    ----------
    within_cv : float
        Coefficient of variation of one site's vesicles, trial to trial (type I).
    between_cv : float
        Coefficient of variation of the sites' mean vesicles (type II).
    within_sd : {"same", "proportional"}
        Whether the SD within a site is the same at all sites (`within_cv` times the mean q), or `within_cv` times the
        site's own q.
    p_cv : float
        Coefficient of variation of release probability over sites, the same in every condition (Quastel 1997); 0
        where all are alike, or where `p_shape` says how they differ.
    p_shape : float or None
        Release probabilities of the sites follow a Beta distribution with this shape parameter, whose second
        parameter changes with the condition (Silver 2003); None without.
    """

    within_cv: float
    between_cv: float
    within_sd: Literal["same", "proportional"]
    p_cv: float
    p_shape: float | None

    def __post_init__(self) -> None:
        for name in ("within_cv", "between_cv", "p_cv"):
            check_not_negative(name, getattr(self, name))
        if self.within_sd not in ("same", "proportional"):
            raise InputError(f"within_sd must be 'same' or 'proportional' (given {self.within_sd!r}).")
        if self.p_shape is not None:
            check_positive("p_shape", self.p_shape)
            if self.p_cv > 0:
                raise InputError(f"Give either p_cv or p_shape (given {self.p_cv:g} and {self.p_shape:g}).")

    @property
    def linear(self) -> float:
        """Mean squared vesicle over q²: the factor of q I in the variance."""
        within, between = self.within_cv**2, self.between_cv**2
        return (1.0 + between) * (1.0 + within) if self.within_sd == "proportional" else 1.0 + between + within

    def probability_moments(self, p_site: ArrayLike) -> tuple[Floats, Floats, Floats, Floats]:
        """Mean of p, p², p³, p⁴ over sites whose mean probability is `p_site`."""
        p = np.asarray(p_site, dtype=np.float64)
        if self.p_shape is None and self.p_cv == 0:
            return p, p**2, p**3, p**4
        if self.p_shape is not None:
            shape = np.full(p.shape, self.p_shape)
        else:  # of the Beta distribution that has this mean and spread
            shape = np.maximum((1.0 - p) / self.p_cv**2 - p, _LEAST_SHAPE)
        total = shape / np.maximum(p, _TINY)
        moments, product = [], np.ones(p.shape)
        for k in range(4):
            product = product * (shape + k) / (total + k)
            moments.append(product)
        return moments[0], moments[1], moments[2], moments[3]


def release_variance(
    mean: ArrayLike, *, q: ArrayLike, n_sites: ArrayLike, variation: ReleaseVariation
) -> NDArray[np.float64]:
    """Return the variance of the response, without noise, where its mean is `mean`.

    With all variation zero it is the parabola q I - I² / n_sites.

    Parameters
    ----------
    mean, q, n_sites : array_like of float
        Mean response I (dF/F) of a condition; mean response to one vesicle (dF/F); number of sites. They broadcast.
    variation : ReleaseVariation
        How vesicles and sites differ.

    References
    ----------
    Reid & Clements 1999 J Physiol 518:121; Clements & Silver 2000 Trends Neurosci 23:105; Silver 2003 J Neurosci
    Methods 130:127; Quastel 1997 Biophys J 72:728.

    Examples
    --------
    >>> alike = ReleaseVariation(within_cv=0.0, between_cv=0.0, within_sd="same", p_cv=0.0, p_shape=None)
    >>> float(release_variance(20.0, q=10.0, n_sites=5, variation=alike))
    120.0
    """
    response, size, sites = (np.asarray(values, dtype=np.float64) for values in (mean, q, n_sites))
    bend, _ = bend_of(response, per_maximum=1.0 / (sites * size), variation=variation)
    return np.asarray(size * variation.linear * response - bend / sites)


def bend_of(mean: Floats, *, per_maximum: Floats, variation: ReleaseVariation) -> tuple[Floats, Floats]:
    """Return what is taken off the variance for every 1 / n_sites, and its slope over the mean.

    Parameters
    ----------
    mean : ndarray
        Mean response I.
    per_maximum : ndarray
        1 / (n_sites q): one over the response when every site releases. May lie a little below 0, where variance
        against mean bends upwards.
    variation : ReleaseVariation
        How sites differ.

    Returns
    -------
    bend, slope : ndarray
        (1 + between_cv²) E[p²] (n_sites q)², which is I² where sites are alike; and its derivative by I.
    """
    steep = 1.0 + variation.between_cv**2
    a = variation.p_shape
    if a is None:
        steep *= 1.0 + variation.p_cv**2
        return steep * mean**2, 2.0 * steep * mean
    below = np.maximum(a + mean * per_maximum, 0.5 * a)
    bend = steep * (1.0 + a) * mean**2 / below
    return bend, steep * (1.0 + a) * mean * (2.0 - mean * per_maximum / below) / below


def release_cumulants(
    p_site: ArrayLike, *, q: ArrayLike, n_sites: ArrayLike, variation: ReleaseVariation
) -> tuple[Floats, Floats, Floats, Floats]:
    """Mean, variance, third and fourth cumulant of the response without noise.

    Vesicle sizes within a site, and the sites' means, are taken as gamma distributed.

    Parameters
    ----------
    p_site : array_like of float
        Mean release probability of the sites.
    q, n_sites : array_like of float
        Mean response to one vesicle (dF/F) and number of sites.
    variation : ReleaseVariation
        How vesicles and sites differ.

    Examples
    --------
    >>> alike = ReleaseVariation(within_cv=0.0, between_cv=0.0, within_sd="same", p_cv=0.0, p_shape=None)
    >>> mean, variance, _, fourth = release_cumulants(0.4, q=1.0, n_sites=5, variation=alike)
    >>> round(float(fourth / variance**2), 6)  # excess kurtosis of a binomial
    -0.366667
    """
    size, sites = np.asarray(q, dtype=np.float64), np.asarray(n_sites, dtype=np.float64)
    p1, p2, p3, p4 = variation.probability_moments(p_site)
    w, b = variation.within_cv**2, variation.between_cv**2
    # Raw moments of the sites' means over q, and polynomials in them: E[m1²], E[m2], ... of single vesicles.
    s2, s3, s4 = 1.0 + b, (1.0 + b) * (1.0 + 2.0 * b), (1.0 + b) * (1.0 + 2.0 * b) * (1.0 + 3.0 * b)
    if variation.within_sd == "proportional":
        m2, m3 = 1.0 + w, (1.0 + w) * (1.0 + 2.0 * w)
        m4 = m3 * (1.0 + 3.0 * w)
        one, two, three, four = 1.0, s2 * m2, s3 * m3, s4 * m4
        two_one, three_one, two_two, two_one_one = s3 * m2, s4 * m3, s4 * m2**2, s4 * m2
    else:
        c3, c4 = 2.0 * w**2, 3.0 * w**2 + 6.0 * w**3  # central moments within a site
        one, two, three = 1.0, s2 + w, s3 + 3.0 * w + c3
        four = s4 + 6.0 * s2 * w + 4.0 * c3 + c4
        two_one, three_one = s3 + w, s4 + 3.0 * s2 * w + c3
        two_two, two_one_one = s4 + 2.0 * s2 * w + w**2, s4 + s2 * w
    mean = sites * size * p1 * one
    variance = sites * size**2 * (p1 * two - p2 * s2)
    third = sites * size**3 * (p1 * three - 3.0 * p2 * two_one + 2.0 * p3 * s3)
    fourth = p1 * four - p2 * (4.0 * three_one + 3.0 * two_two) + 12.0 * p3 * two_one_one - 6.0 * p4 * s4
    return mean, variance, third, sites * size**4 * fourth
