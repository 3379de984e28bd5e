"""Writes those parts of the reference that the code itself knows best; pages include them."""

from __future__ import annotations

import json
import os
from collections.abc import Iterable, Sequence
from pathlib import Path


def write_generated_pages(folder: Path) -> None:
    """Write every generated part into `folder`, replacing what an earlier build left."""
    folder.mkdir(exist_ok=True)
    parts = {
        "cli.md": command_line(),
        "settings.md": settings(),
        "flags.md": flags(),
        "columns.md": columns(),
    }
    for name, text in parts.items():
        (folder / name).write_text(text, encoding="utf-8")


def command_line() -> str:
    """Help of each command, as a terminal of 98 columns shows it."""
    os.environ["COLUMNS"] = "100"
    from napari_boutonrelease.cli.main import COMMANDS, build_parser

    parts = [f"```text\n{build_parser().format_help()}```"]
    for name in COMMANDS:
        commands = next(action for action in build_parser(name)._actions if action.dest == "command")
        assert commands.choices is not None
        parts.append(f"## {name}\n\n```text\n{commands.choices[name].format_help()}```")  # type: ignore[index]
    return "\n\n".join(parts) + "\n"


def settings() -> str:
    """Each setting: option, key in a settings file, default, range and meaning."""
    from napari_boutonrelease.analysis.settings import Settings
    from napari_boutonrelease.cli.options import settings_options

    rows = [
        (f"`{path}`", f"`{option}`", _default(field), _range(field), field["description"])
        for option, path, field, _ in settings_options(Settings.model_json_schema())
    ]
    return _table(("key", "option", "default", "range", "meaning"), rows)


def flags() -> str:
    """Every flag of a bouton: code, meaning, advice."""
    from napari_boutonrelease.flags import FLAGS

    rows = ((f"`{flag.code}`", flag.meaning, flag.advice) for flag in FLAGS.values())
    return _table(("flag", "what was found", "what to do"), rows)


def columns() -> str:
    """Every column of every table."""
    from napari_boutonrelease.analysis.columns import SUMMARY, TABLES
    from napari_boutonrelease.analysis.plan_columns import PLAN, PLAN_CURVES
    from napari_boutonrelease.batch.columns import recordings_table, study_table
    from napari_boutonrelease.comparison.columns import TABLES as COMPARED

    parts = []
    studies = (study_table(()), recordings_table(()))
    tables = (*TABLES.values(), *COMPARED.values(), PLAN, PLAN_CURVES, *studies)
    for table in {table.name: table for table in tables}.values():
        rows = ((f"`{column.name}`", column.type, column.unit, column.meaning) for column in table.columns)
        heading = f"## {table.name}.csv\n\n{table.meaning[0].upper()}{table.meaning[1:]}.\n\n"
        parts.append(heading + _table(("column", "type", "unit", "meaning"), rows))
    facts = _table(("key", "meaning"), ((f"`{key}`", meaning) for key, meaning in SUMMARY.items()))
    return "\n".join([*parts, "## summary.json\n\nEach key may be missing or null.\n\n" + facts])


def _default(field: dict[str, object]) -> str:
    value = field.get("default")
    return "none" if value is None else f"`{json.dumps(value).strip(chr(34))}`"


def _range(field: dict[str, object]) -> str:
    options = field.get("anyOf", [field])
    assert isinstance(options, list)
    kind = next(part for part in options if part.get("type") != "null")
    if "enum" in kind:
        return ", ".join(f"`{choice}`" for choice in kind["enum"])
    if kind["type"] == "boolean":
        return "`true`, `false`"
    signs = {"exclusiveMinimum": ">", "minimum": "≥", "exclusiveMaximum": "<", "maximum": "≤"}
    return ", ".join(f"{sign} {kind[key]:g}" for key, sign in signs.items() if key in kind)


def _table(header: Sequence[str], rows: Iterable[Sequence[str]]) -> str:
    lines = [header, ["---"] * len(header), *rows]
    return "\n".join("| " + " | ".join(cell.replace("|", "\\|") for cell in line) + " |" for line in lines) + "\n"
