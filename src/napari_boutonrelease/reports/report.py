"""The report: the pages as one PDF."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from matplotlib.figure import Figure

    from ..analysis.results import AnalysisResult


def write_report(result: AnalysisResult, path: Path, *, progress: Callable[[int, int], None] | None = None) -> None:
    """Write the report as a PDF.

    Parameters
    ----------
    result : AnalysisResult
        What was found.
    path : Path
        PDF file to write.
    progress : callable, optional
        Called with (done, total) pages.
    """
    from matplotlib.backends.backend_pdf import PdfPages

    from .figures_pages import pages
    from .figures_style import styled

    @styled
    def write() -> None:
        listing = pages(result)
        with PdfPages(path, metadata=_metadata(result)) as pdf:
            for index, page in enumerate(listing):
                figure = page()
                _write_footer(figure, result, index + 1, len(listing))
                pdf.savefig(figure, dpi=200)
                if progress is not None:
                    progress(index + 1, len(listing))

    write()


def _metadata(result: AnalysisResult) -> dict[str, Any]:
    """Name the report; no clock, so that the same result gives the same file."""
    return {"Title": f"Vesicle release: {result.name}", "Creator": "napari-boutonrelease", "CreationDate": None}


def _write_footer(figure: Figure, result: AnalysisResult, page: int, total: int) -> None:
    from .figures_page import A4_MM, MARGIN_MM, Area
    from .figures_style import MUTED, SMALL

    area = Area.of(figure)
    y = A4_MM[1] - 9.0
    created = result.provenance.get("created")
    about = f"{result.name[:80]}   ·   analysed {created}" if isinstance(created, str) else result.name[:100]
    area.text(MARGIN_MM, y, about, size=SMALL, color=MUTED)
    area.text(A4_MM[0] - MARGIN_MM, y, f"{page} of {total}", size=SMALL, color=MUTED, ha="right")
