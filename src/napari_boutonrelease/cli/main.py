"""Finds the command that was asked for, runs it, and turns an error into one sentence."""

import os
import sys

from .. import __version__
from ..errors import AnalysisWarning, InputError

TYPE_CHECKING = False  # importing typing, like all that is not needed to answer --help, would slow the start
if TYPE_CHECKING:
    import argparse
    from collections.abc import Sequence
    from types import ModuleType

COMMANDS = {
    "demo": "write a demo recording, analyse it and show the estimates beside the truth",
    "simulate": "write a simulated movie, its protocol and its truth",
    "inspect": "say what a movie holds and whether it can be analysed",
    "analyse": "analyse one recording: boutons, release, quanta, report",
    "batch": "analyse many recordings, and put their boutons into one table",
    "compare": "compare the same boutons in two or more analysed recordings",
    "plan": "say how many trials a wanted precision needs",
    "view": "open a movie or a saved analysis in napari, with the docks",
}

DONE, FAILED, WRONG_INPUT, INTERRUPTED = 0, 1, 2, 130


def main(arguments: "Sequence[str] | None" = None) -> int:
    """Run one command; return 0 done, 1 the work failed, 2 the call or an input was wrong, 130 interrupted."""
    # numpy's own threads fight those that this program starts; this counts only before numpy is loaded.
    os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")
    arguments = sys.argv[1:] if arguments is None else list(arguments)
    if arguments == ["--version"]:  # without even argparse: programs ask this before each use
        print(f"boutonrelease {__version__}")
        return DONE
    name = next((word for word in arguments if not word.startswith("-")), None)
    args = build_parser(name).parse_args(arguments)
    return _guarded(command_module(args.command), args)


def build_parser(command: str | None = None) -> "argparse.ArgumentParser":
    """Parser of the whole program; only the options of `command` are filled in, to keep the start quick."""
    import argparse

    def formatter(prog: str) -> argparse.HelpFormatter:
        return argparse.RawDescriptionHelpFormatter(prog, max_help_position=30, width=_help_width())

    parser = argparse.ArgumentParser(
        prog="boutonrelease",
        description="From a movie of evoked transmitter release along an axon to each bouton's release probability,\n"
        "quanta and paired-pulse ratio, with intervals.",
        epilog="boutonrelease COMMAND --help explains a command.",
        formatter_class=formatter,
        allow_abbrev=False,
    )
    parser.add_argument("--version", action="version", version=f"%(prog)s {__version__}")
    commands = parser.add_subparsers(dest="command", metavar="COMMAND", required=True)
    for name, summary in COMMANDS.items():
        sub = commands.add_parser(
            name,
            help=summary,
            description=summary[0].upper() + summary[1:] + ".",
            formatter_class=formatter,
            allow_abbrev=False,
        )
        if name == command:
            command_module(name).add_arguments(sub)
            sub.add_argument("--debug", action="store_true", help="show the traceback of an error")
    return parser


def command_module(name: str) -> "ModuleType":
    """Import a command's module, which has `add_arguments(parser)` and `run(args)`; that may return an exit code."""
    from importlib import import_module

    return import_module(f".{name}", __package__)


def _guarded(command: "ModuleType", args: "argparse.Namespace") -> int:
    import warnings

    if not args.debug:
        warnings.showwarning = _show_warning
    try:
        code = command.run(args)
        sys.stdout.flush()
        return DONE if code is None else int(code)
    except BrokenPipeError:  # whoever read our output, `head` say, has seen enough
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
    except InputError as error:
        return _failed(f"error: {error}", code=WRONG_INPUT, debug=args.debug)
    except KeyboardInterrupt:
        return _failed("interrupted", code=INTERRUPTED, debug=args.debug)
    except Exception as error:  # noqa: BLE001
        sentence = f"{type(error).__name__}: {error}".rstrip(": ")
        return _failed(f"failed: {sentence} (--debug shows where)", code=FAILED, debug=args.debug)
    return DONE


def _failed(sentence: str, *, code: int, debug: bool) -> int:
    if debug:
        import traceback

        traceback.print_exc()
    print(f"boutonrelease: {sentence}", file=sys.stderr)
    return code


def _show_warning(message: Warning | str, category: type[Warning], *_: object, **__: object) -> None:
    """Print doubts about the recording as sentences; keep other libraries' warnings to --debug."""
    if issubclass(category, AnalysisWarning):
        print(f"boutonrelease: note: {message}", file=sys.stderr)


def _help_width() -> int:
    """Columns for help. argparse would ask shutil, whose import costs more than all parsing."""
    try:
        columns = int(os.environ.get("COLUMNS", 0)) or os.get_terminal_size().columns
    except (ValueError, OSError):
        columns = 100
    return max(60, min(columns, 120) - 2)
