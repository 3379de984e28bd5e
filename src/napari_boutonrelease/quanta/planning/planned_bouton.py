"""A bouton as planning needs it: its release, and how large one vesicle is against the noise."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import numpy as np

from ...checks import check_fraction, check_not_negative, check_positive
from ...errors import InputError
from ..one_bouton.likelihoods import binomial_log_weights
from ..one_bouton.vesicle_sizes import gamma_vesicles_logpdf

if TYPE_CHECKING:
    from numpy.typing import NDArray

    Floats = NDArray[np.float64]

_REACH_SD = 8.0
_STEP_SD = 0.2  # sums over so fine a grid are integrals, for densities no narrower than the noise


@dataclass(frozen=True, slots=True, kw_only=True)
class PlannedBouton:
    """A bouton whose recording is planned; amplitudes are counted in SDs of their noise.

    Attributes
    ----------
    n_sites : int
        Release sites, at least 1.
    p_site : float
        Release probability of each, between 0 and 1 without the ends.
    q_over_noise : float
        Response to one vesicle over the SD of an amplitude's noise.
    q_cv : float
        Coefficient of variation of one vesicle's size, greater than 0.

    Raises
    ------
    InputError
        If a value is out of range.
    """

    n_sites: int
    p_site: float
    q_over_noise: float
    q_cv: float

    def __post_init__(self) -> None:
        if self.n_sites < 1:
            raise InputError(f"n_sites must be at least 1 (given {self.n_sites}).")
        if not 0.0 < self.p_site < 1.0:
            raise InputError(f"p_site must lie between 0 and 1, both excluded (given {self.p_site:g}).")
        check_positive("q_over_noise", self.q_over_noise)
        check_positive("q_cv", self.q_cv)

    @property
    def p_release(self) -> float:
        """Probability of at least one vesicle."""
        return float(-np.expm1(self.n_sites * np.log1p(-self.p_site)))

    @property
    def mean(self) -> float:
        """Mean amplitude, failures included, in SDs of the noise."""
        return self.n_sites * self.p_site * self.q_over_noise

    @property
    def variance(self) -> float:
        """Variance of an amplitude: of the number of vesicles, of their sizes, and of the noise (1)."""
        of_one = self.p_site * (1.0 - self.p_site) + self.p_site * self.q_cv**2
        return self.n_sites * of_one * self.q_over_noise**2 + 1.0

    def releasing(self, p_release: float) -> PlannedBouton:
        """Return the same bouton with another release probability, between 0 and 1 without the ends."""
        return replace(self, p_site=site_probability(p_release, n_sites=self.n_sites))

    def draw(self, shape: tuple[int, ...], *, rng: np.random.Generator) -> Floats:
        """Draw amplitudes, vesicle by vesicle: sizes follow a gamma law, noise a normal one."""
        vesicles = rng.binomial(self.n_sites, self.p_site, shape)
        amplitude = rng.standard_normal(shape)
        some = vesicles > 0
        amplitude[some] += self.q_over_noise * self.q_cv**2 * rng.standard_gamma(vesicles[some] / self.q_cv**2)
        return amplitude


@dataclass(frozen=True, slots=True, kw_only=True)
class Doubts:
    """How well the rest is known before this bouton's own amplitudes: from the axon's other boutons, or beforehand.

    Attributes
    ----------
    q : float
        SD of log q, greater than 0; between the boutons of an axon it is the spread of their vesicles.
    q_cv : float
        SD of log q_cv, greater than 0.
    noise : float
        SD of the log of the noise, over that which as many null amplitudes as trials leave; greater than 0.
    inverse_sites : float
        SD of 1/n_sites, 0 where the number of sites is known.
    """

    q: float
    q_cv: float
    noise: float
    inverse_sites: float

    def __post_init__(self) -> None:
        for name in ("q", "q_cv", "noise"):
            check_positive(f"doubt of {name}", getattr(self, name))
        check_not_negative("doubt of inverse_sites", self.inverse_sites)


def site_probability(p_release: float, *, n_sites: int) -> float:
    """Release probability of each of `n_sites` sites that together release with `p_release`.

    Examples
    --------
    >>> round(site_probability(0.75, n_sites=2), 3)
    0.5
    """
    check_fraction("p_release", p_release)
    return float(-np.expm1(np.log1p(-p_release) / n_sites)) if p_release < 1.0 else 1.0


def amplitude_grid(bouton: PlannedBouton) -> Floats:
    """Amplitudes in equal steps over all that this bouton, or one with a site more, is likely to show."""
    m = bouton.n_sites + 1
    top = m * bouton.q_over_noise + _REACH_SD * np.sqrt(1.0 + m * (bouton.q_over_noise * bouton.q_cv) ** 2)
    return np.arange(-_REACH_SD, top, _STEP_SD)


def amplitude_probability(
    amplitude: Floats, *, n_sites: int, p_site: float, q: float, q_cv: float, noise_sd: float
) -> Floats:
    """Probability of each amplitude of an equally spaced grid, under binomial release of gamma-sized vesicles."""
    m = np.arange(n_sites + 1)[:, None]
    density = np.exp(gamma_vesicles_logpdf(amplitude, vesicles=m, q=q, q_cv=q_cv, noise_sd=noise_sd))
    weights = np.exp(binomial_log_weights(p_site, n_sites=n_sites, m_max=n_sites))
    return np.asarray(weights @ (density / density.sum(axis=1, keepdims=True)))
