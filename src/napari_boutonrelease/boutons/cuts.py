"""How much evidence a maximum needs to count as a bouton, and which maxima would pass another cut."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from .false_discovery import FalseRate, local_maxima

if TYPE_CHECKING:
    from numpy.typing import NDArray

_FIRST_SHARE = 0.1  # of false_discovery: how unlikely the first bouton must be where nothing may release at all
_MARGIN = 0.3  # the share of false ones is promised for a recording, and scatters about its expectation
_ROUNDS = 20


def allowed_false(n_found: int, false_discovery: float) -> float:
    """Return the expected false ones allowed with `n_found` boutons in hand."""
    return false_discovery * (_MARGIN * n_found if n_found else _FIRST_SHARE)


@dataclass(frozen=True, slots=True, kw_only=True)
class Cuts:
    """Evidence demanded of a maximum anywhere and of one where the mean image shows a spot.

    The expected false ones are shared in halves (weighted hypotheses; Genovese, Roeder & Wasserman 2006): the few spots
    of the mean image are a small part of the image, so there a smaller evidence is as convincing.
    """

    rate: FalseRate
    near_shape: NDArray[np.bool_]

    def at(self, expected: float) -> tuple[float, float]:
        """Return both cuts (nats) that let `expected` false ones pass."""
        share = float(np.mean(self.near_shape))
        if share == 0:
            return self.rate.cut(expected), np.inf
        anywhere = self.rate.cut(expected / 2 / max(1 - share, 1e-9))
        return anywhere, min(anywhere, self.rate.cut(expected / 2 / share))

    def map(self, expected: float) -> NDArray[np.float64]:
        """Return the cut (nats) of every pixel."""
        anywhere, at_shape = self.at(expected)
        return np.where(self.near_shape, min(at_shape, anywhere), anywhere)


@dataclass(frozen=True, slots=True, kw_only=True)
class Maxima:
    """Maxima of the evidence, to see at once which of them another cut would let pass.

    It is a preview: what strong boutons hide, or feign on their flanks, is known only once they are taken out.

    Attributes
    ----------
    y_px, x_px : (n,) ndarray of int
        Where.
    evidence : (n,) ndarray
        How high (nats).
    at_shape : (n,) ndarray of bool
        Whether the mean image shows a spot there.
    cuts : Cuts
        What is demanded.
    """

    y_px: NDArray[np.intp]
    x_px: NDArray[np.intp]
    evidence: NDArray[np.float64]
    at_shape: NDArray[np.bool_]
    cuts: Cuts

    def passing(self, false_discovery: float) -> tuple[NDArray[np.bool_], float]:
        """Tell which maxima pass where so large a share of false ones is accepted, and the cut anywhere (nats)."""
        n_found = 0
        passed, anywhere = np.zeros(len(self.evidence), dtype=np.bool_), np.inf
        for _ in range(_ROUNDS):
            anywhere, at_shape = self.cuts.at(allowed_false(n_found, false_discovery))
            passed = self.evidence > np.where(self.at_shape, min(at_shape, anywhere), anywhere)
            if np.count_nonzero(passed) <= n_found:
                break
            n_found = int(np.count_nonzero(passed))
        return passed, float(anywhere)


def find_maxima(evidence: NDArray[np.floating], *, cuts: Cuts, spacing_px: float) -> Maxima:
    """Find the maxima of the evidence that some accepted share of false ones would let pass.

    Parameters
    ----------
    evidence : (y, x) ndarray
        Evidence map (nats).
    cuts : Cuts
        What is demanded.
    spacing_px : float
        Smallest distance of two maxima (px).
    """
    y, x = local_maxima(evidence, spacing_px=spacing_px, above=cuts.rate.start)  # no cut is lower
    return Maxima(
        y_px=y,
        x_px=x,
        evidence=np.asarray(evidence[y, x], dtype=np.float64),
        at_shape=np.asarray(cuts.near_shape[y, x]),
        cuts=cuts,
    )
