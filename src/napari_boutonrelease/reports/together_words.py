"""What the boutons of an axon show together, in sentences with numbers; where it cannot be said, why."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING

from .facts import fact, number
from .words import counted, expected_count, fixed, p_words, selection_sentences, short, with_limits

if TYPE_CHECKING:
    from ..analysis.results import AnalysisResult

MISSED = "Missed boutons"


def together_facts(result: AnalysisResult) -> list[tuple[str, str]]:
    """List what can be said of the boutons together, by title; titles of which nothing is known are left out."""
    facts = [
        ("Spread between boutons", spread_words(result)),
        ("Along the axon", distance_words(result)),
        ("Release in common", co_release_words(result)),
        ("Stimulus by stimulus", stimuli_words(result)),
    ]
    if number(result, "recording.pulses") > 1:
        facts.append(("Release and paired-pulse ratio", split_half_words(result)))
    missed = selection_sentences(result)
    if missed:
        facts.append((MISSED, " ".join(missed)))
    elif fact(result, "selection.method"):
        facts.append((MISSED, why_not(result, "selection.method")))
    return facts


def spread_words(result: AnalysisResult) -> str:
    """Say how much boutons truly differ in p_release."""
    sd = number(result, "heterogeneity.sd")
    if not math.isfinite(sd):
        return why_not(result, "heterogeneity.method")
    p = number(result, "heterogeneity.p")
    test = f" That all share one p_release: {p_words(p)}." if math.isfinite(p) else ""
    return (
        f"True SD of p_release between boutons: {fixed(sd)}{_interval(result, 'heterogeneity.sd')}, sampling taken out "
        f"(beta-binomial).{test}"
    )


def co_release_words(result: AnalysisResult) -> str:
    """Say whether boutons release independently of one another."""
    mean, low, high = (number(result, f"co_release.{key}") for key in ("value", "independent_lo", "independent_hi"))
    if not math.isfinite(mean):
        return why_not(result, "co_release.reason")
    pairs, together = (number(result, f"co_release.pairs{end}") for end in ("", "_together"))
    among = f"; among independent boutons {fixed(low)} to {fixed(high)}" if math.isfinite(low + high) else ""
    stand_out = (
        f" {counted(together, 'pair')} of {pairs:g} {'does' if together == 1 else 'do'} not release independently."
        if together > 0
        else f" None of {counted(pairs, 'pair')} stands out."
        if pairs > 0
        else ""
    )
    return (
        f"Mean correlation over stimuli {fixed(mean)}{among} ({p_words(number(result, 'co_release.p'))}). Slow changes "
        f"and suspected stimulus failures are taken out.{stand_out} Light of neighbours that was not separated "
        "correlates them too."
    )


def distance_words(result: AnalysisResult) -> str:
    """Say how p_release changes along the axon, and whether neighbours are alike."""
    path = "p_release_against_distance"
    slope, low, high = (number(result, f"{path}.slope_per_um{end}") for end in ("", "_lo", "_hi"))
    if not math.isfinite(slope):
        return why_not(result, f"{path}.method")
    rank, p = (number(result, f"{path}.{key}") for key in ("rank_correlation", "p"))
    words = (
        f"p_release changes by {short(10 * slope)} (95 % interval {short(10 * low)} to {short(10 * high)}) per 10 µm"
    )
    words += f"; rank correlation {fixed(rank)}, {p_words(p)}." if math.isfinite(rank) else "."
    moran, moran_p = number(result, "morans_i.value"), number(result, "morans_i.p")
    if math.isfinite(moran):
        expected = fixed(number(result, "morans_i.expected"))
        words += (
            f" Moran's I of neighbours {fixed(moran)}, in random order {expected}, {p_words(moran_p)} "
            f"({fact(result, 'morans_i.weighting') or 'binary'} weights)."
        )
    return words


def stimuli_words(result: AnalysisResult) -> str:
    """Say at how many stimuli every bouton failed, and how many stimuli may have reached none."""
    share, low, high = (number(result, f"stimulus_failures.share{end}") for end in ("", "_lo", "_hi"))
    if not math.isfinite(share):
        return why_not(result, "stimulus_failures.method")
    failed, expected, p = (number(result, f"stimulus_failures.{key}") for key in ("trials", "expected", "p"))
    words = (
        f"At {fixed(failed, decimals=0)} stimuli every bouton failed; independent boutons would at "
        f"{expected_count(expected)}. Share of stimuli that reached no bouton: {fixed(100 * share, decimals=1)} % "
        f"(95 % interval {fixed(100 * low, decimals=1)} to {fixed(100 * high, decimals=1)} %, {p_words(p)})."
    )
    if number(result, "stimulus_failures.suspected") > 0:
        words += (
            " The suspected ones were left out of every estimate."
            if fact(result, "stimulus_failures.excluded")
            else " The suspected ones still count: p_release is too low by their share."
        )
    return words


def split_half_words(result: AnalysisResult) -> str:
    """Say whether boutons that release more have another paired-pulse ratio, shared noise taken out."""
    value = number(result, "split_half.value")
    if not math.isfinite(value):
        return why_not(result, "split_half.method")
    corrected, plain = (
        with_limits(*(number(result, f"split_half.{name}") for name in names))
        for names in (("value", "lo", "hi"), ("plain", "plain_lo", "plain_hi"))
    )
    return (
        f"Rank correlation over {counted(number(result, 'split_half.boutons'), 'bouton')}, one from odd trials and the "
        f"other from even ones: {corrected}, {p_words(number(result, 'split_half.p'))}. From the same trials it is "
        f"{plain}, too negative by the noise that both share."
    )


def why_not(result: AnalysisResult, path: str) -> str:
    """Say why a number is missing, as the summary's entry under a path has it."""
    reason = str(fact(result, path) or "not available").removeprefix("none: ")
    return f"{reason[:1].upper()}{reason[1:]}."


def _interval(result: AnalysisResult, path: str) -> str:
    low, high = (number(result, f"{path}_{end}") for end in ("lo", "hi"))
    return f" (95 % interval {fixed(low)} to {fixed(high)})" if math.isfinite(low + high) else ""
