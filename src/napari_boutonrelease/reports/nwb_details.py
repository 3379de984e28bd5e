"""What an NWB file must say of animal and session, and no movie tells."""

from __future__ import annotations

import re
from dataclasses import dataclass, fields
from datetime import datetime
from importlib.util import find_spec

from ..errors import InputError, OutputError

_SPAN = r"P(?=[\dT])(\d+Y)?(\d+M)?(\d+W)?(\d+D)?(T(?=\d)(\d+H)?(\d+M)?(\d+S)?)?"  # a duration of ISO 8601
_FORMS = {
    "subject_id": (r"[^/\\]+", "a name without slashes"),
    "species": (
        r"[A-Z][a-z]* [a-z]+|http://purl\.obolibrary\.org/obo/NCBITaxon_\d+",
        "the Latin name of two words, as in Rattus norvegicus, or a link http://purl.obolibrary.org/obo/NCBITaxon_...",
    ),
    "sex": (r"[MFOU]|X[OX]", "M, F, O (other) or U (unknown); XO or XX of a worm"),
    "age": (rf"{_SPAN}(/({_SPAN})?)?", "an ISO 8601 duration: P30D is 30 days, P3W/P4W 3 to 4 weeks"),
    "experimenter": (r"[\w\s\-.']+,\s+[\w\s\-.']+", "Last name, First name"),
}


@dataclass(frozen=True, slots=True, kw_only=True)
class NwbDetails:
    """Animal, session and reporter; what is None is written as unknown.

    Attributes
    ----------
    session_start : str or None
        When the recording began, ISO 8601 (`2025-03-01T14:30`), in the time zone of this computer where it names none;
        where left out, what the movie's file says.
    subject_id : str or None
        Animal or culture.
    species : str or None
        Latin name, or link to the NCBI taxonomy.
    sex : str or None
        `M`, `F`, `O` or `U`.
    age : str or None
        ISO 8601 duration, `P30D` for 30 days.
    reporter : str or None
        Fluorescent reporter of release.
    location : str or None
        Part of the brain; in the mouse, a term of the Allen Mouse Brain Atlas (`CA1`).
    experimenter : str or None
        Who recorded, `Last name, First name`.
    institution : str or None
        Where.

    Raises
    ------
    InputError
        If a value does not have the form that the standard asks for.
    """

    session_start: str | None = None
    subject_id: str | None = None
    species: str | None = None
    sex: str | None = None
    age: str | None = None
    reporter: str | None = None
    location: str | None = None
    experimenter: str | None = None
    institution: str | None = None

    def __post_init__(self) -> None:
        for name, (pattern, wanted) in _FORMS.items():
            value = getattr(self, name)
            if value is not None and not re.fullmatch(pattern, value):
                raise InputError(f"nwb {name} must be {wanted} (given {value!r}).")
        start = self.start()
        if start is not None and start > datetime.now().astimezone():
            raise InputError(f"nwb session_start must not lie in the future (given {self.session_start!r}).")

    def start(self) -> datetime | None:
        """Return `session_start` with a time zone, None where it is not known."""
        if self.session_start is None:
            return None
        try:
            return datetime.fromisoformat(self.session_start).astimezone()
        except (ValueError, OverflowError, OSError):
            raise InputError(
                f"nwb session_start must be a date and time, as in 2025-03-01T14:30 (given {self.session_start!r})."
            ) from None

    @property
    def unknown(self) -> tuple[str, ...]:
        """Names of what was not given, apart from the session's start."""
        return tuple(
            field.name.replace("_", " ")
            for field in fields(self)
            if field.name != "session_start" and getattr(self, field.name) is None
        )


def check_can_write_nwb() -> None:
    """Raise unless the package that writes NWB files is installed; quick, as it is not imported.

    Raises
    ------
    OutputError
        If it is not.
    """
    if find_spec("pynwb") is None:
        raise OutputError(
            'recording.nwb needs the package pynwb, which is not installed: pip install "napari-boutonrelease[nwb]", '
            "or write the results without it."
        )
