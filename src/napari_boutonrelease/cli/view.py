"""`boutonrelease view`: a recording or a saved analysis in napari, with the docks."""

import argparse

from ..errors import InputError

TYPE_CHECKING = False
if TYPE_CHECKING:
    from pathlib import Path
    from typing import Any

EPILOG = """\
boutonrelease view axon.tif --protocol axon.protocol.toml
boutonrelease view axon.release/analysis.json"""


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Options of `view`."""
    parser.usage = "%(prog)s MOVIE|ANALYSIS.json [--protocol FILE] [--channel N]"
    parser.epilog = EPILOG
    parser.add_argument(
        "what", nargs="+", metavar="MOVIE|ANALYSIS.json", help="movie, folder or files, or a saved analysis"
    )
    parser.add_argument(
        "--protocol", metavar="FILE", help="stimulation protocol (TOML; default: MOVIE.protocol.toml beside the movie)"
    )
    parser.add_argument("--channel", type=int, metavar="N", help="channel to show, from 0, where there are several")


def run(args: argparse.Namespace) -> None:
    """Check what was given, then open it in napari."""
    from pathlib import Path

    paths = [Path(path) for path in args.what]
    if paths[0].suffix == ".json":
        if len(paths) > 1 or args.protocol or args.channel is not None:
            raise InputError(f"{paths[0]} holds its own movie and protocol: give it alone.")
        show, what = "view_analysis", _saved(paths[0])
    else:
        show, what = "view_movie", _movie(paths, args)
    docks = _docks()
    docks.run(getattr(docks, show), **what)


def _saved(path: "Path") -> "dict[str, Any]":
    from ..analysis.savefile import read_saved

    return {"path": path, "movie_files": read_saved(path).find_movie()}


def _movie(paths: "list[Path]", args: argparse.Namespace) -> "dict[str, Any]":
    from pathlib import Path

    from ..recording.movie import open_movie
    from ..recording.protocol import read_protocol

    movie = open_movie(paths[0] if len(paths) == 1 else paths, channel=args.channel)
    if args.protocol:
        read_protocol(args.protocol)
    return {"movie": movie, "protocol": Path(args.protocol) if args.protocol else None, "channel": args.channel}


def _docks() -> "Any":
    """Import the docks, by name: nothing else of the command line knows them."""
    from importlib import import_module

    try:
        import_module("qtpy.QtWidgets")
    except ImportError as error:
        raise InputError(
            "napari needs a Qt binding to open a window: pip install 'napari-boutonrelease[qt]'."
        ) from error
    return import_module("napari_boutonrelease.docks.view")
