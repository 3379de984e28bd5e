"""The report of a comparison: findings first, then what they rest on."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass
from typing import TYPE_CHECKING

from .figures_comparison import (
    changes_mm,
    draw_changes,
    draw_intervals,
    draw_inverse_cv2,
    draw_matches,
    draw_parabolas,
    draw_release,
    draw_sites,
    matches_mm,
    parabolas_mm,
)
from .figures_page import A4_MM, MARGIN_MM, Area, blank_figure, line_mm, text_width_mm, wrapped
from .figures_style import BODY, HEAD, MUTED, SMALL, TITLE, styled
from .words import counted, fixed, p_words, with_limits

if TYPE_CHECKING:
    from pathlib import Path
    from typing import Any

    from matplotlib.figure import Figure

    from ..comparison import Comparison

_MOST_CHANGES_MM = 150.0


@dataclass(frozen=True, slots=True)
class _Section:
    """A figure of the report with what a reader needs to understand it."""

    title: str
    height: float
    draw: Callable[[Area, Comparison], None]
    caption: str


def write_comparison_report(comparison: Comparison, path: Path) -> None:
    """Write the report as a PDF.

    Parameters
    ----------
    comparison : Comparison
        What was found.
    path : Path
        PDF file to write.
    """
    from matplotlib.backends.backend_pdf import PdfPages

    @styled
    def write() -> None:
        title = {"Title": f"Comparison: {comparison.name}", "Creator": "napari-boutonrelease", "CreationDate": None}
        with PdfPages(path, metadata=title) as pdf:
            for page in _pages(comparison):
                pdf.savefig(page, dpi=200)

    write()


def comparison_sentences(comparison: Comparison) -> list[str]:
    """Say what was found, in a few sentences: boutons, changes of each pair, sites."""
    summary = comparison.summary
    n_recordings = len(comparison.recordings)
    first = summary["recordings"][0]
    sentences = [
        f"{summary['boutons_in_all']} of {counted(first['boutons'], 'bouton')} of {first['name']} were found in "
        f"{'both' if n_recordings == 2 else f'all {n_recordings}'} recordings."
    ]
    sentences += [sentence for pair in summary["pairs"] for sentence in _pair_sentences(pair)]
    releasing = int(comparison.joint["n_sites"].notna().sum())
    if releasing:
        sentences.append(
            f"All recordings together leave one number of sites at {summary['n_resolved']} of "
            f"{counted(releasing, 'releasing bouton')}."
        )
    return sentences


def _pair_sentences(pair: dict[str, Any]) -> list[str]:
    if not pair["p_release_change_n"]:
        return [f"No bouton was measured in both {pair['recording_a']} and {pair['recording_b']}."]
    words = (
        ("p_release_change", "p_release changed by", ""),
        ("q_ratio", "one vesicle", " times as large"),
        ("ppr_ratio", "the paired-pulse ratio", " times as large"),
    )
    parts = []
    for key, name, after in words:
        value, lo, hi, p = (
            math.nan if pair[f"{key}{end}"] is None else float(pair[f"{key}{end}"]) for end in ("", "_lo", "_hi", "_p")
        )
        if not math.isfinite(value):
            continue
        verb = "" if after == "" else " is"
        tested = f" ({p_words(p)} over {counted(pair[f'{key}_n'], 'bouton')})" if math.isfinite(p) else ""
        parts.append(f"{name}{verb} {with_limits(value, lo, hi)}{after}{tested}")
    sentence = f"From {pair['recording_a']} to {pair['recording_b']}, {'; '.join(parts)}."
    return [
        sentence,
        f"After correction for their number, p_site changed at {counted(pair['boutons_p_changed'], 'bouton')} and the "
        f"vesicle at {counted(pair['boutons_q_changed'], 'bouton')}.",
    ]


def _title_page(comparison: Comparison) -> tuple[Figure, Area, float]:
    """Write what was compared, what was found and what to beware of; return the y below it."""
    figure = blank_figure(*A4_MM)
    page = Area.of(figure, margin=MARGIN_MM)
    page.text(0.0, 0.0, "The same boutons in several recordings", color=MUTED)
    size = min(TITLE, TITLE * page.width / text_width_mm(comparison.name, size=TITLE, weight="bold"))
    page.text(0.0, 4.2, comparison.name, size=size, weight="bold")
    page.rule(0.0, 14.0, page.width)
    y = 18.0
    for sentence in comparison_sentences(comparison):
        y = page.paragraph(0.0, y, page.width, sentence, size=BODY + 0.8) + 1.2
    y = _recordings_table(page, comparison, y + 3.0) + 4.0
    page.text(0.0, y, "Before you quote these numbers", size=HEAD, weight="bold")
    y += 6.0
    for caution in comparison.cautions:
        y = page.paragraph(0.0, y, page.width, caution, color=MUTED) + 0.8
    return figure, page, y + 5.0


def _recordings_table(page: Area, comparison: Comparison, y: float) -> float:
    heads = ("recording", "boutons", "found again", "image shifted by, px (y, x)", "likeness of the images")
    at = (0.0, 62.0, 82.0, 106.0, 150.0)
    for x, head in zip(at, heads, strict=True):
        page.text(x, y, head, size=SMALL, color=MUTED)
    page.rule(0.0, y + 4.4, page.width, color=MUTED)
    y += 6.0
    for one in comparison.summary["recordings"]:
        shift = [math.nan if one[f"shift_{axis}_px"] is None else one[f"shift_{axis}_px"] for axis in "yx"]
        likeness = math.nan if one["likeness"] is None else one["likeness"]
        cells = (
            one["name"][:42],
            str(one["boutons"]),
            str(one["matched"]),
            ", ".join(fixed(value) for value in shift),
            fixed(likeness),
        )
        for x, cell in zip(at, cells, strict=True):
            page.text(x, y, cell, size=SMALL)
        y += line_mm(SMALL) + 0.6
    return y


def _sections(comparison: Comparison) -> list[_Section]:
    sections = [
        _Section(
            "Which bouton is which",
            min(matches_mm(comparison), 110.0),
            draw_matches,
            "Mean images with the ids of the first recording: blue where a bouton was found in every recording, grey "
            "where in some. Crosses are boutons of later recordings without a partner. Check by eye that ids sit on "
            "the same boutons.",
        ),
        _Section(
            "Release probability in each recording",
            62.0,
            draw_release,
            "Pulse 1, from each recording's own analysis, with 95 % intervals.",
        ),
        _Section(
            "What changed",
            min(changes_mm(comparison), _MOST_CHANGES_MM),
            draw_changes,
            "95 % intervals, filled where they exclude no change; not corrected for the number of boutons (the "
            "p-values in changes.csv are). The ratio of q comes from the joint fit of both recordings, with one "
            "number of sites.",
        ),
        _Section(
            "Number of release sites",
            62.0,
            draw_sites,
            "Points: most likely number; bars: numbers that the data cannot exclude. Different release probabilities "
            "in the recordings are what tells the number of sites.",
        ),
        _Section(
            "1/CV² against mean",
            66.0,
            draw_inverse_cv2,
            "Pulse 1, the variance of the noise taken out, 95 % intervals by resampling trials.",
        ),
        _Section(
            "Variance against mean",
            parabolas_mm(comparison),
            draw_parabolas,
            "Each point is a pulse of a recording, noise taken out, ± standard error. The curve is the parabola of "
            "binomial release with the expected variation of vesicles; it is straight where the number of sites stays"
            " open.",
        ),
    ]
    if len(comparison.recovery):
        sections.append(
            _Section(
                "Paired-pulse ratio against pulse interval",
                62.0,
                draw_intervals,
                "Points: each bouton at each interval. Lines: the time course that AICc chose for each bouton.",
            )
        )
    return sections


def _pages(comparison: Comparison) -> list[Figure]:
    figure, page, y = _title_page(comparison)
    pages = [figure]
    for section in _sections(comparison):
        caption_mm = line_mm(SMALL) * len(wrapped(section.caption, page.width, size=SMALL))
        if y + section.height + caption_mm + 9.0 > page.height:
            figure = blank_figure(*A4_MM)
            page, y = Area.of(figure, margin=MARGIN_MM), 0.0
            pages.append(figure)
        page.text(0.0, y, section.title, size=HEAD, weight="bold")
        section.draw(page.part(0.0, y + 6.5, page.width, section.height), comparison)
        page.paragraph(0.0, y + section.height + 8.5, page.width, section.caption, size=SMALL, color=MUTED)
        y += section.height + caption_mm + 16.0
    for number, one in enumerate(pages, start=1):
        whole = Area.of(one)
        whole.text(
            A4_MM[0] - MARGIN_MM, A4_MM[1] - 9.0, f"{number} of {len(pages)}", size=SMALL, color=MUTED, ha="right"
        )
    return pages
