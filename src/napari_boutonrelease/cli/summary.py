"""What an analysis found, in the few lines that a terminal shows."""

from __future__ import annotations

import math
from collections import Counter
from pathlib import Path
from typing import TYPE_CHECKING

from ..flags import FLAGS
from ..reports.facts import fact, number, texts

if TYPE_CHECKING:
    from ..analysis.results import AnalysisResult

_FOUND_BY = {
    "responses": "found by responses",
    "shape": "found by shape",
    "both": "found by both responses and shape",
    "hand": "placed by hand",
    "file": "from the file",
}


def summary_lines(result: AnalysisResult, *, folder: Path) -> list[str]:
    """Return the lines: boutons, population, doubts, and where to read on."""
    lines = [_boutons(result)]
    population = (
        ("p_release", "release probability", ""),
        ("ppr", "paired-pulse ratio", ""),
        ("q", "one vesicle", " dF/F"),
    )
    for key, words, unit in population:
        value = number(result, f"population.{key}")
        if math.isfinite(value):
            lo, hi = (number(result, f"population.{key}_{end}") for end in ("lo", "hi"))
            lines.append(f"  {words:<20} {with_interval(value, lo, hi)}{unit}")
    selection = fact(result, "population.selection")
    if selection:
        lines.append(f"  these rest on {selection}")
    lines += _flags(result)
    lines += [f"caution: {caution}" for caution in result.cautions]
    report = folder / "report.pdf"
    lines.append(f"results: {folder}" + (f" (begin with {report.name})" if report.exists() else ""))
    return lines


def with_interval(value: float, lo: float, hi: float, *, digits: int = 2) -> str:
    """Write an estimate with its interval: `0.41 (0.33 to 0.50)`; a dash where there is none."""
    if not math.isfinite(value):
        return "-"
    if not (math.isfinite(lo) or math.isfinite(hi)):
        return f"{value:.{digits}f}"
    ends = [f"{end:.{digits}f}" if math.isfinite(end) else "unbounded" for end in (lo, hi)]
    return f"{value:.{digits}f} ({ends[0]} to {ends[1]})"


def _boutons(result: AnalysisResult) -> str:
    n_boutons = len(result.boutons)
    if not n_boutons:
        return f"{result.name}: no boutons found"
    counts = Counter(texts(result.boutons, "found_by"))
    parts = [f"{counts[code]} {words}" for code, words in _FOUND_BY.items() if counts[code]]
    return f"{result.name}: {n_boutons} bouton{'s' if n_boutons > 1 else ''} ({', '.join(parts)})"


def _flags(result: AnalysisResult) -> list[str]:
    counts = Counter(code for cell in texts(result.boutons, "flags") for code in cell.split(";") if code)
    if not counts:
        return []
    width = max(map(len, counts))
    return ["flags (boutons):"] + [
        f"  {code:<{width}} {counts[code]:>3}  {FLAGS[code].meaning}" for code in FLAGS if counts[code]
    ]
