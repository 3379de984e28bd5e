"""The description of an output folder as a Frictionless Data Package (version 2)."""

from __future__ import annotations

import hashlib
import re
from collections.abc import Mapping
from typing import TYPE_CHECKING, Any

from ..analysis.column_types import Column, TableDefinition
from ..analysis.columns import BOUTONS
from .folder import PACKAGE

if TYPE_CHECKING:
    from pathlib import Path

_SCHEMA = "https://datapackage.org/profiles/2.0/datapackage.json"
_MEDIA_TYPES = {
    "csv": "text/csv",
    "json": "application/json",
    "npz": "application/zip",
    "nwb": "application/x-hdf5",
    "pdf": "application/pdf",
    "png": "image/png",
    "svg": "image/svg+xml",
    "tif": "image/tiff",
}
_MEANINGS = {
    "traces.npz": "time_s (frame), bouton (ids), f (counts), f0 (counts), dff (dF/F) as (bouton, frame), and "
    "null_amplitude (dF/F) as (bouton, null)",
    "mean_image.tif": "mean of the frames, movement taken out (counts)",
    "footprints.tif": "label image: 0 outside, the bouton id in its footprint's core",
    "footprint_weights.tif": "extraction weights, a page a bouton in the order of the ids",
    "summary.json": "results of the whole axon and the recording's quality",
    "analysis.json": "all that is needed to reopen and to repeat the analysis",
    "report.pdf": "what a person reads first",
    "comparison.json": "what was compared, with which settings, and what holds for all boutons together",
    "plan.json": "what the plan was asked for",
    "recording.nwb": "the results as Neurodata Without Borders",
}


def describe_package(
    folder: Path,
    *,
    name: str,
    tables: Mapping[str, TableDefinition],
    created: str | None = None,
    title: str | None = None,
) -> dict[str, Any]:
    """Describe every file of an output folder.

    Parameters
    ----------
    folder : Path
        Folder whose files are all written.
    name : str
        Name of the recording.
    tables : mapping of str to TableDefinition
        The data dictionary, by stem of the CSV file.
    created : str, optional
        UTC time of the analysis, ISO 8601.
    title : str, optional
        What the folder is, in words; results of one recording, where left out.

    Returns
    -------
    dict
        Content of `datapackage.json`: tables with their columns' types, units, meanings and constraints, other
        files with their meaning, all with size and SHA-256.
    """
    files = sorted(path for path in folder.rglob("*") if path.is_file() and path.name != PACKAGE)
    ordered = [folder / f"{stem}.csv" for stem in tables if folder / f"{stem}.csv" in files]
    ordered += [path for path in files if path not in ordered]
    package: dict[str, Any] = {
        "$schema": _SCHEMA,
        "name": _slug(name),
        "title": title or f"Vesicle release of the boutons in {name}",
    }
    if created:
        package["created"] = created
    return package | {"resources": [_resource(path, folder, tables) for path in ordered]}


def _resource(path: Path, folder: Path, tables: Mapping[str, TableDefinition]) -> dict[str, Any]:
    relative = path.relative_to(folder).as_posix()
    suffix = path.suffix.removeprefix(".").lower()
    table = tables.get(relative.removesuffix(".csv")) if suffix == "csv" else None
    resource: dict[str, Any] = {
        "name": table.name if table else _slug(relative),
        "path": relative,
        "format": suffix,
        "mediatype": _MEDIA_TYPES.get(suffix, "application/octet-stream"),
        "bytes": path.stat().st_size,
        "hash": f"sha256:{_sha256(path)}",
    }
    if table is None:
        return resource | {"description": _MEANINGS.get(relative, _figure_meaning(path))}
    schema = _schema(table, with_boutons=BOUTONS.name in tables)
    return resource | {"type": "table", "description": table.meaning, "encoding": "utf-8", "schema": schema}


def _schema(table: TableDefinition, *, with_boutons: bool) -> dict[str, Any]:
    schema: dict[str, Any] = {"fields": [_field(column) for column in table.columns], "missingValues": [""]}
    if table.key:
        schema["primaryKey"] = list(table.key)
    if with_boutons and table is not BOUTONS and "bouton" in table.names:
        reference = {"resource": BOUTONS.name, "fields": ["bouton"]}
        schema["foreignKeys"] = [{"fields": ["bouton"], "reference": reference}]
    return schema


def _field(column: Column) -> dict[str, Any]:
    description: dict[str, Any] = {"name": column.name, "type": column.type, "description": column.meaning}
    if column.unit:
        description["unit"] = column.unit
    if column.constraints:
        description["constraints"] = dict(column.constraints)
    return description


def _figure_meaning(path: Path) -> str:
    return f"figure: {path.stem.replace('_', ' ')}" if path.parent.name == "figures" else ""


def _slug(text: str) -> str:
    """Lower-case letters, digits, `-`, `_` and `.` alone, as names of packages and resources must be."""
    return re.sub(r"[^a-z0-9_.-]+", "-", text.lower()).strip("-.") or "recording"


def _sha256(path: Path) -> str:
    with path.open("rb") as file:
        return hashlib.file_digest(file, "sha256").hexdigest()
