"""All that leaves: tables, arrays, their description, figures and the report, in one folder."""

from __future__ import annotations

from .comparison import write_comparison
from .datapackage import describe_package
from .export import write_result
from .folder import check_can_write, default_folder, replaced_whole
from .nwb_details import NwbDetails, check_can_write_nwb
from .stored import read_recording
from .strict_json import json_ready, write_json
from .tables import read_table, write_table

__all__ = [
    "NwbDetails",
    "check_can_write",
    "check_can_write_nwb",
    "default_folder",
    "describe_package",
    "json_ready",
    "read_recording",
    "read_table",
    "replaced_whole",
    "write_comparison",
    "write_json",
    "write_result",
    "write_table",
]
