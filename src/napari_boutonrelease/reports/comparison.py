"""A comparison as a folder: tables with their data dictionary, report and figures."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path
from typing import TYPE_CHECKING

from ..comparison.columns import TABLES
from .datapackage import describe_package
from .folder import PACKAGE, replaced_whole
from .strict_json import write_json
from .tables import write_table

if TYPE_CHECKING:
    from ..comparison import Comparison

COMPARISON_MARK = "comparison.json"
"""The file by which a folder is known to hold a comparison."""


def write_comparison(
    comparison: Comparison,
    folder: Path,
    *,
    overwrite: bool,
    progress: Callable[[int, int], None] | None = None,
) -> Path:
    """Write a comparison into a folder, whole or not at all.

    Parameters
    ----------
    comparison : Comparison
        What was found.
    folder : Path
        Folder to be made, or replaced if it holds a comparison.
    overwrite : bool
        Whether a comparison that is there may be replaced.
    progress : callable, optional
        Called with (done, total) files.

    Returns
    -------
    Path
        The folder.

    Raises
    ------
    OutputError
        If the folder holds a comparison and `overwrite` is false, holds anything else, or cannot be written.
    """
    from .comparison_report import write_comparison_report
    from .figures import write_figure
    from .figures_comparison import comparison_figures

    folder = Path(folder)
    figures = comparison_figures(comparison)
    total = len(TABLES) + len(figures) + 2
    done = 0

    def step() -> None:
        nonlocal done
        done += 1
        if progress is not None:
            progress(done, total)

    with replaced_whole(folder, overwrite=overwrite, mark=COMPARISON_MARK) as work:
        for name, table in TABLES.items():
            write_table(getattr(comparison, name), work / f"{name}.csv", table=table)
            step()
        (work / "figures").mkdir()
        for stem, draw in figures.items():
            write_figure(draw(), work / "figures" / f"{stem}.svg")
            step()
        write_comparison_report(comparison, work / "report.pdf")
        step()
        write_json({**comparison.provenance, "summary": comparison.summary}, work / COMPARISON_MARK)
        created = comparison.provenance.get("created")
        package = describe_package(
            work,
            name=folder.resolve().name,
            tables=TABLES,
            created=created if isinstance(created, str) else None,
            title=f"The same boutons in {comparison.name}",
        )
        write_json(package, work / PACKAGE)
        step()
    return folder
