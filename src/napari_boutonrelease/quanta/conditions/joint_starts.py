"""Where the joint fit of one bouton starts to climb: summits of its likelihood on a coarse lattice of q and p_site."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
from scipy.special import gammaln

from ..one_bouton.vesicle_sizes import gamma_vesicles_logpdf

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from .joint_likelihood import Cells

    Floats = NDArray[np.float64]
    Ints = NDArray[np.intp]

_Q_STEP = 0.1  # of log q
_N_P = 20
_N_SUMMITS = 2
_FAR = 6.0  # nats below the highest summit of the lattice: not worth a climb


class Lattice:
    """Log-likelihood of each cell over q, n_sites and p_site, at the expected q_cv and noise.

    Parameters
    ----------
    cells : Cells
        Amplitudes.
    n_max : int
        Largest number of sites.
    """

    def __init__(self, cells: Cells, *, n_max: int) -> None:
        self._cells = cells
        self._log_q = np.arange(cells.lower[0], cells.upper[0] + _Q_STEP, _Q_STEP)
        self._p = np.sin((np.arange(_N_P) + 0.5) * (np.pi / 2 / _N_P)) ** 2
        m = np.arange(n_max + 1)
        n = np.arange(1, n_max + 1)[:, None, None]
        left = np.maximum(n - m, 0)
        choose = np.where(m <= n, np.exp(gammaln(n + 1.0) - gammaln(m + 1.0) - gammaln(left + 1.0)), 0.0)
        p = self._p[:, None]
        weights = (choose * p**m * (1.0 - p) ** left).reshape(-1, n_max + 1).astype(np.float32)
        density = gamma_vesicles_logpdf(
            cells.amplitude,
            vesicles=m[:, None],
            q=np.exp(self._log_q)[:, None, None],
            q_cv=float(np.exp(cells.prior_mean[cells.q_cv])),
            noise_sd=cells.sd,
        )
        peak = density.max(axis=1, keepdims=True)
        mixture = weights @ np.exp(density - peak).astype(np.float32)  # (Q, n * P, N)
        at_each = np.log(np.maximum(mixture, np.float32(1e-37))) + peak
        table = np.add.reduceat(at_each, cells.first, axis=2).astype(np.float64)
        self._table = np.moveaxis(table, 2, 0).reshape(len(cells.first), len(self._log_q), n_max, _N_P)

    def starts(self, *, n_sites: int, p_differs: bool, q_differs: bool) -> Floats:
        """Return parameters to climb from, (S, K), for one variant of the model.

        Where q may differ between recordings but p_site not, the ratios of mean amplitudes are ratios of q; where both
        may differ, each recording stands for itself.
        """
        table = self._table[:, :, n_sites - 1, :]
        if q_differs and p_differs:
            return self._alone(table)
        shift = self._mean_steps() if q_differs else np.zeros(self._cells.n_recordings, dtype=np.intp)
        index = np.arange(len(self._log_q))[None, :] + shift[:, None]  # (R, Q)
        index = np.clip(index, 0, len(self._log_q) - 1)[self._cells.recording]
        moved = np.take_along_axis(table, index[:, :, None], axis=1)  # (C, Q, P)
        if not p_differs:
            together = np.zeros((int(self._cells.pulse.max()) + 1, *moved.shape[1:]))
            np.add.at(together, self._cells.pulse, moved)
            ridge = together.max(axis=2).sum(axis=0)
            best_p = self._p[together.argmax(axis=2)][self._cells.pulse]
        else:
            ridge = moved.max(axis=2).sum(axis=0)
            best_p = self._p[moved.argmax(axis=2)]  # (C, Q)
        ridge = ridge + self._prior()
        first_cell = [int(np.argmax(self._cells.recording == r)) for r in range(self._cells.n_recordings)]
        return np.array([self._theta(self._log_q[index[first_cell, i]], best_p[:, i]) for i in _summits(ridge)])

    def _alone(self, table: Floats) -> Floats:
        log_q, p = np.empty(self._cells.n_recordings), np.empty(len(table))
        for r in range(self._cells.n_recordings):
            own = np.flatnonzero(self._cells.recording == r)
            ridge = table[own].max(axis=2).sum(axis=0) + self._prior()
            i = int(ridge.argmax())
            log_q[r], p[own] = self._log_q[i], self._p[table[own, i].argmax(axis=1)]
        return self._theta(log_q, p)[None, :]

    def _theta(self, log_q: Floats, p: Floats) -> Floats:
        theta = np.zeros(len(self._cells.lower))
        theta[self._cells.q], theta[self._cells.p_site] = log_q, p
        theta[self._cells.q_cv] = self._cells.prior_mean[self._cells.q_cv]
        return theta

    def _prior(self) -> Floats:
        shared = np.tile(self._log_q[:, None], (1, self._cells.n_recordings)) - self._cells.prior_mean[self._cells.q]
        block = self._cells.prior_precision[np.ix_(self._cells.q, self._cells.q)]
        return np.asarray(-0.5 * np.einsum("qr,rs,qs->q", shared, block, shared))

    def _mean_steps(self) -> Ints:
        cells = self._cells
        own = cells.recording[cells.cell]
        count = np.bincount(own, minlength=cells.n_recordings)
        means = np.bincount(own, weights=cells.amplitude, minlength=cells.n_recordings) / count
        means = np.log(np.maximum(means, 0.05 * max(float(means.max()), 1e-12)))
        return np.round((means - np.average(means, weights=count)) / _Q_STEP).astype(np.intp)


def _summits(ridge: Floats) -> Ints:
    """Return the highest local maxima."""
    wide = np.pad(ridge, 1, constant_values=-np.inf)
    found = np.flatnonzero((ridge >= wide[:-2]) & (ridge >= wide[2:]) & (ridge > ridge.max() - _FAR))
    return np.asarray(found[np.argsort(ridge[found])[::-1]][:_N_SUMMITS], dtype=np.intp)
