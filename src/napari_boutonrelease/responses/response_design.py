"""The linear model of a trace: a baseline a window and a response a pulse, solved for all windows at once.

    y(frame) = offset[window] (+ slope[window]·time) + sum over pulses of amplitude·h(frame; pulse)

h is averaged over the exposure at the true time between pulse and frame. Responses that outlast their window are
followed into the next ones, so that the normal equations are banded.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from .bouton_groups import row_offset_s
from .noise import TimeCorrelation

if TYPE_CHECKING:
    from collections.abc import Iterator, Sequence

    from numpy.typing import NDArray
    from scipy.sparse import csr_array

    from ..recording.timing import Timing
    from ..response_shape import ResponseShape
    from .windows import Windows

__all__ = [
    "ResponseDesign",
    "build_design",
    "evoked_responses",
    "pooled_residuals",
]


@dataclass(frozen=True, slots=True, kw_only=True)
class ResponseDesign:
    """Design of one group of boutons that share their frame times and usable frames.

    Attributes
    ----------
    frame, window : (n_rows,) ndarray of int
        Frame and window of each row; windows follow each other.
    frame_in_run : (n_rows,) ndarray of int
        Number of frames of the same window that lie before without a break.
    n_windows, n_baseline, n_pulses : int
        Windows; baseline columns of each (1, or 2 with a slope); pulses of each.
    plain, matrix : (n_rows, n_columns) sparse array
        Columns window by window, baseline first: as it is, and whitened.
    whitening : (n_rows, n_rows) sparse array or None
        What whitens the noise; None where it is white already.
    scale : (n_columns,) ndarray
        Norm of each whitened column; 1 for columns without entries.
    present : (n_columns,) ndarray of bool
        Columns with entries.
    reach : int
        How many windows further a response is still seen.
    factor : (n_bands, n_columns) ndarray
        Banded Cholesky factor of the scaled normal equations.
    """

    frame: NDArray[np.intp]
    window: NDArray[np.intp]
    frame_in_run: NDArray[np.intp]
    n_windows: int
    n_baseline: int
    n_pulses: int
    plain: csr_array
    matrix: csr_array
    whitening: csr_array | None
    scale: NDArray[np.float64]
    present: NDArray[np.bool_]
    reach: int
    factor: NDArray[np.float64]

    @property
    def n_columns_each(self) -> int:
        """Columns of one window."""
        return self.n_baseline + self.n_pulses

    def whiten(self, y: NDArray[np.float64]) -> NDArray[np.float64]:
        """Whiten values of the rows, (n_rows, n_boutons)."""
        return y if self.whitening is None else np.asarray(self.whitening @ y)

    def solve(self, whitened: NDArray[np.float64]) -> NDArray[np.float64]:
        """Least squares.

        Parameters
        ----------
        whitened : (n_rows, n_boutons) ndarray
            Whitened values.

        Returns
        -------
        (n_windows, n_columns_each, n_boutons) ndarray
            Coefficients; 0 in columns without entries.
        """
        from scipy.linalg import cho_solve_banded

        right = (self.matrix.T @ whitened) / self.scale[:, None]
        solution = cho_solve_banded((self.factor, True), right, check_finite=False) / self.scale[:, None]
        return np.asarray(solution).reshape(self.n_windows, self.n_columns_each, -1)

    def residual(self, whitened: NDArray[np.float64], coefficients: NDArray[np.float64]) -> NDArray[np.float64]:
        """Whitened residuals, (n_rows, n_boutons)."""
        return np.asarray(whitened - self.matrix @ coefficients.reshape(self.scale.size, -1))

    def standard_errors(self) -> NDArray[np.float64]:
        """Give standard errors for noise of unit variance.

        Returns
        -------
        (n_windows, n_columns_each) ndarray
            NaN where the rows do not determine a coefficient. Where responses reach into later windows, the inverse is
            probed at windows that lie four times that reach apart (Bekas C, Kokiopoulou E, Saad Y, 2007, Appl Numer
            Math 57:1214), which is exact to rounding where none does.
        """
        from scipy.linalg import cho_solve_banded

        each = self.n_columns_each
        stride = 1 if self.reach == 0 else min(self.n_windows, 4 * (self.reach + 1))
        diagonal = np.empty(self.scale.size)
        for first in range(min(stride, self.n_windows)):
            probe = np.zeros((self.n_windows, each, each))
            probe[first::stride] = np.eye(each)
            inverse = cho_solve_banded((self.factor, True), probe.reshape(-1, each), check_finite=False)
            at = np.zeros((self.n_windows, each), dtype=bool)
            at[first::stride] = True
            slots = np.flatnonzero(at.ravel())
            diagonal[slots] = inverse[slots, slots % each]
        # With unit columns the entry is the variance inflation: beyond a million nothing was measured.
        determined = self.present & (diagonal > 0) & (diagonal < 1e6)
        variance = np.where(determined, diagonal, np.nan) / self.scale**2
        return np.asarray(np.sqrt(variance).reshape(self.n_windows, each))

    def leverage(self) -> NDArray[np.float64]:
        """Share of each row's noise that the fit of its own window takes away, (n_rows,)."""
        result = np.zeros(self.frame.size)
        for low, high, own in self._own_blocks():
            basis = np.linalg.qr(own)[0] if high - low > own.shape[1] else np.eye(high - low)
            result[low:high] = np.sum(basis**2, axis=1)
        return np.clip(result, 0.0, 1.0)

    def response_rows(self, *, above: float) -> NDArray[np.bool_]:
        """Rows in which some response stands higher than `above` (share of its peak), (n_rows,)."""
        rows = self.plain.tocoo()
        high = (rows.coords[1] % self.n_columns_each >= self.n_baseline) & (rows.data > above)
        found = np.zeros(self.frame.size, dtype=bool)
        found[rows.coords[0][high]] = True
        return found

    def typical_block(self) -> NDArray[np.float64]:
        """Design of the filled window of median length, not whitened, without columns of absent pulses."""
        filled, length = np.unique(self.window, return_counts=True)
        if not filled.size:
            return np.zeros((0, 1))
        chosen = int(filled[np.argsort(length, kind="stable")[filled.size // 2]])
        at = np.flatnonzero(self.window == chosen)
        first = chosen * self.n_columns_each
        block = self.plain[at[0] : at[-1] + 1, first : first + self.n_columns_each].toarray()
        return np.asarray(block[:, np.any(block != 0, axis=0)])

    def _own_blocks(self) -> Iterator[tuple[int, int, NDArray[np.float64]]]:
        edges = np.searchsorted(self.window, np.arange(self.n_windows + 1))
        for window in np.flatnonzero(np.diff(edges)):
            low, high = int(edges[window]), int(edges[window + 1])
            first = int(window) * self.n_columns_each
            block = self.matrix[low:high, first : first + self.n_columns_each].toarray()
            yield low, high, block[:, np.any(block != 0, axis=0)]


def build_design(
    *,
    windows: Windows,
    timing: Timing,
    shape: ResponseShape,
    offset_s: float,
    usable: NDArray[np.bool_],
    slope: bool,
    correlation: TimeCorrelation,
) -> ResponseDesign:
    """Lay out the rows and columns of all windows and factor the normal equations.

    Parameters
    ----------
    windows : Windows
        Frames and pulses of each window.
    timing : Timing
        Times of the frames.
    shape : ResponseShape
        Time course of a response.
    offset_s : float
        How much later than the first row these boutons' row is exposed, in s.
    usable : (n_frames,) ndarray of bool
        Frames that hold a value.
    slope : bool
        Let the baseline of each window slope.
    correlation : TimeCorrelation
        Correlation of the noise in time.

    Returns
    -------
    ResponseDesign
    """
    from scipy.linalg import cholesky_banded
    from scipy.sparse import coo_array

    n_windows, n_pulses = windows.pulse_s.shape
    each = 1 + slope + n_pulses
    counted = np.concatenate([[0], np.cumsum(usable)])
    length = counted[windows.stop] - counted[windows.start]
    window = np.repeat(np.arange(n_windows), length)
    row_start = np.concatenate([[0], np.cumsum(length)]).astype(np.intp)
    usable_frame = np.flatnonzero(usable)
    frame = usable_frame[np.arange(row_start[-1]) - row_start[window] + counted[windows.start][window]]
    time_s = timing.frame_start_s + offset_s

    breaks = np.ones(frame.size, dtype=bool)
    breaks[1:] = (np.diff(frame) != 1) | (np.diff(window) != 0)
    row = np.arange(frame.size)
    frame_in_run = row - np.maximum.accumulate(np.where(breaks, row, 0)) if frame.size else row

    rows, columns, values = [row], [window * each], [np.ones(frame.size)]
    if slope and frame.size:
        middle_s = np.bincount(window, time_s[frame], n_windows) / np.maximum(length, 1)
        span_s = np.maximum(np.bincount(window, minlength=n_windows), 1) * timing.frame_interval_s
        rows.append(row)
        columns.append(window * each + 1)
        values.append((time_s[frame] - middle_s[window]) / span_s[window])

    owner, pulse = np.nonzero(np.isfinite(windows.pulse_s) & (windows.stop > windows.start)[:, None])
    pulse_s = windows.pulse_s[owner, pulse]
    n_after = int(np.ceil(shape.end_s() / timing.frame_interval_s)) + 2
    first = np.searchsorted(time_s + timing.exposure_s, pulse_s, side="right")
    reached = first[:, None] + np.arange(n_after)
    inside = reached < time_s.size
    reached = np.minimum(reached, time_s.size - 1)
    inside &= usable[reached] & (timing.segment[reached] == timing.segment[windows.start[owner]][:, None])
    if windows.exclusive:
        window_of_frame = np.full(time_s.size, -1)
        window_of_frame[frame] = window
        lands_in = window_of_frame[reached]
    else:
        lands_in = np.broadcast_to(owner[:, None], reached.shape)
        inside &= (reached >= windows.start[lands_in]) & (reached < windows.stop[lands_in])
    inside &= lands_in >= 0
    which, _ = np.nonzero(inside)
    to_frame, to_window = reached[inside], lands_in[inside]
    rows.append(row_start[to_window] + counted[to_frame] - counted[windows.start[to_window]])
    columns.append(owner[which] * each + (1 + slope) + pulse[which])
    values.append(shape.frame_average(time_s[to_frame] - pulse_s[which], exposure_s=timing.exposure_s))

    plain = coo_array(
        (np.concatenate(values), (np.concatenate(rows), np.concatenate(columns))), shape=(frame.size, n_windows * each)
    ).tocsr()
    whitening = correlation.whitening(frame_in_run) if correlation.order else None
    matrix = plain if whitening is None else (whitening @ plain).tocsr()

    normal = (matrix.T @ matrix).tocoo()
    scale = np.zeros(n_windows * each)
    on_diagonal = normal.coords[0] == normal.coords[1]
    scale[normal.coords[0][on_diagonal]] = np.sqrt(normal.data[on_diagonal])
    present = scale > 0
    scale[~present] = 1.0
    lower = normal.coords[0] >= normal.coords[1]
    i, j = normal.coords[0][lower], normal.coords[1][lower]
    band = np.zeros((int(np.max(i - j, initial=0)) + 1, scale.size))
    band[i - j, j] = normal.data[lower] / (scale[i] * scale[j])
    band[0] = np.where(present, 1.0 + 1e-10, 1.0)  # the excess keeps a window with too few frames solvable
    return ResponseDesign(
        frame=frame,
        window=window,
        frame_in_run=frame_in_run.astype(np.intp),
        n_windows=n_windows,
        n_baseline=1 + slope,
        n_pulses=n_pulses,
        plain=plain,
        matrix=matrix,
        whitening=whitening,
        scale=scale,
        present=present,
        reach=int(np.max(i // each - j // each, initial=0)),
        factor=cholesky_banded(band, lower=True) if scale.size else band,
    )


def pooled_residuals(
    y: NDArray[np.float64], *, designs: Sequence[ResponseDesign], members: Sequence[NDArray[np.intp]]
) -> tuple[NDArray[np.float64], ResponseDesign | None]:
    """Least-squares residuals of all boutons whose rows are those of the largest group.

    Parameters
    ----------
    y : (n_boutons, n_frames) ndarray
        Traces.
    designs : sequence of ResponseDesign
        Design of each group, not whitened.
    members : sequence of (n,) ndarray of int
        Boutons of each group.

    Returns
    -------
    residual : (n_rows, n) ndarray
    design : ResponseDesign or None
        Design of the largest group; None where no group has any row.
    """
    filled = [i for i, design in enumerate(designs) if design.frame.size]
    if not filled:
        return np.zeros((0, 0)), None
    common = designs[max(filled, key=lambda i: members[i].size)]
    residuals = []
    for i in filled:
        if np.array_equal(designs[i].frame, common.frame):
            values = y[np.ix_(members[i], common.frame)].T
            residuals.append(designs[i].residual(values, designs[i].solve(values)))
    return np.concatenate(residuals, axis=1), common


def evoked_responses(
    amplitude: NDArray[np.float64], *, timing: Timing, y_px: NDArray[np.float64], shape: ResponseShape
) -> NDArray[np.float64]:
    """Sum of all evoked responses in every frame, without baselines.

    Parameters
    ----------
    amplitude : (n_boutons, n_trials, n_pulses) ndarray
        Amplitudes; NaN counts as 0.
    timing : Timing
        Frames and stimuli.
    y_px : (n_boutons,) ndarray
        Rows of the boutons.
    shape : ResponseShape
        Time course of a response.

    Returns
    -------
    (n_boutons, n_frames) ndarray
        In the units of `amplitude`.
    """
    from scipy.sparse import coo_array

    n_frames = timing.frame_start_s.size
    trial, pulse = np.nonzero(np.isfinite(timing.stimulus_s))
    pulse_s = timing.stimulus_s[trial, pulse]
    heights = np.nan_to_num(amplitude[:, trial, pulse])
    n_after = int(np.ceil(shape.end_s() / timing.frame_interval_s)) + 2
    result = np.zeros((amplitude.shape[0], n_frames))
    offsets = row_offset_s(y_px, timing=timing)
    for offset_s in np.unique(offsets):
        time_s = timing.frame_start_s + offset_s
        first = np.searchsorted(time_s + timing.exposure_s, pulse_s, side="right")
        reached = first[:, None] + np.arange(n_after)
        inside = reached < n_frames
        reached = np.minimum(reached, n_frames - 1)
        inside &= timing.segment[reached] == timing.trial_segment[trial][:, None]
        which, _ = np.nonzero(inside)
        height = shape.frame_average(time_s[reached[inside]] - pulse_s[which], exposure_s=timing.exposure_s)
        courses = coo_array((height, (reached[inside], which)), shape=(n_frames, pulse_s.size)).tocsr()
        members = np.flatnonzero(offsets == offset_s)
        result[members] = (courses @ heights[members].T).T
    return result
