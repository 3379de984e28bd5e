"""How high the evidence must be: counted on stacks that hold noise alone."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from .evidence import mixture_evidence

if TYPE_CHECKING:
    from numpy.typing import NDArray

_MAXIMA_WANTED = 6000  # over all null stacks; a twentieth of them fixes the tail to about 6 %
_TAIL_SHARE = 0.05
_MAX_STACKS = 12


@dataclass(frozen=True, slots=True, kw_only=True)
class FalseRate:
    """Expected number of false maxima per image above an evidence `u`: n_tail * exp(-(u - start) / scale).

    Attributes
    ----------
    start : float
        Evidence from which the exponential tail is used (nats).
    scale : float
        Decay of the tail (nats); about 1 for a likelihood ratio.
    n_tail : float
        Maxima above `start` in one image.
    """

    start: float
    scale: float
    n_tail: float

    def expected(self, evidence: float) -> float:
        """Return the expected false maxima in one whole image at a cut of `evidence`."""
        return self.n_tail * float(np.exp(-(max(evidence, self.start) - self.start) / self.scale))

    def cut(self, expected: float) -> float:
        """Return the evidence above which `expected` false maxima are expected in one whole image."""
        return self.start + self.scale * float(np.log(max(self.n_tail / expected, 1.0)))


def local_maxima(
    image: NDArray[np.floating], *, spacing_px: float, above: float
) -> tuple[NDArray[np.intp], NDArray[np.intp]]:
    """Rows and columns of maxima that nothing within `spacing_px` exceeds, highest first.

    Touching pixels of the same value (evidence at its ceiling in every trial) are one maximum, in their middle.
    """
    from scipy.ndimage import center_of_mass, label, maximum_filter

    reach = int(np.floor(spacing_px))
    rows, columns = np.mgrid[-reach : reach + 1, -reach : reach + 1]
    disc = rows**2 + columns**2 <= spacing_px**2
    highest = (image >= maximum_filter(image, footprint=disc, mode="constant")) & (image > above)
    plateaus, n_plateaus = label(highest, structure=np.ones((3, 3)))
    middles = np.reshape(center_of_mass(highest, plateaus, np.arange(1, n_plateaus + 1)), (-1, 2))
    y, x = np.round(middles).astype(np.intp).T
    order = np.argsort(-image[y, x], kind="stable")
    return y[order], x[order]


def measure_false_rate(
    null: NDArray[np.float32],
    *,
    correlation: Sequence[NDArray[np.float64]],
    spacing_px: float,
    rng: np.random.Generator,
) -> FalseRate:
    """Fit the tail of the evidence of noise.

    Stacks as large as the one to be judged are drawn from the null maps, without repeats as far as they go; each map is
    shifted (with wrap-around) and mirrored at random. So repeated maps do not line up, and spontaneous releases, which
    stay at their boutons, are spread thinly instead of posing as false maxima. Maps are then mixed so that those of one
    trial are correlated as the pulses of a trial are. The maxima of the evidence beyond the 95 % quantile are taken as
    exponentially distributed, the tail of any smooth noise (Pickands 1975).

    Parameters
    ----------
    null : (n_null, y, x) ndarray of float32
        Standardised responses where nothing was stimulated.
    correlation : sequence of (n_pulses, n_pulses) ndarray
        Correlation of the noise of each trial's maps.
    spacing_px : float
        Smallest distance of two maxima (px).
    rng : Generator

    Returns
    -------
    FalseRate
    """
    maxima: list[NDArray[np.float32]] = []
    n_found = 0
    while len(maxima) < _MAX_STACKS and n_found < _MAXIMA_WANTED:
        evidence = mixture_evidence(_shuffled(null, correlation=correlation, rng=rng))
        y, x = local_maxima(evidence, spacing_px=spacing_px, above=0.0)
        maxima.append(evidence[y, x])
        n_found += len(y)
    values = np.sort(np.concatenate(maxima).astype(np.float64))
    n_tail = min(max(int(_TAIL_SHARE * len(values)), 20), len(values) - 1)
    if n_tail < 5:  # an image of a few resolution elements: the likelihood ratio's own tail
        return FalseRate(start=0.0, scale=1.2, n_tail=max(n_found / len(maxima), 1.0))
    start = float(values[-n_tail - 1])
    scale = float(np.mean(values[-n_tail:] - start))
    return FalseRate(start=start, scale=max(scale, 0.8), n_tail=n_tail / len(maxima))


def _shuffled(
    null: NDArray[np.float32], *, correlation: Sequence[NDArray[np.float64]], rng: np.random.Generator
) -> NDArray[np.float32]:
    n_null, height, width = null.shape
    n_maps = sum(len(block) for block in correlation)
    rounds = [rng.permutation(n_null) for _ in range(-(-n_maps // n_null))]
    chosen = np.concatenate(rounds)[:n_maps]
    stack = np.empty((n_maps, height, width), dtype=np.float32)
    for index, source in enumerate(chosen):
        image = null[source][:: rng.choice((-1, 1)), :: rng.choice((-1, 1))]
        stack[index] = np.roll(image, (rng.integers(height), rng.integers(width)), axis=(0, 1))
    first = 0
    for block in correlation:
        if len(block) > 1:
            trial = stack[first : first + len(block)]
            values, vectors = np.linalg.eigh(block)
            root = (vectors * np.sqrt(np.maximum(values, 0.0))) @ vectors.T
            trial[:] = np.tensordot(root.astype(np.float32), trial, axes=1)
        first += len(block)
    return stack
