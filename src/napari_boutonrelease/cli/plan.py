"""`boutonrelease plan`: how many trials a wanted precision needs."""

import argparse
import os

from ..analysis.usual_goals import USUAL_GOALS, USUAL_SIMULATIONS
from ..errors import InputError
from .options import add_seed_option

TYPE_CHECKING = False
if TYPE_CHECKING:
    from collections.abc import Callable

    from ..analysis.plan import Goals
    from ..analysis.plan_inputs import MeasuredBouton

_P_RELEASE, _N_SITES, _Q_OVER_NOISE, _Q_CV, _N_BOUTONS = 0.4, 2, 4.0, 0.3, 10

EPILOG = """\
Trials are those of the whole recording; for a change, those before and as many after it. All is worked out for
recordings in which one vesicle is so many times the noise, and vesicles are known from ten boutons of one axon.

boutonrelease plan --p-release 0.3 --q-over-noise 4 --width 0.15
boutonrelease plan --n-sites 1 --p-site 0.5 --p-change -0.2 --boutons 8
boutonrelease plan axon.release/ --ppr 1.4 --power 0.9 --out axon.plan"""


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Options of `plan`."""
    parser.usage = "%(prog)s [ANALYSIS] [bouton] [goals] [--out DIR]"
    parser.epilog = EPILOG
    parser.add_argument(
        "analysis",
        nargs="?",
        metavar="ANALYSIS",
        help="folder of results or its analysis.json: plan for each of its boutons",
    )
    bouton = parser.add_argument_group("the bouton, where there is no ANALYSIS")
    bouton.add_argument(
        "--p-release",
        type=_fraction,
        metavar="P",
        help=f"probability that a pulse releases at least one vesicle (default: {_P_RELEASE})",
    )
    bouton.add_argument(
        "--p-site", type=_fraction, metavar="P", help="instead of --p-release: release probability of each site"
    )
    bouton.add_argument("--n-sites", type=_count(1), metavar="N", help=f"release sites (default: {_N_SITES})")
    bouton.add_argument(
        "--q-over-noise",
        type=_positive,
        metavar="X",
        help=f"response to one vesicle, in SDs of an amplitude's noise: snr in boutons.csv (default: {_Q_OVER_NOISE:g},"
        " or what ANALYSIS has)",
    )
    bouton.add_argument(
        "--q-cv",
        type=_positive,
        metavar="X",
        help=f"coefficient of variation of one vesicle (default: {_Q_CV}, or what ANALYSIS has)",
    )
    goals = parser.add_argument_group("goals")
    goals.add_argument(
        "--width",
        type=_fraction,
        default=USUAL_GOALS["width"],
        metavar="W",
        help="full width of the 95 %% interval of p_release (default: %(default)s)",
    )
    goals.add_argument(
        "--sites", type=_count(1), metavar="N", help="tell N sites from N + 1 (default: the bouton's own number)"
    )
    goals.add_argument(
        "--ppr",
        type=_ratio,
        default=USUAL_GOALS["ppr"],
        metavar="R",
        help="tell a paired-pulse ratio R from 1; p_site changes, vesicles do not (default: %(default)s)",
    )
    goals.add_argument(
        "--p-change",
        type=_change,
        default=USUAL_GOALS["change"],
        metavar="D",
        help="see p_release change by D between two conditions; negative for less (default: %(default)s)",
    )
    goals.add_argument(
        "--boutons",
        type=_count(2),
        metavar="B",
        help=f"see that change over B boutons, paired (default: {_N_BOUTONS}, or those of ANALYSIS)",
    )
    goals.add_argument(
        "--change-sd",
        type=_not_negative,
        default=USUAL_GOALS["change_sd"],
        metavar="D",
        help="SD by which the true change differs between those boutons (default: %(default)s)",
    )
    goals.add_argument(
        "--power",
        type=_fraction,
        default=USUAL_GOALS["power"],
        metavar="P",
        help="chance of telling and of seeing (default: %(default)s)",
    )
    parser.add_argument(
        "--simulations",
        type=_count(0),
        default=USUAL_SIMULATIONS,
        metavar="N",
        help="simulated recordings that check the trials for --ppr; 0 leaves them out (default: %(default)s)",
    )
    add_seed_option(parser)
    parser.add_argument("--out", metavar="DIR", help="folder for the tables, their description and the curves")
    parser.add_argument("--overwrite", action="store_true", help="replace a plan that is already there")


def run(args: argparse.Namespace) -> None:
    """Plan, print, and write where that is asked for."""
    from pathlib import Path

    import numpy as np

    from ..analysis.plan import make_plan
    from ..reports import check_can_write
    from ..reports.plan import PLAN_MARK, write_plan
    from .plan_lines import plan_lines
    from .progress import progress_bar

    boutons = _boutons(args)
    if args.out:
        check_can_write(Path(args.out), overwrite=args.overwrite, mark=PLAN_MARK)
    with progress_bar("planning") as progress:
        plan = make_plan(
            boutons,
            goals=_goals(args),
            n_boutons=args.boutons if args.analysis else args.boutons or _N_BOUTONS,
            n_simulations=args.simulations,
            rng=np.random.default_rng(args.seed),
            progress=progress,
        )
    print(*plan_lines(plan), sep="\n")
    if args.out:
        asked = {
            "analysis": os.path.abspath(args.analysis) if args.analysis else None,  # noqa: PTH100
            "simulations": args.simulations,
            "seed": args.seed,
        }
        with progress_bar("drawing") as progress:
            write_plan(plan, Path(args.out), asked=asked, overwrite=args.overwrite, progress=progress)
        print(f"plan: {args.out}")


def _boutons(args: argparse.Namespace) -> "tuple[MeasuredBouton, ...]":
    """Return the boutons of the analysis, or the one that is described."""
    from ..analysis.plan_inputs import MeasuredBouton, read_measured_boutons
    from ..quanta import PlannedBouton

    if args.p_release is not None and args.p_site is not None:
        raise InputError("Give --p-release or --p-site, not both: each follows from the other and --n-sites.")
    if args.analysis:
        described = [name for name in ("p_release", "p_site", "n_sites") if getattr(args, name) is not None]
        if described:
            option = "--" + described[0].replace("_", "-")
            raise InputError(f"{option} describes a bouton, but {args.analysis} has its own: give one or the other.")
        return read_measured_boutons(args.analysis, q_over_noise=args.q_over_noise, q_cv=args.q_cv)
    one = PlannedBouton(
        n_sites=args.n_sites or _N_SITES,
        p_site=args.p_site or 0.5,
        q_over_noise=args.q_over_noise or _Q_OVER_NOISE,
        q_cv=args.q_cv or _Q_CV,
    )
    if args.p_site is None:
        one = one.releasing(args.p_release or _P_RELEASE)
    return (MeasuredBouton(bouton=None, trials=None, planned=one, reason=""),)


def _goals(args: argparse.Namespace) -> "Goals":
    from ..analysis.plan import Goals

    return Goals(
        width=args.width,
        sites=args.sites,
        ppr=args.ppr,
        change=args.p_change,
        change_sd=args.change_sd,
        power=args.power,
    )


def _number(text: str) -> float:
    try:
        return float(text)
    except ValueError:
        raise argparse.ArgumentTypeError(f"must be a number (given {text})") from None


def _fraction(text: str) -> float:
    value = _number(text)
    if not 0.0 < value < 1.0:
        raise argparse.ArgumentTypeError(f"must lie between 0 and 1, both excluded (given {text})")
    return value


def _positive(text: str) -> float:
    value = _number(text)
    if not 0.0 < value < float("inf"):
        raise argparse.ArgumentTypeError(f"must be greater than 0 (given {text})")
    return value


def _not_negative(text: str) -> float:
    value = _number(text)
    if not 0.0 <= value < float("inf"):
        raise argparse.ArgumentTypeError(f"must be 0 or more (given {text})")
    return value


def _ratio(text: str) -> float:
    value = _positive(text)
    if value == 1.0:
        raise argparse.ArgumentTypeError("must differ from 1: no number of trials tells 1 from 1")
    return value


def _change(text: str) -> float:
    value = _number(text)
    if not 0.0 < abs(value) < 1.0:
        raise argparse.ArgumentTypeError(f"must lie between -1 and 1 and differ from 0 (given {text})")
    return value


def _count(least: int) -> "Callable[[str], int]":
    def count(text: str) -> int:
        if not text.isdecimal() or int(text) < least:
            raise argparse.ArgumentTypeError(f"must be a whole number of {least} or more (given {text})")
        return int(text)

    return count
