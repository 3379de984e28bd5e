"""`boutonrelease simulate`: a movie whose truth is known."""

import argparse

TYPE_CHECKING = False
if TYPE_CHECKING:
    pass

PRESETS = ("fast-pair", "slow-single")
_RECIPE_OPTIONS = {
    "trials": (int, "N", "repeats of the protocol"),
    "trial_interval_s": (float, "S", "from one trial to the next, s"),
    "pulses": (int, "N", "stimuli a trial"),
    "pulse_interval_s": (float, "S", "from one pulse to the next, s"),
    "frame_interval_s": (float, "S", "from one frame to the next, s"),
    "n_boutons": (int, "N", "boutons along the axon"),
    "silent_boutons": (int, "N", "how many of them never release"),
    "photons": (float, "X", "photons a frame at rest in a bouton's peak pixel"),
    "q_dff": (float, "X", "response to one vesicle, dF/F"),
    "spontaneous_per_s": (float, "X", "vesicles that a bouton loses without stimulus, per s"),
}

EPILOG = """\
Beside OUT.tif come OUT.protocol.toml, what `analyse` needs, and OUT.truth.json, what really happened.
The same preset, options and seed give the same movie. An option left out keeps the preset's value.

boutonrelease simulate axon.tif --preset fast-pair --seed 1
boutonrelease simulate dim.tif --photons 3 --trials 200 --set drift_jumps=2 --set n_sites=[1,2]"""


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Options of `simulate`."""
    parser.usage = "%(prog)s OUT.tif [--preset NAME] [--seed N] [options]"
    parser.epilog = EPILOG
    parser.add_argument("out", metavar="OUT.tif", help="movie to write")
    parser.add_argument(
        "--preset",
        choices=PRESETS,
        default="fast-pair",
        help="what kind of recording (default: fast-pair)",
    )
    parser.add_argument("--seed", type=int, default=1, metavar="N", help="seed of every random number (default: 1)")
    parser.add_argument("--file-per-trial", action="store_true", help="write a folder OUT with one file a trial")
    parser.add_argument("--overwrite", action="store_true", help="replace files that are already there")
    recording = parser.add_argument_group("recording (default: the preset's)")
    for name, (kind, metavar, words) in _RECIPE_OPTIONS.items():
        recording.add_argument(
            "--" + name.replace("_", "-"), dest=name, type=kind, metavar=metavar, default=None, help=words
        )
    recording.add_argument(
        "--set",
        action="append",
        default=[],
        metavar="NAME=VALUE",
        help="any other setting of the simulation's recipe, a number or a list; may be repeated",
    )


def run(args: argparse.Namespace) -> None:
    """Simulate and write."""
