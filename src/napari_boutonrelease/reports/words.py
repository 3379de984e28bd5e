"""Numbers and results as words that a reader can quote."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING

import numpy as np

from .facts import fact, number, texts, values

if TYPE_CHECKING:
    from collections.abc import Iterable

    from ..analysis.results import AnalysisResult

MISSING = "–"

STANDING_CAUTIONS = (
    "A reporter's dF/F is not transmitter: a reporter near saturation compresses large responses and hides the "
    "release of several vesicles at once.",
    "Boutons found by their responses release more than boutons do on average: a mean over them overstates p_release.",
    "The number of release sites is only as good as one vesicle is large against the noise: quote the set of numbers "
    "that the data cannot exclude, not the single most likely one.",
    "Intervals are 95 % intervals of one bouton's estimate; of many such intervals, one in twenty misses.",
    "Results are for research, not for diagnosis.",
)


def short(value: float, *, digits: int = 2) -> str:
    """Write a number with so many significant digits, or a dash.

    Examples
    --------
    >>> short(0.04217), short(1234.0), short(float("nan"))
    ('0.042', '1234', '–')
    """
    if value is None or not math.isfinite(value):
        return MISSING
    if value == 0:
        return "0"
    decimals = max(digits - 1 - math.floor(math.log10(abs(value))), 0)
    return f"{value:.{decimals}f}".replace("-", "−")


def fixed(value: float, *, decimals: int = 2) -> str:
    """Write a number with so many decimals, or a dash.

    Examples
    --------
    >>> fixed(0.5), fixed(-0.001), fixed(float("nan"))
    ('0.50', '0.00', '–')
    """
    if value is None or not math.isfinite(value):
        return MISSING
    text = f"{value:.{decimals}f}"
    return f"{0.0:.{decimals}f}" if float(text) == 0 else text.replace("-", "−")


def with_limits(value: float, low: float, high: float, *, decimals: int = 2) -> str:
    """Write a number with its interval, as tables do.

    Examples
    --------
    >>> with_limits(0.42, 0.31, 0.53), with_limits(0.02, -0.01, 0.05)
    ('0.42 (0.31–0.53)', '0.02 (−0.01 to 0.05)')
    """
    text = fixed(value, decimals=decimals)
    if not (math.isfinite(low) and math.isfinite(high)):
        return text
    dash = "–" if low >= 0 else " to "  # next to a minus, a dash would be misread
    return f"{text} ({fixed(low, decimals=decimals)}{dash}{fixed(high, decimals=decimals)})"


def counted(count: float, noun: str, plural: str | None = None) -> str:
    """Write a count with its noun.

    Examples
    --------
    >>> counted(1, "bouton"), counted(9, "bouton")
    ('1 bouton', '9 boutons')
    """
    return f"{count:g} {noun if count == 1 else plural or noun + 's'}"


def p_words(p: float) -> str:
    """Write a p-value, with spaces that do not break.

    Examples
    --------
    >>> p_words(0.0213).replace(chr(160), " ")
    'p = 0.021'
    """
    return "p\u00a0<\u00a00.001" if p < 0.001 else f"p\u00a0=\u00a0{short(p)}"


def listed(items: Iterable[object]) -> str:
    """Join items as a sentence does.

    Examples
    --------
    >>> listed([1, 2, 5])
    '1, 2 and 5'
    """
    names = [str(item) for item in items]
    return " and ".join([", ".join(names[:-1]), names[-1]] if len(names) > 1 else names)


def recording_line(result: AnalysisResult) -> str:
    """Say in one line what was recorded."""
    trials, pulses = result.stimulus_s.shape
    interval, duration = number(result, "recording.frame_interval_s"), number(result, "recording.duration_s")
    parts = [counted(len(result.boutons), "bouton"), f"{counted(trials, 'trial')} of {counted(pulses, 'pulse')}"]
    if math.isfinite(duration):
        parts.append(f"{short(duration, digits=3)} s")
    if interval > 0:
        parts.append(f"{short(1 / interval, digits=3)} frames/s")
    return "   ·   ".join(parts)


def recording_facts(result: AnalysisResult) -> list[tuple[str, str]]:
    """List what was recorded and how well, by name; what is not known is left out."""

    def entry(name: str, path: str, unit: str, factor: float = 1.0, digits: int = 3) -> list[tuple[str, str]]:
        value = number(result, path)
        return [(name, f"{short(factor * value, digits=digits)} {unit}".strip())] if math.isfinite(value) else []

    height, width, frames = (number(result, f"recording.{key}") for key in ("height_px", "width_px", "frames"))
    size = [("Movie", f"{frames:g} frames of {height:g} × {width:g} px")] if frames > 0 and height > 0 else []
    return [
        *size,
        *entry("Frame interval", "recording.frame_interval_s", "ms", 1e3),
        *entry("Exposure", "recording.exposure_s", "ms", 1e3),
        *entry("Pixel size", "recording.pixel_size_um", "µm"),
        *entry("Pulse interval", "recording.pulse_interval_s", "ms", 1e3),
        *entry("Gain", "quality.gain", "counts per electron"),
        *entry("Read noise", "quality.read_noise_counts", "counts"),
        *entry("Light lost by bleaching", "quality.bleaching", "%", 100.0, 2),
        *entry("Largest movement", "quality.drift_max_px", "px", 1.0, 2),
        *entry("Frames left out", "quality.frames_left_out", "", 1.0, 1),
        *entry("Saturated pixels", "quality.saturated_px", "", 1.0, 1),
        ("Response shape", _shape_words(result)),
    ]


def headlines(result: AnalysisResult) -> list[str]:
    """Say the main results in sentences, each with its interval."""
    if not len(result.boutons):
        return ["No bouton was found or given, so there is nothing to report beyond the quality of the recording."]
    sentences = [_population_sentence(result)]
    if math.isfinite(number(result, "heterogeneity.sd")):
        p = number(result, "heterogeneity.p")
        differ = "differ in p_release" if p < 0.05 else "may all share one p_release"
        tail = f", {p_words(p)}" if math.isfinite(p) else ""
        sentences.append(
            f"Boutons {differ}: true SD between them {_between(result, 'heterogeneity.sd')}, sampling taken out{tail}."
        )
    if math.isfinite(number(result, "population.q")):
        sentences.append(f"One vesicle gives {_between(result, 'population.q', decimals=3)} dF/F.")
    if math.isfinite(number(result, "population.ppr")):
        sentences.append(f"The paired-pulse ratio is {_between(result, 'population.ppr')}; {_verdict_counts(result)}.")
    sentences += _axon_sentences(result)
    silent = [int(b) for b, codes in _flagged(result) if "silent" in codes]
    if silent:
        bouton = "Bouton" if len(silent) == 1 else "Boutons"
        verb = "shows" if len(silent) == 1 else "show"
        sentences.append(f"{bouton} {listed(silent)} {verb} no release: p_release is an upper limit there.")
    return sentences


def _population_sentence(result: AnalysisResult) -> str:
    measured = int(np.isfinite(values(result.boutons, "p_release")).sum())
    if not measured:
        return "p_release could be measured at no bouton; the flags say why."
    if not math.isfinite(number(result, "population.p_release")):
        return f"p_release was measured at {counted(measured, 'bouton')}; no mean over them is given."
    count = number(result, "population.boutons")
    over = f" over {counted(count, 'bouton')}" if math.isfinite(count) else ""
    selection = fact(result, "population.selection")
    chosen = f" ({selection})" if selection else ""
    return f"Mean p_release is {_between(result, 'population.p_release')}{over}{chosen}."


def _axon_sentences(result: AnalysisResult) -> list[str]:
    sentences = []
    moran, moran_p = number(result, "morans_i.value"), number(result, "morans_i.p")
    if math.isfinite(moran) and math.isfinite(moran_p):
        alike = "alike" if moran > 0 else "unlike"
        verdict = f"are {alike}" if moran_p < 0.05 else "are no more alike than chance"
        sentences.append(f"Neighbours along the axon {verdict} (Moran's I {fixed(moran)}, {p_words(moran_p)}).")
    together_p = number(result, "co_release.p")
    if math.isfinite(together_p):
        verdict = (
            "do not release independently" if together_p < 0.05 else "release independently, as far as can be seen"
        )
        sentences.append(f"Trial by trial, boutons {verdict} ({p_words(together_p)}).")
    failed, expected = number(result, "stimulus_failures.trials"), number(result, "stimulus_failures.expected")
    if math.isfinite(failed) and math.isfinite(expected):
        p = number(result, "stimulus_failures.p")
        doubt = " This is too many: suspect failed stimulation." if p < 0.05 else ""
        sentences.append(
            f"Every bouton failed in {counted(failed, 'trial')}; independent boutons would do so in "
            f"{short(expected)}.{doubt}"
        )
    return sentences


def _verdict_counts(result: AnalysisResult) -> str:
    verdicts = texts(result.boutons, "paired_pulse")
    counts = [(name, verdicts.count(name)) for name in ("facilitation", "depression", "unresolved")]
    return listed(f"{count} {name}" for name, count in counts) + " among the boutons"


def _between(result: AnalysisResult, path: str, *, decimals: int = 2) -> str:
    value, low, high = (number(result, path + end) for end in ("", "_lo", "_hi"))
    text = fixed(value, decimals=decimals)
    if math.isfinite(low) and math.isfinite(high):
        text += f" (95 % interval {fixed(low, decimals=decimals)} to {fixed(high, decimals=decimals)})"
    return text


def _shape_words(result: AnalysisResult) -> str:
    shape = result.shape
    source = {"protocol": "given in the protocol", "recording": "fitted to this recording", "assumed": "assumed"}
    return (
        f"rise {short(1e3 * shape.rise_s)} ms, decay {short(1e3 * shape.decay_s)} ms, "
        f"{source.get(result.shape_from, result.shape_from)}"
    )


def _flagged(result: AnalysisResult) -> list[tuple[float, list[str]]]:
    return [
        (bouton, text.split(";"))
        for bouton, text in zip(values(result.boutons, "bouton"), texts(result.boutons, "flags"), strict=True)
        if text
    ]


def flag_holders(result: AnalysisResult) -> dict[str, list[int]]:
    """Return each flag that occurs and the boutons that carry it."""
    holders: dict[str, list[int]] = {}
    for bouton, codes in _flagged(result):
        for code in codes:
            holders.setdefault(code, []).append(int(bouton))
    return holders
