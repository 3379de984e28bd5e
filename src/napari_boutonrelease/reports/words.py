"""Numbers and results as words that a reader can quote."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING

import numpy as np

from .facts import fact, nothing_released, number, silent, texts, values

if TYPE_CHECKING:
    from collections.abc import Iterable

    from numpy.typing import NDArray

    from ..analysis.results import AnalysisResult

MISSING = "–"
_NO_LIMIT = 1000  # an upper end beyond it says only that there is none

STANDING_CAUTIONS = (
    "Boutons found by their responses release more than boutons do on average: a mean over them overstates p_release.",
    "The number of release sites is only as good as one vesicle is large against the noise: quote the set of numbers "
    "that the data cannot exclude, not the single most likely one.",
    "Intervals are 95 % intervals of one bouton's estimate; of many such intervals, one in twenty misses.",
)
"""What holds for every recording, beyond what its own cautions say."""


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


def expected_count(count: float) -> str:
    """Write how many to expect; what is practically none is not written out.

    Examples
    --------
    >>> expected_count(1.234), expected_count(3e-9), expected_count(float("nan"))
    ('1.2', '<0.01', '–')
    """
    return "<0.01" if 0 < count < 0.01 else short(count)


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
    >>> with_limits(1.2, 0.4, math.inf), with_limits(2, 0, 3e9, decimals=0)
    ('1.20 (0.40 to ∞)', '2 (0–over 1000)')
    """
    text = fixed(value, decimals=decimals)
    if not math.isfinite(low) or math.isnan(high):
        return text
    if math.isinf(high):
        return f"{text} ({fixed(low, decimals=decimals)} to ∞)"
    dash = "–" if low >= 0 else " to "  # next to a minus, a dash would be misread
    upper = fixed(high, decimals=decimals) if high < _NO_LIMIT else f"over {_NO_LIMIT}"
    return f"{text} ({fixed(low, decimals=decimals)}{dash}{upper})"


def counted(count: float, noun: str, plural: str | None = None) -> str:
    """Write a count with its noun.

    Examples
    --------
    >>> counted(1, "bouton"), counted(9, "bouton")
    ('1 bouton', '9 boutons')
    """
    return f"{count:g} {noun if count == 1 else plural or noun + 's'}"


def duration(time_s: float, *, digits: int = 2) -> str:
    """Write a time in the unit that suits it.

    Examples
    --------
    >>> duration(0.0032), duration(6.094)
    ('3.2 ms', '6.1 s')
    """
    return f"{short(time_s, digits=digits)} s" if time_s >= 1.0 else f"{short(1e3 * time_s, digits=digits)} ms"


def ranges(numbers: Iterable[int]) -> str:
    """Write whole numbers with runs of them drawn together.

    Examples
    --------
    >>> ranges([1, 2, 3, 5]), ranges([2, 3]), ranges([4])
    ('1–3, 5', '2, 3', '4')
    """
    runs: list[list[int]] = []
    for one in sorted(numbers):
        if runs and one == runs[-1][-1] + 1:
            runs[-1].append(one)
        else:
            runs.append([one])
    parts = [f"{run[0]}–{run[-1]}" if len(run) > 2 else ", ".join(map(str, run)) for run in runs]
    return ", ".join(parts)


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

    def time(name: str, path: str) -> list[tuple[str, str]]:
        value = number(result, path)
        return [(name, duration(value, digits=3))] if math.isfinite(value) else []

    height, width, frames = (number(result, f"recording.{key}") for key in ("height_px", "width_px", "frames"))
    size = [("Movie", f"{frames:g} frames of {height:g} × {width:g} px")] if frames > 0 and height > 0 else []
    return [
        *size,
        *time("Frame interval", "recording.frame_interval_s"),
        *time("Exposure", "recording.exposure_s"),
        *entry("Pixel size", "recording.pixel_size_um", "µm"),
        *time("Pulse interval", "recording.pulse_interval_s"),
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
    if nothing_released(result):
        return [_nothing_released_sentence(result)]
    sentences = _population_sentences(result)
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
        ratio = _between(result, "population.ppr")
        sentences.append(f"The paired-pulse ratio of all boutons together is {ratio}; {_verdict_words(result)}.")
    sentences += _train_sentences(result)
    sentences += _axon_sentences(result)
    return [*sentences, *_silent_sentences(result)]


def _nothing_released_sentence(result: AnalysisResult) -> str:
    everyone = np.flatnonzero(silent(result))
    return f"No release was seen at any of {counted(len(everyone), 'bouton')}{_limits(result, everyone)}."


def _silent_sentences(result: AnalysisResult) -> list[str]:
    rows = np.flatnonzero(silent(result))
    if not rows.size:
        return []
    bouton, shows = ("Bouton", "shows") if len(rows) == 1 else ("Boutons", "show")
    ids = listed(f"{one:g}" for one in values(result.boutons, "bouton")[rows])
    return [f"{bouton} {ids} {shows} no release{_limits(result, rows)}."]


def _limits(result: AnalysisResult, rows: NDArray[np.intp]) -> str:
    """Say up to where p_release may reach at boutons that show no release."""
    limits = values(result.boutons, "p_release_hi")[rows]
    limits = limits[np.isfinite(limits)]
    if not limits.size:
        return ""
    low, high = fixed(float(limits.min())), fixed(float(limits.max()))
    interval = "interval" if len(rows) == 1 else "intervals"
    end = ("ends" if len(rows) == 1 else "end") + (f" at {low}" if low == high else f" between {low} and {high}")
    return f"; the 95 % {interval} of p_release {end}"


def _population_sentences(result: AnalysisResult) -> list[str]:
    """Say the mean p_release, and beside it that of the boutons found by their responses where it differs."""
    measured = int(np.isfinite(values(result.boutons, "p_release")).sum())
    if not measured:
        return ["p_release could be measured at no bouton; the flags say why."]
    if not math.isfinite(number(result, "population.p_release")):
        return [f"p_release was measured at {counted(measured, 'bouton')}; no mean over them is given."]
    count = number(result, "population.boutons")
    over = f" over {counted(count, 'bouton')}" if math.isfinite(count) else ""
    selection = fact(result, "population.selection")
    chosen = f" ({selection})" if selection else ""
    sentences = [f"Mean p_release is {_between(result, 'population.p_release')}{over}{chosen}."]
    if selected_differ(result):
        found = counted(number(result, "population.boutons_found_by_responses"), "bouton")
        mean = _between(result, "population.p_release_found_by_responses")
        sentences.append(
            f"Over the {found} found by their responses it is {mean}. This mean is too high where the other spots are "
            "boutons, the mean over all too low where they are none."
        )
    return sentences + _corrected_sentences(result)


def _corrected_sentences(result: AnalysisResult) -> list[str]:
    """Say the mean corrected for boutons that the detection missed, and of which it speaks."""
    if not math.isfinite(number(result, "selection.p_release")):
        return []
    smallest = short(number(result, "selection.smallest_p_release"))
    return [
        f"Corrected for boutons that were missed, mean p_release is {_between(result, 'selection.p_release')} over "
        f"boutons with p_release above {smallest}; of those below, silent ones among them, nothing can be inferred."
    ]


def selection_sentences(result: AnalysisResult) -> list[str]:
    """Say which boutons the detection finds, how many it missed, and the mean corrected for that."""
    half, most = (number(result, f"selection.p_found_{name}") for name in ("half", "most"))
    sentences = []
    if math.isfinite(half):
        nearly = f", and 95 % with {short(most)}" if math.isfinite(most) else "; 95 % with none"
        sentences.append(f"In this recording, 50 % of boutons are found with p_release {short(half)}{nearly}.")
    missed = number(result, "selection.missed_per_found")
    if math.isfinite(missed):
        boutons = counted(number(result, "selection.boutons"), "bouton")
        between = _between(result, "selection.missed_per_found")
        sentences.append(
            f"For each bouton found by its responses, {between} are expected to have been missed ({boutons} found, "
            f"mean p_release of these {fixed(number(result, 'selection.p_release_found'))})."
        )
    return sentences + _corrected_sentences(result)


def selected_differ(result: AnalysisResult) -> bool:
    """Whether some, but not all, of the measured boutons were found by their responses."""
    selected = number(result, "population.boutons_found_by_responses")
    return 0 < selected < number(result, "population.boutons")


def _train_sentences(result: AnalysisResult) -> list[str]:
    """Say where trains settle and how fast release recovers, of all boutons together."""
    sentences = []
    if math.isfinite(number(result, "train.steady_ratio")):
        sentence = f"Over the train, responses settle at {_between(result, 'train.steady_ratio')} of the first"
        if number(result, "train.tau_rec_s") > 0:
            sentence += f"; what is used comes back with {_time_between(result, 'train.tau_rec_s')}"
        sentences.append(sentence + ".")
    for name, does in (("facilitation", "Facilitation wears off"), ("depression", "Depression recovers")):
        if number(result, f"pulse_intervals.{name}_s") > 0:
            time = _time_between(result, f"pulse_intervals.{name}_s")
            sentences.append(f"{does} between pulses with {time}.")
    return sentences


def _time_between(result: AnalysisResult, path: str) -> str:
    value, low, high = (number(result, path + end) for end in ("", "_lo", "_hi"))
    text = f"a time constant of {duration(value)}"
    if math.isfinite(low) and math.isfinite(high):
        return f"{text} (95 % interval {duration(low)} to {duration(high)})"
    return f"{text} (at least {duration(low)} at 95 %, without an upper limit)" if low > 0 else text


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
        doubt = f" This is too many ({p_words(p)}): suspect failed stimulation." if p < 0.05 else ""
        stimuli = "stimulus" if fixed(failed, decimals=0) == "1" else "stimuli"
        sentences.append(
            f"Every bouton failed at {fixed(failed, decimals=0)} {stimuli}; independent boutons would do so at "
            f"{expected_count(expected)}.{doubt}"
        )
    return sentences


def _verdict_words(result: AnalysisResult) -> str:
    verdicts = texts(result.boutons, "paired_pulse")
    counts = [(name, verdicts.count(name)) for name in ("facilitation", "depression", "unresolved")]
    if not any(count for name, count in counts if name != "unresolved"):
        return "at no single bouton is it beyond doubt other than 1"
    return f"bouton by bouton: {listed(f'{count} {name}' for name, count in counts if count)}"


def _between(result: AnalysisResult, path: str, *, decimals: int = 2) -> str:
    value, low, high = (number(result, path + end) for end in ("", "_lo", "_hi"))
    text = fixed(value, decimals=decimals)
    if math.isfinite(low) and math.isfinite(high):
        text += f" (95 % interval {fixed(low, decimals=decimals)} to {fixed(high, decimals=decimals)})"
    return text


def _shape_words(result: AnalysisResult) -> str:
    shape = result.shape
    source = {"protocol": "given in the protocol", "recording": "fitted to this recording", "assumed": "assumed"}
    times = f"rise {duration(shape.rise_s)}, decay {duration(shape.decay_s)}"
    return f"{times}, {source.get(result.shape_from, result.shape_from)}"


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
