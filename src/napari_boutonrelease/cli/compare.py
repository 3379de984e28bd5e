"""`boutonrelease compare`: the same boutons in two or more recordings."""

import argparse

from ..errors import InputError
from .options import add_seed_option

TYPE_CHECKING = False
if TYPE_CHECKING:
    from pathlib import Path

    import numpy as np
    from numpy.typing import NDArray

    from ..comparison import ComparedRecording, CompareSettings, Comparison

EPILOG = """\
ANALYSIS is a folder of results or the analysis.json in it. Give recordings in the order in which they were made; ids of
boutons are those of the first. Boutons are matched by laying the mean images on one another; look at the matches in
report.pdf, or give your own with --pairs: a CSV with a column a recording, in order, and an id or nothing in each cell.

boutonrelease compare control.release/ drug.release/ --out drug.comparison
boutonrelease compare low.release/ high.release/ --names "1 mM Ca" "4 mM Ca" """


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Options of `compare`."""
    parser.usage = "%(prog)s ANALYSIS ANALYSIS [ANALYSIS ...] [--out DIR] [options]"
    parser.epilog = EPILOG
    parser.add_argument("analyses", nargs="*", metavar="ANALYSIS", help="two or more analysed recordings")
    parser.add_argument("--names", nargs="+", metavar="NAME", help="what to call them (default: the folders' names)")
    parser.add_argument("--pairs", metavar="FILE", help="which bouton is which (CSV), instead of matching the images")
    parser.add_argument(
        "--match-um",
        type=float,
        metavar="X",
        help="how far apart both positions of a bouton may lie, µm (default: 0.6)",
    )
    parser.add_argument("--n-max", type=int, metavar="N", help="largest number of release sites tried (default: 8)")
    parser.add_argument(
        "--q-cv", type=float, metavar="X", help="expected variation of one vesicle's size (CV) (default: 0.3)"
    )
    parser.add_argument(
        "--same-interval-s",
        type=float,
        metavar="X",
        help="pulse intervals that differ by no more count as the same, s (default: 0.001)",
    )
    parser.add_argument(
        "--bootstrap",
        type=int,
        metavar="N",
        help="resamplings of the trials for intervals of ratios (default: 2000)",
    )
    add_seed_option(parser)
    parser.add_argument(
        "--out", metavar="DIR", help="folder for the results (default: FIRST.comparison beside the first)"
    )
    parser.add_argument("--overwrite", action="store_true", help="replace a comparison that is already there")


def run(args: argparse.Namespace) -> None:
    """Compare, write, and say in a few lines what was found."""
    from ..comparison import compare_recordings
    from ..reports import check_can_write
    from ..reports.comparison import COMPARISON_MARK, write_comparison
    from ..reports.comparison_report import comparison_sentences
    from .progress import progress_bar

    settings = _settings(args)
    recordings = _recordings(args)
    pairs = read_pairs(args.pairs, n_recordings=len(recordings)) if args.pairs else None
    out = _out_folder(args.out, first=args.analyses[0])
    check_can_write(out, overwrite=args.overwrite, mark=COMPARISON_MARK)
    with progress_bar("comparing") as progress:
        comparison = compare_recordings(recordings, settings=settings, pairs=pairs, progress=progress)
    with progress_bar("writing") as progress:
        write_comparison(comparison, out, overwrite=args.overwrite, progress=progress)
    print(*comparison_sentences(comparison), sep="\n")
    print(*_bouton_lines(comparison), sep="\n")
    print(*(f"caution: {caution}" for caution in comparison.cautions), sep="\n")
    print(f"results: {out} (begin with report.pdf)")


def read_pairs(path: str, *, n_recordings: int) -> "NDArray[np.int64]":
    """Read which bouton is which: a row a bouton, a column a recording, an id or nothing in each cell.

    Raises
    ------
    InputError
        If the file cannot be read, has another number of columns, or a cell is no id.
    """
    import csv

    import numpy as np

    try:
        with open(path, encoding="utf-8-sig", newline="") as file:  # noqa: PTH123
            lines = [line for line in csv.reader(file) if any(cell.strip() for cell in line)]
    except (OSError, UnicodeDecodeError) as error:
        raise InputError(f"{path}: the pairs of boutons cannot be read ({error}); give a CSV file.") from error
    rows = []
    for number, line in enumerate(lines[1:], start=2):
        if len(line) != n_recordings:
            raise InputError(
                f"{path}, row {number}: {len(line)} cells where {n_recordings} recordings are compared; give a column "
                "a recording below a header."
            )
        for cell in line:
            if cell.strip() and not cell.strip().isdecimal():
                raise InputError(f"{path}, row {number}: {cell.strip()!r} is not the id of a bouton.")
        rows.append([int(cell) if cell.strip() else 0 for cell in line])
    if not rows:
        raise InputError(f"{path} holds no pair of boutons below its header.")
    return np.asarray(rows, dtype=np.int64)


def _settings(args: argparse.Namespace) -> "CompareSettings":
    from pydantic import ValidationError

    from ..comparison import CompareSettings

    given = {
        name: getattr(args, name)
        for name in ("match_um", "n_max", "q_cv", "same_interval_s", "bootstrap", "seed")
        if getattr(args, name) is not None
    }
    try:
        return CompareSettings(**given)
    except ValidationError as error:
        first = error.errors()[0]
        option = "--" + str(first["loc"][0]).replace("_", "-")
        reason = first["msg"].replace("Input should be", "must be")
        raise InputError(f"{option} {reason} (given {first['input']!r}).") from error


def _recordings(args: argparse.Namespace) -> "list[ComparedRecording]":
    from ..reports.stored import read_recording

    if len(args.analyses) < 2:
        raise InputError(f"A comparison needs two or more ANALYSIS folders (given {len(args.analyses)}).")
    if args.names and len(args.names) != len(args.analyses):
        raise InputError(f"--names gives {len(args.names)} names for {len(args.analyses)} recordings.")
    names = args.names or [None] * len(args.analyses)
    return [read_recording(path, name=name) for path, name in zip(args.analyses, names, strict=True)]


def _out_folder(given: str | None, *, first: str) -> "Path":
    from pathlib import Path

    from ..reports.stored import results_folder

    if given:
        return Path(given)
    folder = results_folder(first)
    return folder.with_name(folder.resolve().name.removesuffix(".release") + ".comparison")


def _bouton_lines(comparison: "Comparison") -> "list[str]":
    """Return a line a bouton: sites, vesicle, what changed."""
    import numpy as np

    from ..reports.facts import texts, values
    from .summary import with_interval

    joint = comparison.joint
    n_set, changed, p = texts(joint, "n_set"), texts(joint, "changed"), values(joint, "changed_p")
    releases = np.isfinite(values(joint, "n_sites"))
    q, q_lo, q_hi = (values(joint, f"q{end}") for end in ("", "_lo", "_hi"))
    lines = ["bouton  n_sites   q (dF/F)              changed"]
    for row in np.flatnonzero(values(joint, "recordings") > 1):
        sites = n_set[row].replace(";", " ") if releases[row] else "-"
        vesicle = with_interval(q[row], q_lo[row], q_hi[row])
        change = f"{changed[row]} (p {p[row]:.2g})" if changed[row] else "-"
        lines.append(f"{values(joint, 'bouton')[row]:>6g}  {sites:<8}  {vesicle:<20}  {change}")
    return lines
