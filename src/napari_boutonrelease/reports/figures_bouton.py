"""One bouton on half a page: its whole trace, its trials overlaid, its amplitudes with the model, its estimates."""

from __future__ import annotations

import math

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from numpy.typing import NDArray

from ..analysis.results import AnalysisResult
from .facts import amplitude_grid, frame_interval_s, nothing_released, silent, texts, values
from .figures_page import Area, blank_figure, wrapped
from .figures_style import (
    EVOKED,
    FIT,
    HAIRLINE,
    HEAD,
    INK,
    MUTED,
    NULL,
    PULSE_2,
    SMALL,
    say_nothing_to_show,
    styled,
)
from .figures_trials import draw_trials
from .histogram import amplitude_histogram
from .words import MISSING, fixed, short, with_limits

BLOCK_MM = (178.0, 126.0)
_TRACE_BINS = 700
_QUANTITIES = {"m": "m (vesicles)", "n_sites": "n_sites", "p_site": "p_site", "q": "q (dF/F)"}


@styled
def figure_bouton(result: AnalysisResult, row: int) -> Figure:
    """Draw the block of the bouton in row `row` of the table."""
    figure = blank_figure(BLOCK_MM[0] + 8.0, BLOCK_MM[1] + 8.0)
    draw_bouton(Area.of(figure, margin=4.0), result, row)
    return figure


def draw_bouton(area: Area, result: AnalysisResult, row: int) -> None:
    """Draw the block of one bouton."""
    below = _draw_heading(area, result, row)
    _draw_trace(area.axes(14.0, below + 6.5, area.width - 30.0, 17.0), result, row)
    top, high = below + 40.5, 30.0
    draw_trials(area.axes(14.0, top, 42.0, high), result, row)
    _draw_histogram(area.axes(70.0, top, 50.0, high), result, row)
    _draw_release_estimates(area.axes(148.0, top, 29.0, high), result, row)
    foot = top + high + 11.0
    _write_estimates(area.part(0.0, foot, area.width, max(area.height - foot, 0.0)), result, row)


def _draw_heading(area: Area, result: AnalysisResult, row: int) -> float:
    """Write the name, the numbers to quote and the flags; return the y below."""
    boutons = result.boutons
    one = {name: float(values(boutons, name)[row]) for name in _HEADING_NUMBERS}
    area.rule(0.0, 0.0, area.width)
    area.text(0.0, 2.0, f"Bouton {one['bouton']:g}", size=HEAD + 1.0, weight="bold")
    place = f"{fixed(one['axon_um'], decimals=1)} µm along the axon" if math.isfinite(one["axon_um"]) else ""
    place = place or f"y {one['y_px']:.1f}, x {one['x_px']:.1f} px"
    trials = "" if math.isnan(one["trials"]) else f"{one['trials']:g} usable trials"
    found = texts(boutons, "found_by")[row]
    f0 = f"F0 {short(one['f0'], digits=3)} counts" if math.isfinite(one["f0"]) else ""
    about = [place, f"found by {found}" if found else "", f0, trials]
    area.text(27.0, 2.9, "   ·   ".join(part for part in about if part), color=MUTED)
    model = texts(boutons, "quantal_model")[row]
    quiet = bool(silent(result)[row])
    called = f"{one['p_called'] * one['trials']:.0f} of {one['trials']:g}" if one["trials"] > 0 else MISSING
    by_noise = f" (noise: {short(one['false_calls_expected'])})" if math.isfinite(one["false_calls_expected"]) else ""
    numbers = {
        "p_release": with_limits(one["p_release"], one["p_release_lo"], one["p_release_hi"]),
        "called": called + by_noise,
        "one vesicle q (dF/F)": MISSING if quiet else with_limits(one["q"], one["q_lo"], one["q_hi"], decimals=3),
        "noise_sd (dF/F)": fixed(one["noise_sd"], decimals=3),
        "paired-pulse ratio": with_limits(one["ppr"], one["ppr_lo"], one["ppr_hi"]),
        "release model": MISSING if quiet else _model_words(model, one["fit_p"]),
    }
    for x, (name, text) in zip((0.0, 29.0, 60.0, 95.0, 117.0, 151.0), numbers.items(), strict=True):
        area.text(x, 8.2, name, size=SMALL, color=MUTED)
        area.text(x, 11.3, text)
    flags = texts(boutons, "flags")[row].replace(";", ", ")
    return area.paragraph(
        0.0, 15.6, area.width, f"Flags: {flags}" if flags else "No flags.", color=FIT if flags else MUTED
    )


def _model_words(model: str, fit_p: float) -> str:
    return (model or MISSING) + (f", fit p {short(fit_p)}" if math.isfinite(fit_p) else "")


_HEADING_NUMBERS = (
    *("bouton", "axon_um", "y_px", "x_px", "trials", "f0", "fit_p", "p_release", "p_release_lo", "p_release_hi"),
    *("q", "q_lo", "q_hi", "noise_sd", "ppr", "ppr_lo", "ppr_hi", "p_called", "false_calls_expected"),
)


_MODEL_NUMBERS = ("noise_sd", "threshold", "n_sites", "p_site", "p_release", "q", "q_cv")


def _draw_trace(axes: Axes, result: AnalysisResult, row: int) -> None:
    """Draw the whole recording as an envelope, with the stimuli below and the calls above."""
    trace, unit = result.dff[row], "dF/F"
    if not np.isfinite(trace).any():
        trace, unit = result.f[row], "F (counts)"
    if not np.isfinite(trace).any():
        say_nothing_to_show(axes, "There is no trace of this bouton.")
        return
    axes.plot(*envelope(result.time_s, trace), color=INK, linewidth=0.45)
    axes.set_ylabel(unit)
    axes.set_xlabel("time (s)")
    axes.set_xlim(float(result.time_s[0]), float(result.time_s[-1]) + frame_interval_s(result))
    calls = amplitude_grid(result, "called")[row]
    strips = [("stimuli", -0.07, result.stimulus_s[np.isfinite(result.stimulus_s)], NULL)]
    if (calls == 1).any():
        strips.append(("calls", 1.08, result.stimulus_s[calls == 1], EVOKED))
    spontaneous = values(result.spontaneous, "bouton") == float(values(result.boutons, "bouton")[row])
    if spontaneous.any():
        strips.append(("spontaneous", 1.24, values(result.spontaneous, "time_s")[spontaneous], PULSE_2))
    axes.spines["bottom"].set_position(("axes", -0.13))
    for name, height, times, colour in strips:
        _draw_marks(axes, times, height, colour)
        axes.text(1.008, height, name, transform=axes.transAxes, va="center", fontsize=SMALL - 0.4, color=MUTED)


def _draw_marks(axes: Axes, times: NDArray[np.float64], height: float, colour: str) -> None:
    """Draw short upright marks at a height in axes units, all in one path so that thousands stay light."""
    x = np.repeat(times, 3)
    y = np.tile([height - 0.045, height + 0.045, np.nan], len(times))
    place = axes.get_xaxis_transform()
    axes.plot(x, y, color=colour, linewidth=0.8, transform=place, clip_on=False, solid_capstyle="butt")


def envelope(
    time_s: NDArray[np.float64], trace: NDArray[np.float64]
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Thin a long trace to the least and greatest value of each bin, so that no peak is lost.

    Parameters
    ----------
    time_s, trace : (n_frames,) ndarray
        Times and values; NaN values leave a gap.

    Returns
    -------
    times, envelope : (n,) ndarray
        The trace itself where it is short already.
    """
    n_bins = len(trace) // 2 if len(trace) <= 2 * _TRACE_BINS else _TRACE_BINS
    if len(trace) <= 2 * _TRACE_BINS:
        return time_s, trace
    size = -(-len(trace) // n_bins)
    padded = np.full(size * -(-len(trace) // size), np.nan)
    padded[: len(trace)] = trace
    bins = padded.reshape(-1, size)
    seen = np.isfinite(bins).any(axis=1)
    limits = np.full((len(bins), 2), np.nan)
    limits[seen] = np.stack([np.nanmin(bins[seen], axis=1), np.nanmax(bins[seen], axis=1)], axis=1)
    starts = time_s[::size]
    step = (time_s[-1] - time_s[0]) / max(len(bins), 1)
    return np.stack([starts, starts + 0.5 * step], axis=1).ravel(), limits.ravel()


def _draw_histogram(axes: Axes, result: AnalysisResult, row: int) -> None:
    """Draw amplitudes of pulse 1, amplitudes without stimulus, and the fitted model component by component."""
    one = {name: float(values(result.boutons, name)[row]) for name in _MODEL_NUMBERS}
    threshold = one.pop("threshold")
    histogram = amplitude_histogram(
        amplitude_grid(result, "amplitude")[row, :, 0],
        result.null_amplitude[row],
        trial_noise_sd=amplitude_grid(result, "amplitude_se")[row, :, 0],
        model=texts(result.boutons, "quantal_model")[row],
        **one,
    )
    if histogram is None:
        say_nothing_to_show(axes, "no amplitude")
        return
    edges = histogram.edges
    axes.stairs(histogram.evoked, edges, fill=True, color=EVOKED, alpha=0.28, label="evoked")
    if histogram.null.size:
        axes.stairs(histogram.null, edges, color=MUTED, linewidth=0.9, label="no stimulus, scaled")
    for component in histogram.components:
        axes.plot(histogram.fine, component, color=FIT, linewidth=0.6, linestyle=(0, (3, 1.5)))
    if len(histogram.components):
        axes.plot(histogram.fine, histogram.components.sum(axis=0), color=FIT, linewidth=1.2, label="model")
    if math.isfinite(threshold):
        axes.axvline(threshold, color=INK, linewidth=0.7, linestyle=":", label="threshold")
    axes.set_ylim(0.0, 1.08 * axes.dataLim.y1)
    axes.set_xlim(edges[0], edges[-1])
    axes.locator_params(axis="y", nbins=4, integer=True)
    axes.set_xlabel("amplitude of pulse 1 (dF/F)")
    axes.set_ylabel("trials")
    axes.legend(loc="lower left", bbox_to_anchor=(-0.02, 1.01), ncols=2, columnspacing=1.2, labelspacing=0.25)


def _draw_release_estimates(axes: Axes, result: AnalysisResult, row: int) -> None:
    """Draw every estimate of p_release side by side."""
    axes.set_title("p_release by method", loc="right", color=MUTED, fontsize=SMALL, pad=3)
    own = _estimates_of(result, row, "p_release")
    if not own:
        say_nothing_to_show(axes, "no estimate")
        return
    for place, (_, value, low, high) in enumerate(own):
        colour = EVOKED if place == 0 else MUTED
        if math.isfinite(low) and math.isfinite(high):
            axes.plot([low, high], [place, place], color=colour, linewidth=1.2)
        axes.plot(value, place, "o", color=colour, markersize=3.8)
    labels = ["\n".join(wrapped(method, 23.0, size=SMALL - 0.2)) for method, *_ in own]
    axes.set_yticks(range(len(own)), labels, fontsize=SMALL - 0.2)
    axes.tick_params(axis="y", length=0)
    axes.spines["left"].set_visible(False)
    axes.grid(axis="x", color=HAIRLINE, linewidth=0.5)
    axes.set_xlim(-0.02, 1.02)
    axes.set_xticks([0, 0.5, 1], ["0", "0.5", "1"])
    axes.set_ylim(len(own) - 0.5, -0.5)
    axes.set_xlabel("p_release")


def _estimates_of(result: AnalysisResult, row: int, quantity: str) -> list[tuple[str, float, float, float]]:
    frame = result.estimates
    if not len(frame):
        return []
    bouton = float(values(result.boutons, "bouton")[row])
    mine = frame[(values(frame, "bouton") == bouton) & (frame["quantity"] == quantity).to_numpy(dtype=bool)]
    numbers = zip(*(values(mine, name) for name in ("value", "lo", "hi")), strict=True)
    return [
        (method, float(value), float(low), float(high))
        for method, (value, low, high) in zip(texts(mine, "method"), numbers, strict=True)
        if math.isfinite(value)
    ]


def _write_estimates(area: Area, result: AnalysisResult, row: int) -> None:
    """Write the estimates of the quantal parameters, a line a method."""
    found = {quantity: {entry[0]: entry for entry in _estimates_of(result, row, quantity)} for quantity in _QUANTITIES}
    methods = list(dict.fromkeys(method for entries in found.values() for method in entries))
    methods.sort(key=lambda method: "bouton" not in method)  # the model's own fits first, classical estimates below
    if silent(result)[row]:
        _write_limit(area, result, row)
        return
    if not methods:
        return
    left = [0.0, *(52.0 + 32.0 * i for i in range(len(_QUANTITIES)))]
    for x, head in zip(left, ("method", *_QUANTITIES.values()), strict=True):
        area.text(x, 0.0, head, size=SMALL, color=MUTED)
    area.rule(0.0, 3.6, area.width)
    room = max(int((area.height - 4.0) / 3.4), 1)
    for line, method in enumerate(methods[:room]):
        y = 4.4 + 3.4 * line
        area.text(left[0], y, wrapped(method, 50.0, size=SMALL)[0], size=SMALL)
        for x, quantity in zip(left[1:], _QUANTITIES, strict=True):
            entry = found[quantity].get(method)
            decimals = {"q": 3, "n_sites": 0}.get(quantity, 2)
            exact = entry is not None and entry[1] == entry[2] == entry[3]
            text = MISSING if entry is None else with_limits(*entry[1:], decimals=decimals)
            text = fixed(entry[1], decimals=decimals) if entry and exact else text
            area.text(x, y, text, size=SMALL, color=INK if entry else NULL)


def _write_limit(area: Area, result: AnalysisResult, row: int) -> None:
    """Say what is known of a bouton that shows no release, and what is not."""
    high, low_q, high_q = (float(values(result.boutons, name)[row]) for name in ("p_release_hi", "q_lo", "q_hi"))
    text = "No release was seen."
    if math.isfinite(high) and math.isfinite(low_q):
        whose = "of an assumed size" if nothing_released(result) else "as the axon's other boutons have them"
        sizes = f"{fixed(low_q, decimals=3)} to {fixed(high_q, decimals=3)} dF/F"
        text += f" The 95 % interval of p_release ends at {fixed(high)}, for vesicles {whose} ({sizes})."
    text += " This bouton's own vesicles, release sites and paired-pulse ratio cannot be known."
    area.paragraph(0.0, 0.0, area.width, text, color=MUTED)
