"""Pages of text: the table of boutons, flags with advice, cautions and how the numbers were made."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from typing import Any

from pydantic import BaseModel

from ..analysis.results import AnalysisResult
from ..flags import FLAGS
from .facts import silent, texts, values
from .figures_page import A4_MM, MARGIN_MM, Area, line_mm, wrapped
from .figures_style import BODY, FIT, HEAD, INK, MUTED, SMALL
from .words import MISSING, STANDING_CAUTIONS, fixed, flag_holders, listed, ranges, with_limits

Draw = Callable[[Area], None]

_ROOM_MM = A4_MM[1] - 2 * MARGIN_MM - 14.0
_WIDTH_MM = A4_MM[0] - 2 * MARGIN_MM
_TABLE_MM = {
    "bouton": 10.5,
    "place": 15.0,
    "found by": 15.5,
    "trials": 9.5,
    "p_release": 24.5,
    "potency": 12.5,
    "q (dF/F)": 28.0,
    "n_sites": 15.0,
    "PPR": 25.0,
}


@dataclass(frozen=True, slots=True)
class Block:
    """Something of a known height (mm) that must not be torn by a page break."""

    height: float
    draw: Callable[[Area, float], None]


@dataclass(frozen=True, slots=True)
class Sheet:
    """The blocks of one page."""

    blocks: tuple[Block, ...]

    @property
    def height(self) -> float:
        """Height of all blocks, mm."""
        return sum(block.height for block in self.blocks)

    def __call__(self, area: Area) -> None:
        """Draw the blocks one below the other."""
        y = 0.0
        for block in self.blocks:
            block.draw(area, y)
            y += block.height


def paged(blocks: Sequence[Block], *, first_mm: float, next_mm: float) -> list[Sheet]:
    """Share blocks over pages; at least one page, which may be empty."""
    sheets: list[list[Block]] = [[]]
    room = first_mm
    for block in blocks:
        if block.height > room and (sheets[-1] or len(sheets) == 1):
            sheets.append([])
            room = next_mm
        sheets[-1].append(block)
        room -= block.height
    return [Sheet(tuple(sheet)) for sheet in sheets]


def table_pages(result: AnalysisResult) -> list[Draw]:
    """Return the table of boutons, page by page, each with its header."""
    head = Block(6.5, _draw_table_head)
    rows = [_table_row(result, row) for row in range(len(result.boutons))]
    sheets = paged(rows, first_mm=_ROOM_MM - head.height - 8.0, next_mm=_ROOM_MM - head.height - 8.0)
    return [_with_head(head, sheet) for sheet in sheets]


def _with_head(head: Block, body: Sheet) -> Draw:
    def draw(area: Area) -> None:
        head.draw(area, 0.0)
        body(area.part(0.0, head.height, area.width, area.height - head.height))
        words = (
            "In brackets: 95 % intervals; for n_sites the numbers that the data cannot exclude. Place: µm along "
            "the axon, else y, x in px. All columns are in boutons.csv, their meaning in datapackage.json."
        )
        below = head.height + body.height + 2.0
        area.paragraph(0.0, below, area.width, words, size=SMALL - 0.4, color=MUTED)

    return draw


def _draw_table_head(area: Area, y: float) -> None:
    x = 0.0
    for name, width in (*_TABLE_MM.items(), ("flags", 0.0)):
        area.text(x, y, name, size=SMALL, color=MUTED)
        x += width
    area.rule(0.0, y + 4.4, area.width, color=MUTED)


def _table_row(result: AnalysisResult, row: int) -> Block:
    boutons = result.boutons

    def one(name: str) -> float:
        return float(values(boutons, name)[row])

    def triple(name: str, decimals: int = 2) -> str:
        return with_limits(one(name), one(f"{name}_lo"), one(f"{name}_hi"), decimals=decimals)

    along = fixed(one("axon_um"), decimals=1)
    n_set = ranges(int(n) for n in texts(boutons, "n_set")[row].split(";") if n)
    n_sites = fixed(one("n_sites"), decimals=0)
    cells = (
        fixed(one("bouton"), decimals=0),
        along if along != MISSING else f"{one('y_px'):.0f}, {one('x_px'):.0f}",
        texts(boutons, "found_by")[row] or MISSING,
        fixed(one("trials"), decimals=0),
        triple("p_release"),
        fixed(one("potency"), decimals=3),
        MISSING if silent(result)[row] else triple("q", 3),
        f"{n_sites} ({n_set})" if n_set and n_set != n_sites else n_sites,
        triple("ppr"),
    )
    flag_width = _WIDTH_MM - sum(_TABLE_MM.values())
    flags = [
        line for code in texts(boutons, "flags")[row].split(";") for line in wrapped(code, flag_width, size=SMALL - 0.6)
    ]
    step = line_mm(SMALL)
    height = max(len(flags), 1) * step + 2.2

    def draw(area: Area, y: float) -> None:
        x = 0.0
        for column, (text, width) in enumerate(zip(cells, _TABLE_MM.values(), strict=True)):
            area.text(x, y, text, size=SMALL, color=INK, weight="bold" if column == 0 else "normal")
            x += width
        for line, code in enumerate(flags):
            area.text(x, y + line * step, code, size=SMALL - 0.6, color=FIT)
        area.rule(0.0, y + height - 1.4, area.width, weight=0.4)

    return Block(height, draw)


def flag_blocks(result: AnalysisResult) -> list[Block]:
    """Return every flag that occurs: whom it concerns, what it means and what to do."""
    holders = flag_holders(result)
    blocks = [_heading("Flags: why to doubt a bouton, and what to do")]
    if not holders:
        return [*blocks, _paragraph("No bouton carries a flag.")]
    known = [code for code in FLAGS if code in holders]
    for code in (*known, *(code for code in holders if code not in FLAGS)):
        definition = FLAGS.get(code)
        text = f"{definition.meaning} {definition.advice}" if definition else "This version does not know the flag."
        who = f"bouton{'s' if len(holders[code]) > 1 else ''} {listed(holders[code])}"
        blocks.append(_entry(code, who, text))
    return blocks


def caution_pages(result: AnalysisResult) -> list[Sheet]:
    """Return cautions, settings and origin, page by page."""
    blocks = [_heading("Before you quote these numbers")]
    blocks += [_paragraph(caution) for caution in (*result.cautions, *STANDING_CAUTIONS)]
    blocks += [_gap(), _heading("Settings")]
    blocks += [_line(*entry) for entry in _settings_lines(result.settings)]
    origin = _origin_lines(result.provenance)
    if origin:
        blocks += [_gap(), _heading("Origin"), *(_line(*entry) for entry in origin)]
    return paged(blocks, first_mm=_ROOM_MM, next_mm=_ROOM_MM)


def _settings_lines(settings: BaseModel, prefix: str = "") -> list[tuple[str, str, str]]:
    """Return name, value and meaning of every setting."""
    lines: list[tuple[str, str, str]] = []
    for name, field in type(settings).model_fields.items():
        value = getattr(settings, name)
        if isinstance(value, BaseModel):
            lines += _settings_lines(value, f"{prefix}{name}.")
        else:
            lines.append((f"{prefix}{name}", "automatic" if value is None else str(value), field.description or ""))
    return lines


def _origin_lines(provenance: Mapping[str, Any]) -> list[tuple[str, str, str]]:
    """Return the plain entries of the provenance: when, from which movie, with which versions."""
    lines = [(key, str(value), "") for key, value in provenance.items() if isinstance(value, str | int | float)]
    for group in ("movie", "protocol", "versions"):
        entries = provenance.get(group)
        if isinstance(entries, Mapping):
            lines += [(f"{group}: {key}", str(v), "") for key, v in entries.items() if isinstance(v, str | int | float)]
    return lines


def _heading(text: str) -> Block:
    return Block(6.5, lambda area, y: area.text(0.0, y, text, size=HEAD, weight="bold"))


def _gap() -> Block:
    return Block(4.0, lambda _area, _y: None)


def _paragraph(text: str) -> Block:
    lines = wrapped(text, _WIDTH_MM - 4.0)

    def draw(area: Area, y: float) -> None:
        area.text(0.0, y, "•", color=MUTED)
        for number, line in enumerate(lines):
            area.text(4.0, y + number * line_mm(BODY), line)

    return Block(max(len(lines), 1) * line_mm(BODY) + 1.4, draw)


def _entry(code: str, who: str, text: str) -> Block:
    """Lay a flag at the left, its boutons below it, its words at the right."""
    left_lines, right_lines = wrapped(who, 38.0, size=SMALL), wrapped(text, _WIDTH_MM - 44.0)

    def draw(area: Area, y: float) -> None:
        area.text(0.0, y, code, color=FIT)
        for number, line in enumerate(left_lines):
            area.text(0.0, y + line_mm(BODY) + number * line_mm(SMALL), line, size=SMALL, color=MUTED)
        for number, line in enumerate(right_lines):
            area.text(44.0, y + number * line_mm(BODY), line)

    left = line_mm(BODY) + len(left_lines) * line_mm(SMALL)
    return Block(max(left, len(right_lines) * line_mm(BODY)) + 2.0, draw)


def _line(name: str, value: str, meaning: str) -> Block:
    """Lay a name, its value and what it means, in three columns."""
    width = 66.0 if meaning else _WIDTH_MM - 46.0
    columns = [
        (0.0, wrapped(name, 44.0, size=SMALL), MUTED),
        (46.0, wrapped(value, width - 46.0 if meaning else width, size=SMALL), INK),
        (68.0, wrapped(meaning, _WIDTH_MM - 68.0, size=SMALL), MUTED),
    ]

    def draw(area: Area, y: float) -> None:
        for x, lines, colour in columns:
            for number, line in enumerate(lines):
                area.text(x, y + number * line_mm(SMALL), line, size=SMALL, color=colour)

    return Block(max(len(lines) for _, lines, _ in columns) * line_mm(SMALL) + 0.9, draw)
