"""The stimulation protocol: what a person states about a recording, as TOML."""

from __future__ import annotations

import difflib
import json
import math
import os
import tomllib
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import Any

import numpy as np

from ..errors import InputError, OutputError, ProtocolError
from ..response_shape import ResponseShape
from .stimuli import RegularStimuli, StimulusTable, check_value, read_stimulus_table, stimulus_table_text

__all__ = [
    "Protocol",
    "RegularStimuli",
    "StimulusTable",
    "check_exposure",
    "protocol_from_dict",
    "protocol_to_dict",
    "read_protocol",
    "write_protocol",
]

_RECORDING = ("frame_interval_s", "exposure_s", "row_time_s", "pixel_size_um", "camera_offset")
_REGULAR = ("first_s", "trials", "trial_interval_s", "pulses", "pulse_interval_s")
_TABLE = ("trial", "pulse", "time_s")
_REPORTER = ("rise_s", "decay_s", "latency_s", "slow_fraction", "slow_decay_s")
_SECTIONS = {"recording": _RECORDING, "stimuli": (*_REGULAR, "times"), "reporter": _REPORTER}
_COUNTS = frozenset({"trials", "pulses"})


@dataclass(frozen=True, slots=True, kw_only=True)
class Protocol:
    """What was done in a recording. None: not stated; the movie's metadata or the defaults of `resolve_timing` hold.

    Attributes
    ----------
    frame_interval_s, exposure_s, row_time_s : float or None
        From frame to frame; light collection of a pixel in a frame; delay of each row's exposure behind the row above
        (rolling shutter, line scan; 0: all rows at once). In s.
    pixel_size_um : float or None
    camera_offset : float or None
        Counts at no light.
    stimuli : RegularStimuli or StimulusTable
    reporter : ResponseShape or None
        A fixed response shape in place of the fitted one.
    path : Path or None
        The file it was read from.

    Raises
    ------
    ProtocolError
        If a value is out of range or contradicts another.
    """

    frame_interval_s: float | None = None
    exposure_s: float | None = None
    row_time_s: float | None = None
    pixel_size_um: float | None = None
    camera_offset: float | None = None
    stimuli: RegularStimuli | StimulusTable
    reporter: ResponseShape | None = None
    path: Path | None = field(default=None, compare=False)

    def __post_init__(self) -> None:
        for key in ("frame_interval_s", "exposure_s", "pixel_size_um"):
            check_value("recording", key, getattr(self, key))
        check_value("recording", "row_time_s", self.row_time_s, zero=True)
        if self.camera_offset is not None and not math.isfinite(self.camera_offset):
            raise ProtocolError(f"[recording] camera_offset must be a finite number (given {self.camera_offset:g}).")
        if self.frame_interval_s is not None and self.exposure_s is not None:
            check_exposure(self.exposure_s, self.frame_interval_s)


def check_exposure(exposure_s: float, frame_interval_s: float) -> None:
    """Raise `ProtocolError` if the exposure is longer than the frame interval by more than rounding."""
    if exposure_s > frame_interval_s * (1 + 1e-6):
        raise ProtocolError(
            f"[recording] exposure_s = {exposure_s:g} is longer than the frame interval of {frame_interval_s:g} s: "
            "check both, in s."
        )


def read_protocol(path: str | Path) -> Protocol:
    """Read a stimulation protocol.

    Parameters
    ----------
    path : path
        A TOML file with the section [stimuli] and, where needed, [recording] and [reporter].

    Returns
    -------
    Protocol

    Raises
    ------
    ProtocolError
        If the file cannot be read; the message names the file and the line, key, or row and column of the table.
    """
    path = Path(path)
    try:
        document = tomllib.loads(path.read_text(encoding="utf-8-sig"))
    except OSError as error:
        raise ProtocolError(
            f"{path} cannot be opened ({error.strerror or error}): check the protocol's path."
        ) from error
    except (tomllib.TOMLDecodeError, UnicodeDecodeError) as error:
        raise ProtocolError(f"{path.name} is not valid TOML: {error}. Text needs quotes, numbers a point.") from error
    try:
        return _build(document, path)
    except ProtocolError as error:
        raise ProtocolError(f"{path.name}: {error}") from error


def write_protocol(protocol: Protocol, path: str | Path) -> None:
    """Write a protocol so that `read_protocol` gives it back; a crash leaves the old file or the new.

    A table of pulse times goes into `<name>.pulses.csv` beside the file.

    Parameters
    ----------
    protocol : Protocol
    path : path
        The TOML file to write; replaced if it exists.

    Raises
    ------
    OutputError
        If the file cannot be written.
    """
    path = Path(path)
    if isinstance(protocol.stimuli, StimulusTable):
        table_name = path.stem.removesuffix(".protocol") + ".pulses.csv"
        _write_whole(path.with_name(table_name), stimulus_table_text(protocol.stimuli))
        sections = _sections(protocol, stimuli={"times": table_name})
    else:
        sections = _sections(protocol, stimuli={key: getattr(protocol.stimuli, key) for key in _REGULAR})
    text = "\n".join(
        "\n".join([f"[{title}]", *(f"{key} = {_toml_value(key, value)}" for key, value in stated.items()), ""])
        for title, stated in sections.items()
        if stated
    )
    _write_whole(path, text)


def protocol_to_dict(protocol: Protocol) -> dict[str, Any]:
    """Return the protocol as JSON-ready sections, a table in full; `protocol_from_dict` gives it back."""
    if isinstance(protocol.stimuli, StimulusTable):
        table = {key: getattr(protocol.stimuli, key).tolist() for key in _TABLE}
        return _sections(protocol, stimuli=table)
    return _sections(protocol, stimuli={key: getattr(protocol.stimuli, key) for key in _REGULAR})


def protocol_from_dict(sections: dict[str, Any], *, source: Path) -> Protocol:
    """Rebuild a protocol from `protocol_to_dict`.

    Parameters
    ----------
    sections : dict
        As from `protocol_to_dict`.
    source : Path
        The file they were read from; relative names count from its folder.

    Returns
    -------
    Protocol

    Raises
    ------
    ProtocolError
        If a key is unknown, missing or wrong.
    """
    stimuli = sections.get("stimuli", {})
    if "time_s" not in stimuli:
        return _build(sections, source)
    table = StimulusTable(
        trial=np.asarray(stimuli["trial"], dtype=np.int64),
        pulse=np.asarray(stimuli["pulse"], dtype=np.int64),
        time_s=np.asarray(stimuli["time_s"], dtype=np.float64),
        source=str(source),
    )
    return replace(_build({**sections, "stimuli": {"first_s": 0.0, "trials": 1}}, source), stimuli=table)


def _sections(protocol: Protocol, *, stimuli: dict[str, Any]) -> dict[str, dict[str, Any]]:
    sections = {
        "recording": {key: getattr(protocol, key) for key in _RECORDING},
        "stimuli": stimuli,
        "reporter": {key: getattr(protocol.reporter, key) for key in _REPORTER if protocol.reporter},
    }
    stated = {
        title: {key: value for key, value in values.items() if value is not None} for title, values in sections.items()
    }
    return {title: values for title, values in stated.items() if values}


def _build(document: dict[str, Any], path: Path) -> Protocol:
    _check_known(document, tuple(_SECTIONS), "section")
    sections: dict[str, dict[str, Any]] = {}
    for title, keys in _SECTIONS.items():
        section = document.get(title, {})
        if not isinstance(section, dict):
            raise ProtocolError(f"{title} must be a section: write [{title}] on a line of its own, its keys below.")
        _check_known(section, keys, f"key in [{title}]")
        sections[title] = {key: _typed(title, key, value) for key, value in section.items()}
    return Protocol(
        **sections["recording"],
        stimuli=_build_stimuli(sections["stimuli"], path.parent),
        reporter=_build_reporter(sections["reporter"]) if "reporter" in document else None,
        path=path,
    )


def _build_stimuli(section: dict[str, Any], folder: Path) -> RegularStimuli | StimulusTable:
    if not section:
        raise ProtocolError(
            "the section [stimuli] is missing or empty: give first_s, trials, ..., or times = a CSV file."
        )
    if "times" in section:
        others = sorted(section.keys() - {"times"})
        if others:
            raise ProtocolError(
                f"[stimuli] has both times and {', '.join(others)}: give a table or a regular protocol, not both."
            )
        return read_stimulus_table(folder / section["times"])
    missing = [key for key in ("first_s", "trials") if key not in section]
    if missing:
        raise ProtocolError(f"[stimuli] {missing[0]} is missing: add it, or give times = a CSV file.")
    if "pulse_interval_s" in section and "pulses" not in section:
        raise ProtocolError("[stimuli] pulses is missing: with pulse_interval_s it must be given.")
    return RegularStimuli(
        first_s=section["first_s"],
        trials=section["trials"],
        trial_interval_s=section.get("trial_interval_s"),
        pulses=section.get("pulses", 1),
        pulse_interval_s=section.get("pulse_interval_s"),
    )


def _build_reporter(section: dict[str, Any]) -> ResponseShape:
    for key in ("rise_s", "decay_s", *(("slow_decay_s",) if section.get("slow_fraction") else ())):
        if key not in section:
            raise ProtocolError(
                f"[reporter] {key} is missing: add it, in s, or leave the section out to fit the shape."
            )
    try:
        return ResponseShape(**{"latency_s": 0.0, **section})
    except InputError as error:
        raise ProtocolError(f"[reporter] {error}") from error


def _check_known(found: dict[str, Any], known: tuple[str, ...], what: str) -> None:
    for key in found:
        if key not in known:
            near = difflib.get_close_matches(key, known, n=1, cutoff=0.5)
            hint = f"did you mean {near[0]}?" if near else f"known are {', '.join(known)}."
            raise ProtocolError(f"unknown {what}: {key}; {hint}")


def _typed(title: str, key: str, value: object) -> float | int | str:
    """`value` as the key's type; nothing is guessed."""
    given = f"(given {json.dumps(value, default=str)})"
    if key == "times":
        if not isinstance(value, str):
            raise ProtocolError(f"[{title}] times must be the name of a CSV file, in quotes {given}.")
        return value
    if isinstance(value, bool) or not isinstance(value, (int, float)):
        raise ProtocolError(f"[{title}] {key} must be a number, without quotes or unit {given}.")
    if key in _COUNTS:
        if not isinstance(value, int):
            raise ProtocolError(f"[{title}] {key} must be a whole number {given}.")
        return value
    return float(value)


def _toml_value(key: str, value: object) -> str:
    if isinstance(value, str):
        return json.dumps(value, ensure_ascii=False)
    return str(int(value)) if key in _COUNTS else repr(float(value))  # type: ignore[call-overload, arg-type]


def _write_whole(path: Path, text: str) -> None:
    part = path.with_name(f".{path.name}.{os.getpid()}.part")
    try:
        part.write_text(text, encoding="utf-8", newline="\n")
        part.replace(path)
    except OSError as error:
        part.unlink(missing_ok=True)
        raise OutputError(f"{path} cannot be written: {error.strerror or error}.") from error
