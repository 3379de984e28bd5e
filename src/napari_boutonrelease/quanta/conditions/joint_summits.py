"""Best parameters of the joint fit at each number of sites, and how far each can be moved."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Literal

import numpy as np

from .joint_likelihood import maximise
from .joint_profiles import profile_difference, profile_ends
from .joint_starts import Lattice

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from .joint_likelihood import Cells

    Floats = NDArray[np.float64]
    Ints = NDArray[np.intp]

Change = Literal["none", "p", "q", "both"]
CHANGES: tuple[Change, ...] = ("none", "p", "q", "both")
P_DIFFERS: dict[Change, bool] = {"none": False, "p": True, "q": False, "both": True}
Q_DIFFERS: dict[Change, bool] = {"none": False, "p": False, "q": True, "both": True}
_SAME = 1e-3  # nats
_BISECTIONS = 30


@dataclass(frozen=True, slots=True)
class Summits:
    """One variant of the model: its maxima for 1..n_max sites.

    Attributes
    ----------
    objective : (n_max,) ndarray
        Log-likelihood with log priors, that of n_sites (1/n) too.
    theta : (n_max, K) ndarray
        Parameters.
    leader : (K,) ndarray of int
        Which of them are tied.
    """

    objective: Floats
    theta: Floats
    leader: Ints

    @property
    def best(self) -> float:
        """The highest maximum."""
        return float(self.objective.max())

    @property
    def n_sites(self) -> int:
        """Where it is."""
        return int(self.objective.argmax()) + 1

    @property
    def at_best(self) -> Floats:
        """Its parameters."""
        return np.asarray(self.theta[self.n_sites - 1])

    @property
    def n_free(self) -> int:
        """Number of parameters that can move."""
        return int(np.sum(self.leader == np.arange(self.leader.size)))

    def n_set(self, margin: float) -> tuple[int, ...]:
        """Numbers of sites within so many nats of the best."""
        return tuple(int(i) + 1 for i in np.flatnonzero(self.objective >= self.best - margin))


def find_summits(cells: Cells, *, n_max: int) -> dict[Change, Summits]:
    """Climb every variant at every number of sites; a variant never ends below one that it contains."""
    lattice = Lattice(cells, n_max=n_max)
    leaders = {kind: cells.leader(p_differs=P_DIFFERS[kind], q_differs=Q_DIFFERS[kind]) for kind in P_DIFFERS}
    objective = {kind: np.empty(n_max) for kind in leaders}
    theta = {kind: np.empty((n_max, len(cells.lower))) for kind in leaders}

    def climb(kinds: list[Change], starts: list[Floats], n: int) -> None:
        """Climb from each start of each kind; keep what is higher than anything before."""
        counts = [len(part) for part in starts]
        ties = np.repeat([leaders[kind] for kind in kinds], counts, axis=0)
        found = maximise(cells, np.concatenate(starts), ties, n_sites=n)
        of_kind = np.repeat(np.arange(len(kinds)), counts)
        for i, kind in enumerate(kinds):
            rows = np.flatnonzero(of_kind == i)
            top = rows[found.objective[rows].argmax()]
            if found.objective[top] > objective[kind][n - 1]:
                objective[kind][n - 1], theta[kind][n - 1] = found.objective[top], found.theta[top]

    for n in range(1, n_max + 1):
        for kind in leaders:
            objective[kind][n - 1] = -np.inf
        simple: list[Change] = ["none", "p", "q"] if cells.n_recordings > 1 else ["p"]
        climb(
            simple,
            [lattice.starts(n_sites=n, p_differs=P_DIFFERS[kind], q_differs=Q_DIFFERS[kind]) for kind in simple],
            n,
        )
        if cells.n_recordings == 1:
            continue
        below: list[Change] = [k for k in simple[1:] if objective[k][n - 1] < objective["none"][n - 1] - _SAME]
        if below:
            climb(below, [theta["none"][[n - 1]]] * len(below), n)
        alone = lattice.starts(n_sites=n, p_differs=True, q_differs=True)
        climb(["both"], [np.concatenate([alone, theta["p"][[n - 1]], theta["q"][[n - 1]]])], n)
    if cells.n_recordings == 1:
        objective, theta = dict.fromkeys(leaders, objective["p"]), dict.fromkeys(leaders, theta["p"])
    rare = np.log(np.arange(1, n_max + 1))
    return {kind: Summits(objective[kind] - rare, theta[kind], leaders[kind]) for kind in leaders}


def find_reach(
    cells: Cells, summits: Summits, *, parameters: Ints, n_set: tuple[int, ...], margin: float
) -> tuple[Floats, Floats]:
    """Find the interval of each parameter at each number of sites that is possible.

    Parameters
    ----------
    cells : Cells
        Amplitudes.
    summits : Summits
        Maxima of the variant.
    parameters : (P,) ndarray of int
        Leaders to move.
    n_set : tuple of int
        Numbers of sites to look at.
    margin : float
        How far below the best of all, in nats, the interval ends.

    Returns
    -------
    lo, hi : (len(n_set), P) ndarray
    """
    ends = np.empty((len(n_set), 2, parameters.size))
    for i, n in enumerate(n_set):
        ends[i] = profile_ends(
            cells,
            summits.theta[n - 1],
            summits.leader,
            n_sites=n,
            parameter=np.tile(parameters, 2),
            side=np.repeat([-1.0, 1.0], parameters.size),
            level=summits.best - margin + float(np.log(n)),
        ).reshape(2, -1)
    return ends[:, 0], ends[:, 1]


def find_q_ratio(cells: Cells, summits: Summits, *, n_set: tuple[int, ...], margin: float) -> tuple[float, float]:
    """Find the interval of the logarithm of the last recording's q over that of the first, over possible n_sites.

    Both q lean on n_sites and q_cv alike, so that their ratio is known better than their own intervals tell.
    """
    ends = [
        profile_difference(
            cells,
            summits.theta[n - 1],
            summits.leader,
            n_sites=n,
            parameters=(int(cells.q[-1]), int(cells.q[0])),
            level=summits.best - margin + float(np.log(n)),
        )
        for n in n_set
    ]
    return float(min(lo for lo, _ in ends)), float(max(hi for _, hi in ends))


def silent_objective(cells: Cells) -> float:
    """Maximum of the same objective where nothing is ever released: only the noise scales are left."""
    own = cells.recording[cells.cell]
    z = cells.amplitude / cells.sd
    count = np.bincount(own).astype(np.float64)
    squares = np.bincount(own, weights=z**2)
    precision = np.diag(cells.prior_precision)[cells.noise]
    lower, upper = cells.lower[cells.noise], cells.upper[cells.noise]
    for _ in range(_BISECTIONS):  # the slope falls with the scale
        middle = 0.5 * (lower + upper)
        rising = squares * np.exp(-2.0 * middle) - count - precision * middle > 0
        lower, upper = np.where(rising, middle, lower), np.where(rising, upper, middle)
    fit = -count * lower - 0.5 * squares * np.exp(-2.0 * lower) - 0.5 * precision * lower**2
    return float(fit.sum() - np.log(cells.sd).sum() - 0.5 * np.log(2.0 * np.pi) * z.size)
