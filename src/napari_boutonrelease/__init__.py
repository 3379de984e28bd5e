"""From a movie of evoked transmitter release along an axon to defensible numbers, bouton by bouton.

Names are imported when they are first used: importing the package loads neither numpy nor napari nor Qt.
"""

from __future__ import annotations

__version__ = "0.1.0"

TYPE_CHECKING = False  # typing's own flag would cost the command line a tenth of its start
if TYPE_CHECKING:
    from . import analysis, batch, boutons, comparison, quanta, recording, reports, responses, simulation
    from .analysis.settings import Settings
    from .api import Analysis, ComparedRecordings, analyse, compare
    from .comparison.settings import CompareSettings
    from .errors import (
        AnalysisWarning,
        BoutonFileError,
        InputError,
        MovieError,
        OutputError,
        ProtocolError,
        SavedAnalysisError,
    )
    from .recording.movie import Movie, movie_from_array, open_movie
    from .recording.protocol import Protocol, RegularStimuli, StimulusTable, read_protocol, write_protocol
    from .response_shape import ResponseShape

_ROOMS = ("analysis", "batch", "boutons", "comparison", "quanta", "recording", "reports", "responses", "simulation")

_HOMES = {
    "api": ("Analysis", "ComparedRecordings", "analyse", "compare"),
    "comparison.settings": ("CompareSettings",),
    "analysis.settings": ("Settings",),
    "errors": (
        "AnalysisWarning",
        "BoutonFileError",
        "InputError",
        "MovieError",
        "OutputError",
        "ProtocolError",
        "SavedAnalysisError",
    ),
    "recording.movie": ("Movie", "movie_from_array", "open_movie"),
    "recording.protocol": ("Protocol", "RegularStimuli", "StimulusTable", "read_protocol", "write_protocol"),
    "response_shape": ("ResponseShape",),
}
_HOME_OF = {name: home for home, names in _HOMES.items() for name in names}

__all__ = [
    "Analysis",
    "AnalysisWarning",
    "BoutonFileError",
    "CompareSettings",
    "ComparedRecordings",
    "InputError",
    "Movie",
    "MovieError",
    "OutputError",
    "Protocol",
    "ProtocolError",
    "RegularStimuli",
    "ResponseShape",
    "SavedAnalysisError",
    "Settings",
    "StimulusTable",
    "analyse",
    "analysis",
    "batch",
    "boutons",
    "compare",
    "comparison",
    "movie_from_array",
    "open_movie",
    "quanta",
    "read_protocol",
    "recording",
    "reports",
    "responses",
    "simulation",
    "write_protocol",
]


def __getattr__(name: str) -> object:
    """Import a public name when it is first asked for (PEP 562)."""
    from importlib import import_module

    if name in _ROOMS:
        return import_module(f".{name}", __name__)
    if name not in _HOME_OF:
        raise AttributeError(f"module {__name__!r} has no attribute {name!r}")
    value = getattr(import_module(f".{_HOME_OF[name]}", __name__), name)
    globals()[name] = value
    return value


def __dir__() -> list[str]:
    return sorted({*globals(), *__all__})
