"""All that leaves: tables, arrays, their description, figures and the report, in one folder."""

from __future__ import annotations

from .datapackage import describe_package
from .export import write_result
from .folder import check_can_write
from .tables import read_table, write_table

__all__ = ["check_can_write", "describe_package", "read_table", "write_result", "write_table"]
