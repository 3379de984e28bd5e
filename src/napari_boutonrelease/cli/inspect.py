"""`boutonrelease inspect`: what a movie holds, and whether it can be analysed."""

import argparse

from ..errors import InputError

TYPE_CHECKING = False
if TYPE_CHECKING:
    from ..recording.movie import Movie
    from ..recording.protocol import Protocol
    from ..recording.timing import Timing

_BLOCK_BYTES = 1 << 25


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Options of `inspect`."""
    parser.usage = "%(prog)s MOVIE [--protocol FILE] [--channel N]"
    parser.add_argument("movie", nargs="+", metavar="MOVIE", help="TIFF movie, a folder, or one file a trial in order")
    parser.add_argument("--protocol", metavar="FILE", help="stimulation protocol (TOML), to check it against the movie")
    parser.add_argument("--channel", type=int, metavar="N", help="channel, from 0, where the movie has several")


def run(args: argparse.Namespace) -> None:
    """Measure and report; a movie that cannot be analysed yet is no error, one that cannot be read is."""
    from ..analysis.settings import Settings
    from ..recording.light import measure_light
    from ..recording.motion import measure_drift
    from ..recording.movie import open_movie
    from ..recording.protocol import read_protocol
    from . import inspection as say
    from .progress import progress_bar

    movie = open_movie(args.movie if len(args.movie) > 1 else args.movie[0], channel=args.channel)
    protocol = read_protocol(args.protocol) if args.protocol else None
    timing, missing = _resolved(movie, protocol)
    print(args.movie[0] if len(args.movie) == 1 else f"{args.movie[0]} and {len(args.movie) - 1} more")
    print(*say.movie_lines(movie), *say.calibration_lines(movie, timing), sep="\n")
    if timing is not None:
        print("stimuli", *say.stimulus_lines(timing), sep="\n")

    n_frames, height, width = movie.shape
    block_frames = max(2, min(n_frames, _BLOCK_BYTES // (height * width * movie.dtype.itemsize)))
    offset = protocol.camera_offset if protocol else None
    with progress_bar("measuring light") as progress:
        light = measure_light(movie, camera_offset=offset, block_frames=block_frames, progress=progress)
    print("light", *say.light_lines(light), sep="\n")
    with progress_bar("measuring movement") as progress:
        drift = measure_drift(
            movie,
            light=light,
            max_shift_px=Settings().recording.max_shift_px,
            block_frames=block_frames,
            progress=progress,
        )
    print("movement", *say.drift_lines(drift, light), sep="\n")

    if light.bad_frame.all():
        missing.append("No frame can be used: the movie is dark, never changes or holds no numbers.")
    if missing:
        print("verdict: cannot be analysed yet", *(f"  - {sentence}" for sentence in missing), sep="\n")
    elif timing is not None:
        print(
            "verdict: can be analysed", *(f"  - {sentence}" for sentence in say.doubts(light, drift, timing)), sep="\n"
        )


def _resolved(movie: "Movie", protocol: "Protocol | None") -> "tuple[Timing | None, list[str]]":
    """Bring movie and protocol together; where that fails, say what is missing."""
    from ..recording.timing import resolve_timing

    if protocol is None:
        missing = ["When was the axon stimulated? Give --protocol FILE.toml."]
        if movie.frame_interval_s is None:
            missing.append("The file does not say its frame interval: set frame_interval_s in the protocol.")
        if movie.pixel_size_um is None:
            missing.append("The file does not say its pixel size: set pixel_size_um in the protocol.")
        return None, missing
    try:
        return resolve_timing(movie, protocol), []
    except InputError as error:
        return None, [str(error)]
