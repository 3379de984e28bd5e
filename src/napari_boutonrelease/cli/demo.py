"""`boutonrelease demo`: a recording with known truth, through the whole analysis."""

import argparse


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Options of `demo`."""
    parser.usage = "%(prog)s [--out DIR] [--seed N] [--overwrite]"
    parser.add_argument(
        "--out",
        default="boutonrelease-demo",
        metavar="DIR",
        help="folder for the recording and its results (default: boutonrelease-demo)",
    )
    parser.add_argument("--seed", type=int, default=1, metavar="N", help="seed of the recording (default: 1)")
    parser.add_argument("--overwrite", action="store_true", help="replace a demo that is already there")


def run(args: argparse.Namespace) -> None:
    """Simulate, analyse, write, compare."""
