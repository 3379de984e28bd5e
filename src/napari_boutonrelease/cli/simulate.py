"""`boutonrelease simulate`: a movie whose truth is known."""

import argparse

from ..errors import InputError
from .options import add_seed_option

TYPE_CHECKING = False
if TYPE_CHECKING:
    from ..simulation import Recipe

PRESETS = (
    "fast-pair",
    "fast-single",
    "fast-train",
    "slow-single",
    "crowded",
    "silent",
    "dim",
    "file-per-trial",
    "rolling",
)
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
        metavar="NAME",
        help=f"what kind of recording: {', '.join(PRESETS)} (default: fast-pair)",
    )
    add_seed_option(parser)
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
    import numpy as np

    from ..simulation.write import write_simulation
    from .progress import progress_bar

    recipe, rng = requested_recipe(args), np.random.default_rng(args.seed)
    with progress_bar("simulating") as progress:
        files = write_simulation(args.out, recipe, rng=rng, overwrite=args.overwrite, progress=progress)
    print(files.movie, files.protocol, files.truth, sep="\n")


def requested_recipe(args: argparse.Namespace) -> "Recipe":
    """Return the preset's recipe with the changes that the command line asks for.

    Raises
    ------
    InputError
        If a setting is unknown or a value is refused.
    """
    from ..simulation.presets import preset_recipe
    from ..simulation.recipe import recipe_from_dict

    values = preset_recipe(args.preset).as_dict()
    values |= {name: getattr(args, name) for name in _RECIPE_OPTIONS if getattr(args, name) is not None}
    values |= dict(map(_assignment, args.set))
    if args.file_per_trial and values["file_s"] is None:
        values["file_s"] = values["trial_interval_s"]
    try:
        return recipe_from_dict(values)
    except InputError:
        raise
    except (TypeError, ValueError) as error:
        raise InputError(f"A value of --set has the wrong kind ({error}).") from error


def _assignment(text: str) -> "tuple[str, object]":
    """Take `name=value` apart; a value that is no number, list or true/false is a word."""
    import json

    name, sign, value = text.partition("=")
    if not (name and sign):
        raise InputError(f"--set {text}: expected NAME=VALUE, as in --set drift_jumps=2.")
    try:
        return name.replace("-", "_"), json.loads(value)
    except ValueError:
        return name.replace("-", "_"), value
