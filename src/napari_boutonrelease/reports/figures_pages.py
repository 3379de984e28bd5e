"""The pages of the report, A4 each, in the order in which a person reads them."""

from __future__ import annotations

import math
from collections.abc import Callable, Iterator
from functools import partial

import numpy as np
from matplotlib.figure import Figure

from ..analysis.results import AnalysisResult
from .facts import fact, nothing_released, number, silent, values
from .figures_axon import axon_title, draw_release_along_axon, selection_words
from .figures_bouton import BLOCK_MM, draw_bouton
from .figures_calls import draw_calls
from .figures_map import draw_evidence, draw_map
from .figures_page import A4_MM, MARGIN_MM, Area, blank_figure, line_mm, text_width_mm, wrapped
from .figures_pairs import draw_pulse_pairs, draw_train
from .figures_quality import draw_quality
from .figures_selection import draw_selection, shows_detection
from .figures_style import BODY, HEAD, INK, MUTED, SHADE, SMALL, TITLE, styled
from .figures_text import caution_pages, flag_blocks, paged, table_pages
from .figures_together import draw_together, shows_together
from .figures_trains import (
    INTERVALS_CAPTION,
    INTERVALS_MM,
    TRAINS_CAPTION,
    TRAINS_MM,
    draw_pulse_intervals,
    draw_trains,
)
from .words import counted, fixed, headlines, listed, recording_facts, recording_line, selected_differ, short

Page = Callable[[], Figure]

_BOUTON_CAPTION = (
    "Grey outline: amplitudes without stimulus, scaled to the share of failures. Dashed: the model's 0, 1, 2, ... "
    "vesicles. Brackets: 95 %."
)


def pages(result: AnalysisResult) -> list[Page]:
    """List the pages; each is drawn when it is called, so that one is in memory at a time."""
    n_boutons, n_pulses = len(result.boutons), result.stimulus_s.shape[1]
    listing: list[Page] = [partial(title_page, result)]
    if n_boutons:
        listing.append(partial(axon_page, result))
        listing += [partial(_drawn, "Boutons", draw) for draw in table_pages(result)]
        listing.append(partial(calls_page, result))
        if n_pulses > 1 and not _pairs_fit_below(result):
            listing.append(partial(pairs_page, result))
        if len(result.trains):
            listing.append(partial(trains_page, result))
        if len(result.intervals):
            listing.append(partial(intervals_page, result))
        if shows_detection(result):
            listing.append(partial(detection_page, result))
        if shows_together(result):
            listing.append(partial(together_page, result))
        listing += [partial(bouton_page, result, first) for first in range(0, n_boutons, 2)]
    listing += list(_quality_pages(result))
    listing += [partial(_drawn, "Cautions and method", draw) for draw in caution_pages(result)]
    return listing


def _new_page(title: str = "") -> tuple[Figure, Area]:
    figure = blank_figure(*A4_MM)
    area = Area.of(figure, margin=MARGIN_MM)
    if title:
        area.text(0.0, 0.0, title, size=HEAD + 3.0, weight="bold")
    return figure, area


@styled
def _drawn(title: str, draw: Callable[[Area], None]) -> Figure:
    figure, area = _new_page(title)
    draw(area.part(0.0, 10.0, area.width, area.height - 10.0))
    return figure


@styled
def title_page(result: AnalysisResult) -> Figure:
    """Draw the first page: what was recorded, the map, the main numbers and what to be careful about."""
    figure, area = _new_page()
    area.text(0.0, 0.0, "Vesicle release along one axon", color=MUTED)
    size = min(TITLE, TITLE * area.width / text_width_mm(result.name, size=TITLE, weight="bold"))
    area.text(0.0, 4.2, result.name, size=size, weight="bold")
    area.text(0.0, 13.2, recording_line(result), color=MUTED)
    area.rule(0.0, 19.5, area.width)
    _draw_tiles(area.part(0.0, 23.0, area.width, 17.0), result)
    height, width = result.mean_image.shape
    map_mm = min((area.width - 22.0) * height / width + 7.0, 92.0)
    draw_map(area.part(0.0, 43.0, area.width, map_mm), result)
    top, least_box = 43.0 + map_mm + 5.0, 26.0
    room = area.height - least_box - top
    used = max(
        _write_headlines(area.part(0.0, top, 108.0, room), result),
        _write_facts(area.part(116.0, top, area.width - 116.0, room), result),
    )
    _write_cautions(area, result, top=top + used + 5.0)
    return figure


def _draw_tiles(area: Area, result: AnalysisResult) -> None:
    """Write the numbers that a reader looks for first."""
    measured = int(np.isfinite(values(result.boutons, "p_release")).sum())
    tiles = [
        *_release_tiles(result),
        ("one vesicle, dF/F", *_tile_numbers(result, "population.q", 3)),
        ("paired-pulse ratio", *_tile_numbers(result, "population.ppr", 2)),
        ("boutons measured", f"{measured} of {len(result.boutons)}", f"{silent(result).sum()} silent"),
    ]
    for index, (name, value, interval) in enumerate(tiles):
        x = index * area.width / len(tiles)
        area.text(x, 0.0, name, size=SMALL, color=MUTED)
        area.text(x, 3.0, value, size=TITLE, weight="bold")
        area.text(x, 11.5, interval, size=SMALL, color=MUTED)


def _release_tiles(result: AnalysisResult) -> list[tuple[str, str, str]]:
    """Mean p_release, with and without the boutons that were found by their shape alone."""
    if nothing_released(result):
        limits = values(result.boutons, "p_release_hi")
        highest = float(np.nanmax(limits)) if np.isfinite(limits).any() else math.nan
        return [("p_release", f"< {fixed(highest)}" if math.isfinite(highest) else "0", "no release seen")]
    everyone = _tile_numbers(result, "population.p_release", 2)
    if not selected_differ(result):
        return [("mean p_release", *everyone)]
    return [
        ("mean p_release, all boutons", *everyone),
        ("those found by responses", *_tile_numbers(result, "population.p_release_found_by_responses", 2)),
    ]


def _tile_numbers(result: AnalysisResult, path: str, decimals: int) -> tuple[str, str]:
    value, low, high = (number(result, path + end) for end in ("", "_lo", "_hi"))
    if not math.isfinite(value):
        return "–", "not available"
    if not (math.isfinite(low) and math.isfinite(high)):
        return fixed(value, decimals=decimals), "no interval"
    limits = f"{fixed(low, decimals=decimals)} to {fixed(high, decimals=decimals)}"
    return fixed(value, decimals=decimals), f"95 %: {limits}"


def _write_headlines(area: Area, result: AnalysisResult) -> float:
    """Write the main results, as many as fit; return the height used."""
    area.text(0.0, 0.0, "In short", size=HEAD, weight="bold")
    y = 6.0
    for sentence in headlines(result):
        lines = len(wrapped(sentence, area.width - 4.0))
        if y + lines * line_mm(BODY) > area.height:
            break
        area.text(0.0, y, "•", color=MUTED)
        y = area.paragraph(4.0, y, area.width - 4.0, sentence) + 1.4
    return y


def _write_facts(area: Area, result: AnalysisResult) -> float:
    """Write what was recorded; return the height used."""
    area.text(0.0, 0.0, "Recording", size=HEAD, weight="bold")
    y = 6.0
    for name, value in recording_facts(result):
        if y + line_mm(SMALL) > area.height:
            break
        area.text(0.0, y, name, size=SMALL, color=MUTED)
        y = area.paragraph(29.0, y, area.width - 29.0, value, size=SMALL) + 0.7
    return y


def _write_cautions(area: Area, result: AnalysisResult, *, top: float) -> None:
    """Write the recording's own cautions into a box, as many as fit."""
    paragraphs = [wrapped(caution, area.width - 10.0) for caution in result.cautions]
    paragraphs = paragraphs or [["No caution beyond those on the last page."]]
    kept = list(paragraphs)
    while len(kept) > 1 and top + _box_mm(kept, more=len(kept) < len(paragraphs)) > area.height:
        kept.pop()
    left_out = len(paragraphs) - len(kept)
    area.box(0.0, top, area.width, _box_mm(kept, more=left_out > 0), color=SHADE)
    area.text(5.0, top + 3.5, "Before you quote these numbers", size=HEAD, weight="bold")
    y = top + 9.5
    for lines in kept:
        for line in lines:
            area.text(5.0, y, line, color=INK)
            y += line_mm(BODY)
        y += 1.2
    if left_out:
        area.text(5.0, y, f"{counted(left_out, 'more caution')} on the last page.", color=MUTED)


def _box_mm(paragraphs: list[list[str]], *, more: bool) -> float:
    lines = sum(len(lines) for lines in paragraphs) + more
    return 11.5 + lines * line_mm(BODY) + 1.2 * len(paragraphs)


@styled
def axon_page(result: AnalysisResult) -> Figure:
    """Draw release along the axon and the evidence that found the boutons."""
    figure, area = _new_page(axon_title(result))
    draw_release_along_axon(area.part(0.0, 10.0, area.width, 136.0), result)
    y = area.paragraph(0.0, 148.0, area.width, selection_words(result), size=SMALL, color=MUTED)
    if not math.isfinite(result.evidence_cut):  # the boutons were given
        return figure
    area.text(0.0, y + 5.0, "Evidence of release", size=HEAD, weight="bold")
    words = (
        "Log-likelihood ratio of release against silence at each pixel, on a square-root scale; the mark on the bar is "
        "the cut above which a maximum was accepted. Solid rings: found by responses; dashed: by shape alone."
    )
    y = area.paragraph(0.0, y + 10.5, area.width, words, size=SMALL, color=MUTED)
    draw_evidence(area.part(0.0, y + 2.0, area.width, area.height - y - 6.0), result)
    return figure


_CALLS_MM, _PAIRS_MM = 45.0, 112.0


def _calls_mm(result: AnalysisResult) -> float:
    return 38.0 + 7.0 * len(result.boutons)


def _pairs_fit_below(result: AnalysisResult) -> bool:
    """Whether calls and pulse pairs go on one page."""
    return _calls_mm(result) + _PAIRS_MM + 30.0 < A4_MM[1] - 2 * MARGIN_MM and result.stimulus_s.shape[1] == 2


@styled
def calls_page(result: AnalysisResult) -> Figure:
    """Draw the raster of calls, and the pulse pairs below it where there is room."""
    figure, area = _new_page("Calls, trial by trial")
    height = min(max(_calls_mm(result), _CALLS_MM), area.height - 20.0)
    draw_calls(area.part(0.0, 10.0, area.width, height), result)
    words = "Below the raster: how many were called in each trial." + _false_calls_words(result)
    y = area.paragraph(0.0, 12.0 + height, area.width, words, size=SMALL, color=MUTED)
    if _pairs_fit_below(result):
        area.text(0.0, y + 9.0, "Pulse pairs", size=HEAD + 3.0, weight="bold")
        _draw_pairs(area.part(0.0, y + 17.0, area.width, _PAIRS_MM), result)
    return figure


def _false_calls_words(result: AnalysisResult) -> str:
    expected, trials = values(result.boutons, "false_calls_expected"), values(result.boutons, "trials")
    if not np.isfinite(expected).any():
        return ""
    return (
        f" Of a bouton that never releases, noise alone is expected to call {short(float(np.nanmedian(expected)))} of "
        f"{float(np.nanmedian(trials)):g} pulses."
    )


@styled
def pairs_page(result: AnalysisResult) -> Figure:
    """Draw pulse pairs, and the train where there are more than two pulses."""
    figure, area = _new_page("Pulse pairs")
    below = _draw_pairs(area.part(0.0, 10.0, area.width, _PAIRS_MM), result)
    if result.stimulus_s.shape[1] > 2:
        area.text(0.0, below + 20.0, "Train", size=HEAD + 3.0, weight="bold")
        draw_train(area.axes(14.0, below + 33.0, area.width - 16.0, 70.0), result)
    return figure


def _draw_pairs(area: Area, result: AnalysisResult) -> float:
    """Draw the pulse pairs and say how to read them; return the y below."""
    if not np.isfinite(values(result.boutons, "ppr")).any():
        return area.paragraph(0.0, 0.0, area.width, "No bouton has a paired-pulse ratio.", color=MUTED)
    draw_pulse_pairs(area.part(0.0, 0.0, area.width, 86.0), result)
    without = [f"{b:g}" for b in values(result.boutons, "bouton")[~np.isfinite(values(result.boutons, "ppr"))]]
    missing = f" No ratio: bouton{'s' if len(without) > 1 else ''} {listed(without)}." if without else ""
    words = (
        "Ratios of mean amplitudes; bars: 95 % intervals; band: all boutons together. A verdict must hold although "
        "many boutons were looked at (Benjamini and Hochberg 1995), so an interval without 1 may not suffice. At the "
        "right, boutons that show no release are left out."
    )
    return area.paragraph(0.0, 90.0, area.width, words + missing, size=SMALL, color=MUTED)


def trains_page(result: AnalysisResult) -> Figure:
    """Draw what the trains say of all boutons together, and of each."""
    title = "Trains: depletion and facilitation"
    return _page_with_note(result, title, TRAINS_CAPTION, draw_trains, TRAINS_MM, note="train.note")


def intervals_page(result: AnalysisResult) -> Figure:
    """Draw the paired-pulse ratio against the pulse interval."""
    return _page_with_note(
        result, "Pulse intervals", INTERVALS_CAPTION, draw_pulse_intervals, INTERVALS_MM, note="pulse_intervals.note"
    )


@styled
def _page_with_note(
    result: AnalysisResult,
    title: str,
    caption: str,
    draw: Callable[[Area, AnalysisResult], None],
    height_mm: float,
    *,
    note: str,
) -> Figure:
    """Draw a figure below its caption, and below it what the summary notes on all boutons together."""
    figure, area = _new_page(title)
    y = area.paragraph(0.0, 10.0, area.width, caption, size=SMALL, color=MUTED)
    draw(area.part(0.0, y + 3.0, area.width, height_mm), result)
    words = fact(result, note)
    if words:
        area.paragraph(0.0, y + 6.0 + height_mm, area.width, f"All boutons together: {words}.", color=INK)
    return figure


@styled
def detection_page(result: AnalysisResult) -> Figure:
    """Draw which boutons the detection would have missed, and say the mean corrected for that."""
    figure, area = _new_page("Boutons that would have been missed")
    draw_selection(area.part(0.0, 10.0, area.width, area.height - 10.0), result)
    return figure


@styled
def together_page(result: AnalysisResult) -> Figure:
    """Draw how much boutons differ, their order along the axon, release in common, and failed stimuli."""
    figure, area = _new_page("The boutons together")
    draw_together(area.part(0.0, 12.0, area.width, area.height - 12.0), result)
    return figure


@styled
def bouton_page(result: AnalysisResult, first: int) -> Figure:
    """Draw two boutons, from row `first` on."""
    figure, area = _new_page("Bouton by bouton")
    area.paragraph(0.0, 6.4, area.width, _BOUTON_CAPTION, size=SMALL - 0.4, color=MUTED)
    for place, row in enumerate(range(first, min(first + 2, len(result.boutons)))):
        draw_bouton(area.part(0.0, 13.5 + place * BLOCK_MM[1], area.width, BLOCK_MM[1]), result, row)
    return figure


def _quality_pages(result: AnalysisResult) -> Iterator[Page]:
    """Yield the page of panels with the first flags below, and further pages of flags where they do not fit."""
    room = A4_MM[1] - 2 * MARGIN_MM
    first, *others = paged(flag_blocks(result), first_mm=room - 146.0, next_mm=room - 12.0)

    @styled
    def panels() -> Figure:
        figure, area = _new_page("Quality")
        draw_quality(area.part(0.0, 10.0, area.width, 122.0), result)
        first(area.part(0.0, 138.0, area.width, area.height - 138.0))
        return figure

    yield panels
    for draw in others:
        yield partial(_drawn, "Quality", draw)
