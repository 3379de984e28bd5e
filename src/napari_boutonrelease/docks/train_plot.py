"""A train pulse by pulse, its amplitudes summed up, and the paired-pulse ratio against the pulse interval."""

from __future__ import annotations

from typing import Any, Literal

import numpy as np
import pandas as pd
from matplotlib.axes import Axes
from numpy.typing import NDArray

from ..analysis.fitted_curves import ratio_curve
from ..reports.facts import values
from ..reports.words import duration, fixed, with_limits
from .live_plot import LivePlot
from .panel import Panel
from .plots import Palette

Numbers = dict[str, float]
_SMOOTH = 120


class TrainPlot(LivePlot):
    """Mean amplitude, or p_release, against the pulse number.

    Parameters
    ----------
    panel : Panel
        The dock.
    quantity : str
        Which of the two.
    """

    margins_px = (54.0, 16.0, 10.0, 34.0)

    def __init__(self, panel: Panel, *, quantity: Literal["amplitude", "p_release"]) -> None:
        self._quantity = quantity
        self._pulses: pd.DataFrame | None = None
        self._curve: NDArray[np.float64] = np.empty(0)
        self._words = ""
        super().__init__(panel, height_px=90)

    def show_pulses(
        self, pulses: pd.DataFrame | None, *, curve: NDArray[np.float64] | None = None, words: str = ""
    ) -> None:
        """Show the rows of one bouton of the table of pulses, and a fitted curve with its words."""
        self._pulses, self._words = pulses, words
        self._curve = np.empty(0) if curve is None else curve
        self.refill()

    def make(self, axes: Axes, palette: Palette) -> None:
        """Make the artists."""
        colour, marker = (palette.evoked, "o") if self._quantity == "amplitude" else (palette.fit, "s")
        (self._bars,) = axes.plot([], [], color=colour, linewidth=1.0)
        (self._line,) = axes.plot([], [], color=colour, linewidth=1.2, marker=marker, markersize=3.6)
        (self._model,) = axes.plot([], [], color=palette.fit, linewidth=1.2, linestyle="--")
        axes.axhline(0.0, color=palette.hairline, linewidth=0.8, zorder=0)
        axes.set_xlabel("pulse")
        axes.set_ylabel("mean dF/F" if self._quantity == "amplitude" else "p_release")
        self._title = axes.set_title("", loc="right", fontsize=6.5, pad=2, color=palette.fit)

    def fill(self, axes: Axes) -> None:
        """Show the means with their errors, or the probabilities with their intervals."""
        pulses = self._pulses
        self.say("" if pulses is not None and len(pulses) else "no bouton selected")
        if pulses is None or not len(pulses):
            return
        at = values(pulses, "pulse")
        if self._quantity == "amplitude":
            value, error = values(pulses, "amplitude_mean"), values(pulses, "amplitude_se")
            low, high = value - error, value + error
        else:
            value, low, high = (values(pulses, name) for name in ("p_release", "p_release_lo", "p_release_hi"))
        self._line.set_data(at, value)
        self._line.set_linestyle("none" if self._curve.size else "-")
        _set_bars(self._bars, at, low, high)
        self._model.set_data(np.arange(1, self._curve.size + 1), self._curve)
        self._title.set_text(self._words)
        axes.set_xlim(0.4, at.max() + 0.6)
        axes.locator_params(axis="x", integer=True)
        if self._quantity == "p_release":
            axes.set_ylim(-0.03, 1.03)
            axes.set_yticks([0.0, 0.5, 1.0], ["0", "0.5", "1"])
        else:
            _reach(axes, low, high, value, self._curve)


class CumulativePlot(LivePlot):
    """Amplitudes summed up from pulse to pulse, with the line that meets pulse 1 at the pool."""

    margins_px = (54.0, 22.0, 10.0, 34.0)

    def __init__(self, panel: Panel) -> None:
        self._pulses: pd.DataFrame | None = None
        self._train: Numbers = {}
        self._note = ""
        super().__init__(panel)
        self.setToolTip(
            "Mean of the amplitudes summed up to each pulse, ± standard error. The line through the late ones meets "
            "pulse 1 at the releasable pool, with its 95 % interval."
        )

    def show_train(self, pulses: pd.DataFrame, train: Numbers, note: str) -> None:
        """Show one bouton: its rows of the table of pulses, its row of the table of trains, and the note there."""
        self._pulses, self._train, self._note = pulses, train, note
        self.refill()

    def make(self, axes: Axes, palette: Palette) -> None:
        """Make the artists."""
        (self._bars,) = axes.plot([], [], color=palette.evoked, linewidth=1.0)
        (self._dots,) = axes.plot([], [], color=palette.evoked, linestyle="none", marker="o", markersize=3.6)
        (self._line,) = axes.plot([], [], color=palette.fit, linewidth=1.2, linestyle="--")
        (self._interval,) = axes.plot([], [], color=palette.fit, linewidth=1.6)
        (self._pool,) = axes.plot([], [], color=palette.fit, linestyle="none", marker="D", markersize=4.5)
        axes.set_xlabel("pulse")
        axes.set_ylabel("cumulative dF/F")
        self._title = axes.set_title("", loc="right", fontsize=7.0, pad=3)

    def fill(self, axes: Axes) -> None:
        """Show the sums and the pool, or why there is none."""
        pulses, train = self._pulses, self._train
        total = np.empty(0) if pulses is None else values(pulses, "cumulative_mean")
        self.say("" if np.isfinite(total).any() else "no complete train")
        if pulses is None or not np.isfinite(total).any():
            return
        at, error = values(pulses, "pulse"), values(pulses, "cumulative_se")
        self._dots.set_data(at, total)
        _set_bars(self._bars, at, total - error, total + error)
        pool, low, high = (train.get(f"pool{end}", np.nan) for end in ("", "_lo", "_hi"))
        known = bool(np.isfinite(pool))
        ends = np.array([1.0, at.max()]) if known else np.empty(0)
        line = pool + train.get("replenished", np.nan) * (ends - 1.0)
        self._line.set_data(ends, line)
        self._pool.set_data(ends[:1], line[:1])
        self._interval.set_data([1.0, 1.0] if known else [], [low, high] if known else [])
        self._title.set_text(f"pool {with_limits(pool, low, high)}" if known else _first_part(self._note))
        axes.set_xlim(0.4, at.max() + 0.6)
        axes.locator_params(axis="x", integer=True)
        _reach(axes, total - error, total + error, line, np.array([min(high, 2 * float(np.nanmax(total)))]))


class IntervalPlot(LivePlot):
    """Paired-pulse ratio against the pulse interval, with the chosen time course."""

    margins_px = (46.0, 22.0, 10.0, 34.0)

    def __init__(self, panel: Panel) -> None:
        self._intervals: pd.DataFrame | None = None
        self._recovery: Numbers = {}
        self._words = ""
        super().__init__(panel)
        self.setToolTip("Ratio of the mean amplitudes at each pulse interval, with 95 % intervals, and its time course")

    def show_intervals(self, intervals: pd.DataFrame, recovery: Numbers, model: str) -> None:
        """Show one bouton: its rows of the table of intervals, and its row of the table of recovery with the model."""
        self._intervals, self._recovery = intervals, recovery
        self._words = model if model in ("", "constant", "none") else _course_words(recovery)
        self.refill()

    def make(self, axes: Axes, palette: Palette) -> None:
        """Make the artists."""
        axes.set_xscale("log")
        axes.axhline(1.0, color=palette.hairline, linewidth=0.8, zorder=0)
        (self._bars,) = axes.plot([], [], color=palette.evoked, linewidth=1.0)
        (self._dots,) = axes.plot([], [], color=palette.evoked, linestyle="none", marker="o", markersize=4.0)
        (self._curve,) = axes.plot([], [], color=palette.fit, linewidth=1.3)
        axes.set_xlabel("pulse interval (s)")
        axes.set_ylabel("pulse 2 / pulse 1")
        self._title = axes.set_title("", loc="right", fontsize=7.0, pad=3, color=palette.fit)

    def fill(self, axes: Axes) -> None:
        """Show ratios and time course."""
        table = self._intervals
        ratio = np.empty(0) if table is None else values(table, "ppr")
        self.say("" if np.isfinite(ratio).any() else "no ratio at any interval")
        if table is None or not np.isfinite(ratio).any():
            return
        gap, low, high = (values(table, name) for name in ("interval_s", "ppr_lo", "ppr_hi"))
        self._dots.set_data(gap, ratio)
        top = 3.0 * float(np.nanmax(ratio))  # an interval without an end must not make a line of all others
        _set_bars(self._bars, gap, np.maximum(low, 0.0), np.minimum(high, top))
        smooth = np.geomspace(gap.min() / 1.2, gap.max() * 1.2, _SMOOTH)
        curve = np.full(_SMOOTH, np.nan) if self._words in ("", "none") else ratio_curve(self._recovery, smooth)
        self._curve.set_data(smooth, curve)
        self._title.set_text({"none": "", "constant": "no time course"}.get(self._words, self._words))
        axes.set_xlim(gap.min() / 1.4, gap.max() * 1.4)
        axes.set_xticks(gap, [f"{one:.3g}" for one in gap])
        axes.minorticks_off()
        _reach(axes, np.zeros(1), np.minimum(high, top), ratio, curve)


def numbers_of(table: pd.DataFrame, bouton: int) -> tuple[Numbers, dict[str, str]]:
    """Return the numbers and the texts of a bouton's row; both are empty where it has none."""
    mine = table[table["bouton"] == bouton]
    if not len(mine):
        return {}, {}
    numbers, words = {}, {}
    for name in mine.columns:
        value = mine[name].iloc[0]
        if isinstance(value, str):
            words[name] = value
        else:
            numbers[name] = float(values(mine[[name]], name)[0]) if not pd.isna(value) else np.nan
    return numbers, words


def train_words(train: Numbers) -> str:
    """Name the parameters of the model of a train."""
    if not np.isfinite(train.get("u", np.nan)):
        return ""
    parts = [f"u {fixed(train['u'])}"]
    parts += [
        f"{name} {duration(train[key])}"
        for key, name in (("tau_rec_s", "recovery"), ("tau_facil_s", "facilitation"))
        if train[key] > 0
    ]
    return ", ".join(parts)


def _course_words(recovery: Numbers) -> str:
    parts = []
    for name in ("facilitation", "depression"):
        size, time_s = recovery.get(name, np.nan), recovery.get(f"{name}_s", np.nan)
        if np.isfinite(size):
            parts.append(f"{name} {fixed(size)}" + (f", {duration(time_s)}" if np.isfinite(time_s) else ""))
    return "; ".join(parts)


def _first_part(note: str) -> str:
    return note.split(";")[0] or "no pool"


def _set_bars(line: Any, at: NDArray[np.float64], low: NDArray[np.float64], high: NDArray[np.float64]) -> None:
    gap = np.full(len(at), np.nan)
    line.set_data(np.column_stack([at, at, at]).ravel(), np.column_stack([low, high, gap]).ravel())


def _reach(axes: Axes, *shown: NDArray[np.float64]) -> None:
    """Let the axes begin at zero, or below where there is something, and reach over all."""
    known = np.concatenate([np.asarray(one, dtype=np.float64).ravel() for one in shown])
    known = known[np.isfinite(known)]
    if known.size:
        top, bottom = float(known.max()), min(float(known.min()), 0.0)
        axes.set_ylim(bottom - 0.05 * (top - bottom), top + 0.1 * ((top - bottom) or 1.0))
