"""`boutonrelease analyse`: the whole analysis of one recording."""

import argparse

from ..errors import InputError
from .options import add_settings_options, read_settings

TYPE_CHECKING = False
if TYPE_CHECKING:
    from collections.abc import Sequence
    from pathlib import Path
    from typing import Any

    from ..analysis.settings import Settings
    from ..reports import NwbDetails

EPILOG = """\
positions: y_px,x_px in pixels from 0 (centre of the first pixel) or y_um,x_um; a label TIFF has one number a bouton.
A setting on the command line wins over the same one in --settings or --from.

boutonrelease analyse axon.tif --protocol axon.protocol.toml
boutonrelease analyse trials/ --protocol pairs.toml --threshold-sd 3 --out axon3.release
boutonrelease analyse --from axon.release/analysis.json --out again.release"""

NWB_DETAILS = {
    "session_start": ("TIME", "when the recording began, as in 2025-03-01T14:30 (default: what the movie's file says)"),
    "subject_id": ("NAME", "animal or culture"),
    "species": ("NAME", "Latin name, as in 'Rattus norvegicus'"),
    "sex": ("LETTER", "M, F, O (other) or U (unknown)"),
    "age": ("SPAN", "P30D for 30 days, P3W/P4W for 3 to 4 weeks"),
    "reporter": ("NAME", "fluorescent reporter of release"),
    "location": ("NAME", "part of the brain; in the mouse, a term of the Allen Mouse Brain Atlas, as in CA1"),
    "experimenter": ("NAME", "who recorded: 'Last name, First name'"),
    "institution": ("NAME", "where it was recorded"),
}


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Options of `analyse`."""
    parser.usage = "%(prog)s MOVIE --protocol FILE [--boutons FILE] [--axon FILE] [--out DIR] [settings]"
    parser.epilog = EPILOG
    parser.add_argument("movie", nargs="*", metavar="MOVIE", help="TIFF movie, a folder, or one file a trial in order")
    parser.add_argument("--protocol", metavar="FILE", help="stimulation protocol (TOML)")
    parser.add_argument("--boutons", metavar="FILE", help="positions (CSV) or label TIFF, instead of finding boutons")
    parser.add_argument("--axon", metavar="FILE", help="points along the axon (CSV)")
    parser.add_argument("--from", dest="saved", metavar="FILE", help="repeat a saved analysis (its analysis.json)")
    parser.add_argument("--settings", metavar="FILE", help="settings from a TOML file or an analysis.json")
    parser.add_argument("--out", metavar="DIR", help="folder for the results (default: MOVIE.release beside the movie)")
    parser.add_argument("--overwrite", action="store_true", help="replace results that are already there")
    group = parser.add_argument_group("Neurodata Without Borders")
    group.add_argument("--nwb", action="store_true", help="also write recording.nwb, as does any option of this group")
    for name, (metavar, meaning) in NWB_DETAILS.items():
        group.add_argument(f"--nwb-{name.replace('_', '-')}", dest=f"nwb_{name}", metavar=metavar, help=meaning)
    add_settings_options(parser)


def run(args: argparse.Namespace) -> None:
    """Analyse, write, and say in a few lines what was found."""
    from ..api import analyse
    from ..reports import check_can_write
    from .progress import progress_bar
    from .summary import summary_lines

    nwb = _nwb_details(args)
    settings, source, inputs = _saved_inputs(args) if args.saved else _given_inputs(args)
    out = out_folder(args.out, movie=source)
    check_can_write(out, overwrite=args.overwrite)
    with progress_bar("analysing") as progress:
        analysis = analyse(**inputs, settings=settings, progress=progress)
    with progress_bar("writing") as progress:
        analysis.write(out, overwrite=args.overwrite, nwb=nwb or False, progress=progress)
    print(*summary_lines(analysis, folder=out), sep="\n")


def _nwb_details(args: argparse.Namespace) -> "NwbDetails | None":
    """Return what `recording.nwb` is to say; None where the file was not asked for."""
    given = {name: getattr(args, f"nwb_{name}") for name in NWB_DETAILS}
    if not args.nwb and all(value is None for value in given.values()):
        return None
    from ..reports import NwbDetails, check_can_write_nwb

    check_can_write_nwb()
    return NwbDetails(**given)


def _given_inputs(args: argparse.Namespace) -> "tuple[Settings, str, dict[str, Any]]":
    """Return settings, the movie's path and the inputs that the command line names."""
    from ..recording.movie import open_movie
    from ..recording.protocol import read_protocol

    if not args.movie:
        raise InputError("Give the MOVIE to analyse, or --from a saved analysis.")
    if not args.protocol:
        raise InputError(f"When was the axon stimulated in {args.movie[0]}? Give --protocol FILE.toml.")
    settings = read_settings(args)
    inputs = {
        "movie": open_movie(_source(args.movie), channel=settings.recording.channel),
        "protocol": read_protocol(args.protocol),
        "boutons": args.boutons,
        "axon": args.axon,
    }
    return settings, args.movie[0], inputs


def _saved_inputs(args: argparse.Namespace) -> "tuple[Settings, str, dict[str, Any]]":
    """Return the same from a saved analysis, in which the command line may replace parts."""
    from ..analysis.savefile import read_saved
    from ..recording.movie import open_movie
    from ..recording.protocol import read_protocol

    saved = read_saved(args.saved)
    settings = read_settings(args, base=saved.settings)
    movie = open_movie(_source(args.movie or saved.find_movie()), channel=settings.recording.channel)
    saved.check_movie(movie)
    inputs = {
        "movie": movie,
        "protocol": read_protocol(args.protocol) if args.protocol else saved.protocol,
        "boutons": args.boutons or saved.find_given("boutons"),
        "axon": args.axon or (saved.find_given("axon") if saved.axon_px is None else saved.axon_px),
        "edits": saved.edits,
    }
    return settings, str(movie.files[0]), inputs


def _source(paths: "Sequence[str | Path]") -> "str | Path | list[str | Path]":
    return paths[0] if len(paths) == 1 else list(paths)


def out_folder(given: str | None, *, movie: str) -> "Path":
    """Return the folder asked for, else `MOVIE.release` beside the movie."""
    from pathlib import Path

    from ..reports import default_folder

    return Path(given) if given else default_folder(Path(movie))
