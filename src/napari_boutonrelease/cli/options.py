"""The options of the settings: built from their schema, read back as overrides, explained when refused."""

import argparse
import os

from ..errors import InputError

TYPE_CHECKING = False
if TYPE_CHECKING:
    from collections.abc import Iterator
    from typing import Any

    from pydantic import ValidationError

    from ..analysis.settings import Settings

_SCHEMA_PATH = os.path.join(os.path.dirname(__file__), os.pardir, "analysis", "settings_schema.json")  # noqa: PTH118, PTH120
_TYPES = {"number": float, "integer": int, "string": str}
_PREFIX = "settings."


def add_seed_option(parser: argparse.ArgumentParser) -> None:
    """Give the parser the option --seed of a simulation."""

    def seed(text: str) -> int:
        if not text.isdecimal():
            raise argparse.ArgumentTypeError(f"must be a whole number of 0 or more (given {text})")
        return int(text)

    parser.add_argument("--seed", type=seed, default=1, metavar="N", help="seed of every random number (default: 1)")


def add_settings_options(parser: argparse.ArgumentParser) -> None:
    """Give the parser one option a setting, in a group a section. Only options that are given leave a trace."""
    import json

    with open(_SCHEMA_PATH, encoding="utf-8") as file:  # noqa: PTH123
        schema = json.load(file)
    group: argparse._ArgumentGroup | None = None
    title = ""
    for option, path, field, section_title in settings_options(schema):
        if group is None or section_title != title:
            title = section_title
            group = parser.add_argument_group(title)
        _add_option(group, option, dest=_PREFIX + path, field=field)


def settings_options(schema: "dict[str, Any]") -> "Iterator[tuple[str, str, dict[str, Any], str]]":
    """Go through a schema of the settings: option, dotted path, field and section title of each setting.

    An option is called like its setting; where two sections share a name, the section's name goes first.
    """
    paths = list(_fields(schema))
    names = [path.rpartition(".")[2] for path, _, _ in paths]
    for (path, field, title), name in zip(paths, names, strict=True):
        full = path if names.count(name) > 1 else name
        yield "--" + full.replace(".", "-").replace("_", "-"), path, field, title


def given_settings(args: argparse.Namespace) -> "dict[str, Any]":
    """Return the settings named on the command line, nested like `Settings`."""
    given: dict[str, Any] = {}
    for key, value in vars(args).items():
        if key.startswith(_PREFIX):
            section, _, name = key.removeprefix(_PREFIX).rpartition(".")
            (given.setdefault(section, {}) if section else given)[name] = value
    return given


def read_settings(args: argparse.Namespace, *, base: "Settings | None" = None) -> "Settings":
    """Join `base` (else the defaults), the file of --settings and the options given; the later ones win.

    Raises
    ------
    InputError
        If a value is refused; the message names the option, or the key and the file.
    """
    values = base.model_dump() if base is not None else {}
    if getattr(args, "settings", None):
        values = _joined(values, _settings_of_file(args.settings))
        _validated(values, source=str(args.settings))
    return _validated(_joined(values, given_settings(args)), source=None)


def _fields(schema: "dict[str, Any]") -> "Iterator[tuple[str, dict[str, Any], str]]":
    for name, entry in schema["properties"].items():
        references = [part["$ref"] for part in (entry, *entry.get("allOf", ())) if "$ref" in part]
        if not references:
            yield name, entry, "any step"
            continue
        section = schema["$defs"][references[0].rpartition("/")[2]]
        title = section["description"].rstrip(".").lower()
        for field_name, field in section["properties"].items():
            yield f"{name}.{field_name}", field, title


def _add_option(group: argparse._ArgumentGroup, option: str, *, dest: str, field: "dict[str, Any]") -> None:
    default = field.get("default")
    words = field["description"].replace("%", "%%")
    kind = next((part for part in field.get("anyOf", [field]) if part.get("type") != "null"), field)
    if kind["type"] == "boolean":
        shown = "yes" if default else "no"
        group.add_argument(
            option,
            dest=dest,
            action=argparse.BooleanOptionalAction,
            default=argparse.SUPPRESS,
            help=f"{words} (default: {shown})",
        )
        return
    shown = "none" if default is None else f"{default:g}" if isinstance(default, float) else default
    group.add_argument(
        option,
        dest=dest,
        type=_TYPES[kind["type"]],
        choices=kind.get("enum"),
        metavar=None if "enum" in kind else "N" if kind["type"] == "integer" else "X",
        default=argparse.SUPPRESS,
        help=f"{words} (default: {shown})",
    )


def _settings_of_file(path: str) -> "dict[str, Any]":
    """Return the settings of a TOML file, or of a saved analysis."""
    import json
    import tomllib
    from pathlib import Path

    try:
        text = Path(path).read_text(encoding="utf-8")
        content = json.loads(text) if path.endswith(".json") else tomllib.loads(text)
    except OSError as error:
        raise InputError(f"{path}: the settings cannot be read ({error.strerror}); check the path.") from error
    except ValueError as error:
        raise InputError(
            f"{path}: the settings are not valid {Path(path).suffix[1:].upper() or 'TOML'} ({error})."
        ) from error
    if not isinstance(content, dict):
        raise InputError(f"{path}: expected sections of settings, found a {type(content).__name__}.")
    return content["settings"] if isinstance(content.get("settings"), dict) else content


def _joined(below: "dict[str, Any]", above: "dict[str, Any]") -> "dict[str, Any]":
    joined = dict(below)
    for key, value in above.items():
        both = isinstance(value, dict) and isinstance(joined.get(key), dict)
        joined[key] = joined[key] | value if both else value
    return joined


def _validated(values: "dict[str, Any]", *, source: "str | None") -> "Settings":
    from pydantic import ValidationError

    from ..analysis.settings import Settings

    try:
        return Settings.model_validate(values)
    except ValidationError as error:
        raise InputError(_sentence(error, source=source)) from error


def _sentence(error: "ValidationError", *, source: "str | None") -> str:
    """One sentence on the first value refused: where, why, and what was given."""
    from ..analysis.settings import Settings

    first = error.errors()[0]
    path = ".".join(str(part) for part in first["loc"])
    reason = first["msg"].removeprefix("Value error, ")
    options = {entry[1]: entry[0] for entry in settings_options(Settings.model_json_schema())}
    if first["type"] == "extra_forbidden":
        known = ", ".join(sorted(options))
        return f"{source}: there is no setting {path}; the settings are {known}."
    where = options.get(path, path) if source is None else f"{source}: {path}"
    reason = reason.replace("Input should be", "must be")
    return f"{where} {reason} (given {first['input']!r})."
