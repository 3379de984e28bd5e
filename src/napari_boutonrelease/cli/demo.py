"""`boutonrelease demo`: a recording with known truth, through the whole analysis."""

import argparse

from .options import add_seed_option

EPILOG = "The recording is invented: release is drawn vesicle by vesicle and light photon by photon, from --seed."


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Options of `demo`."""
    parser.usage = "%(prog)s [--out DIR] [--seed N] [--overwrite]"
    parser.epilog = EPILOG
    parser.add_argument(
        "--out",
        default="boutonrelease-demo",
        metavar="DIR",
        help="folder for the recording and its results (default: boutonrelease-demo)",
    )
    add_seed_option(parser)
    parser.add_argument("--overwrite", action="store_true", help="replace a demo that is already there")


def run(args: argparse.Namespace) -> None:
    """Simulate, analyse, write, compare."""
    from pathlib import Path

    import numpy as np

    from ..api import analyse
    from ..reports import check_can_write
    from ..simulation.presets import preset_recipe
    from ..simulation.truth import read_truth
    from ..simulation.write import write_simulation
    from .comparison import comparison_lines
    from .progress import progress_bar
    from .summary import summary_lines

    folder = Path(args.out)
    results = folder / "demo.release"
    check_can_write(results, overwrite=args.overwrite)
    with progress_bar("simulating") as progress:
        recording = write_simulation(
            folder / "demo.tif",
            preset_recipe("fast-pair"),
            rng=np.random.default_rng(args.seed),
            overwrite=args.overwrite,
            progress=progress,
        )
    print(f"recording: {recording.movie} (simulated, seed {args.seed})")
    with progress_bar("analysing") as progress:
        analysis = analyse(recording.movie, recording.protocol, progress=progress)
    with progress_bar("writing") as progress:
        analysis.write(results, overwrite=args.overwrite, progress=progress)
    print(*summary_lines(analysis, folder=results), sep="\n")
    print("", "estimates (95 % interval) beside the truth", sep="\n")
    print(*comparison_lines(analysis.boutons, read_truth(recording.truth)), sep="\n")
