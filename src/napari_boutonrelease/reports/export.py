"""The output folder of one recording, written beside and moved into place whole."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from pathlib import Path
from typing import TYPE_CHECKING

from ..analysis.columns import TABLES
from .arrays import write_label_image, write_mean_image, write_traces, write_weights
from .datapackage import describe_package
from .folder import MARK, PACKAGE, replaced_whole
from .nwb_details import NwbDetails, check_can_write_nwb
from .strict_json import write_json
from .tables import write_table

if TYPE_CHECKING:
    from matplotlib.figure import Figure

    from ..analysis.results import AnalysisResult

    Writer = Callable[[Path], None]


def write_result(
    result: AnalysisResult,
    folder: Path,
    *,
    overwrite: bool,
    figures: bool = True,
    nwb: NwbDetails | None = None,
    extra_files: Mapping[str, Writer] | None = None,
    progress: Callable[[int, int], None] | None = None,
) -> Path:
    """Write everything found in one recording into a folder, whole or not at all.

    Parameters
    ----------
    result : AnalysisResult
        What was found.
    folder : Path
        Folder to be made, or replaced if it holds results.
    overwrite : bool
        Whether results that are there may be replaced.
    figures : bool
        Whether to draw the report and the figures.
    nwb : NwbDetails, optional
        Also write `recording.nwb`, with these details.
    extra_files : mapping of str to callable, optional
        Further files that belong to the results: name and what writes it, given the path.
    progress : callable, optional
        Called with (done, total) files.

    Returns
    -------
    Path
        The folder.

    Raises
    ------
    OutputError
        If the folder holds results and `overwrite` is false, holds anything else, or cannot be written, or if pynwb is
        needed and not installed. What was there stays as it was.
    """
    if nwb is not None:
        check_can_write_nwb()
    folder = Path(folder)
    writers = _writers(result, figures=figures, nwb=nwb) | dict(extra_files or {})
    total = len(writers) + 1
    with replaced_whole(folder, overwrite=overwrite) as work:
        for done, (name, write) in enumerate(writers.items()):
            if progress is not None:
                progress(done, total)
            path = work / name
            path.parent.mkdir(exist_ok=True)
            write(path)
        created = result.provenance.get("created")
        created = created if isinstance(created, str) else None
        package = describe_package(work, name=result.name, tables=TABLES, created=created)
        write_json(package, work / PACKAGE)
    if progress is not None:
        progress(total, total)
    return folder


def _writers(result: AnalysisResult, *, figures: bool, nwb: NwbDetails | None) -> dict[str, Writer]:
    """Every file by name and what writes it."""
    writers: dict[str, Writer] = {f"{name}.csv": _table_writer(result, name) for name in TABLES}
    writers["traces.npz"] = lambda path: write_traces(result, path)
    writers["mean_image.tif"] = lambda path: write_mean_image(result, path)
    writers["footprints.tif"] = lambda path: write_label_image(result, path)
    if len(result.footprints.weights):
        writers["footprint_weights.tif"] = lambda path: write_weights(result, path)
    writers["summary.json"] = lambda path: write_json(result.summary, path)
    writers[MARK] = lambda path: write_json(result.provenance, path)
    if figures:
        from .figures import figures_of
        from .report import write_report

        writers["report.pdf"] = lambda path: write_report(result, path)
        for stem, draw in figures_of(result).items():
            writers[f"figures/{stem}.svg"] = _figure_writer(draw)
    if nwb is not None:
        from .nwb import write_nwb

        writers["recording.nwb"] = lambda path: write_nwb(result, path, details=nwb)
    return writers


def _table_writer(result: AnalysisResult, name: str) -> Writer:
    return lambda path: write_table(getattr(result, name), path, table=TABLES[name])


def _figure_writer(draw: Callable[[], Figure]) -> Writer:
    from .figures import write_figure

    return lambda path: write_figure(draw(), path)
