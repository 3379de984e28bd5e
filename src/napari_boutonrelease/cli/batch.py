"""`boutonrelease batch`: many recordings, and one table of all their boutons."""

import argparse

from .options import add_settings_options, read_settings

TYPE_CHECKING = False
if TYPE_CHECKING:
    from ..batch import BatchOutcome

EPILOG = """\
MANIFEST.csv has a row a recording: columns movie and protocol and, where wanted, boutons, axon, condition, out (folder
of the results) and any others, which are carried along. Paths start from its folder. Called again after a stop of any
kind, it goes on with what is not done. Exit code 1 if a recording failed.

boutonrelease batch study.csv
boutonrelease batch study.csv --out study --workers 8 --threshold-sd 3
boutonrelease batch study.csv --out study --scheduler tcp://node1:8786"""


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Options of `batch`."""
    parser.usage = "%(prog)s MANIFEST.csv [--workers N | --scheduler ADDRESS] [--out DIR] [settings]"
    parser.epilog = EPILOG
    parser.add_argument("manifest", metavar="MANIFEST.csv", help="table of the recordings")
    where = parser.add_mutually_exclusive_group()
    where.add_argument(
        "--workers", type=_count, metavar="N", help="recordings at a time, a core each (default: number of cores)"
    )
    where.add_argument("--scheduler", metavar="ADDRESS", help="use the workers of this dask.distributed scheduler")
    parser.add_argument(
        "--out",
        metavar="DIR",
        help="folder for the study's tables and, below it, the recordings' results (default: MANIFEST.study beside the "
        "manifest, results beside the movies)",
    )
    parser.add_argument("--settings", metavar="FILE", help="settings from a TOML file or an analysis.json")
    parser.add_argument("--no-report", action="store_true", help="leave out report.pdf and the figures of recordings")
    parser.add_argument(
        "--overwrite", action="store_true", help="analyse again what was made from another movie, protocol or setting"
    )
    add_settings_options(parser)


def run(args: argparse.Namespace) -> int:
    """Analyse what is not done yet, and say what became of it; return 1 if a recording failed."""
    import sys

    from ..batch import BatchInterrupted, run_batch
    from .progress import progress_bar

    settings = read_settings(args)
    try:
        with progress_bar("recordings", counted=True) as progress:
            outcome = run_batch(
                args.manifest,
                out=args.out,
                settings=settings,
                workers=args.workers,
                scheduler=args.scheduler,
                report=not args.no_report,
                overwrite=args.overwrite,
                progress=progress,
            )
    except BatchInterrupted as interrupted:
        print(*outcome_lines(interrupted.outcome), sep="\n")
        sys.stdout.flush()
        raise
    print(*outcome_lines(outcome), sep="\n")
    return 1 if outcome.failures else 0


def outcome_lines(outcome: "BatchOutcome") -> "list[str]":
    """Return the lines: how many are done, what failed and why, what it took, and where to read on."""
    recordings = outcome.recordings
    done, skipped, failures = outcome.names("done"), outcome.names("skipped"), outcome.failures
    before = len(done) - len(outcome.analysed)
    lines = [f"{len(done)} of {len(recordings)} recordings done" + (f", {before} of them before" if before else "")]
    if outcome.analysed:
        lines.append(_cost(outcome))
    if skipped:
        lines.append(f"{len(skipped)} not analysed yet: the same command goes on with them")
    versions = sorted(set(recordings["version"].dropna()))
    if len(versions) > 1:
        lines.append(f"caution: recordings were analysed by different versions ({', '.join(versions)})")
    lines += [f"failed: {name}: {sentence}" for name, sentence in failures.items()]
    lines.append(f"study: {outcome.folder} (study.csv: {len(outcome.study)} boutons; recordings.csv)")
    return lines


def _cost(outcome: "BatchOutcome") -> str:
    """Return what the recordings took that were analysed now."""
    now = outcome.recordings[outcome.recordings["recording"].isin(outcome.analysed)]
    seconds, memory = (now[name].dropna().astype(float) for name in ("seconds", "peak_memory_mb"))
    workers = f"{outcome.workers} at a time" if outcome.workers else "on the cluster"
    words = [f"  {workers}, one thread each"]
    if len(seconds):
        words.append(f"{seconds.median():.0f} s a recording (at most {seconds.max():.0f} s)")
    if len(memory):
        words.append(f"at most {memory.max():.0f} MB of memory each")
    return "; ".join(words)


def _count(text: str) -> int:
    if not text.isdecimal() or int(text) < 1:
        raise argparse.ArgumentTypeError(f"must be a whole number of 1 or more (given {text})")
    return int(text)
