"""Writes `settings_schema.json`, the JSON Schema of `Settings`.

The command line builds its options from that file, because importing the models takes longer than answering `--help`.
Run `python -m napari_boutonrelease.analysis.settings_schema` after a change of the settings.
"""

from __future__ import annotations

import json
from pathlib import Path

from .settings import Settings

SCHEMA_PATH = Path(__file__).with_name("settings_schema.json")


def settings_schema() -> str:
    """Return the JSON Schema of `Settings` as the text that the file holds."""
    return json.dumps(Settings.model_json_schema(), indent=1, ensure_ascii=False) + "\n"


if __name__ == "__main__":
    SCHEMA_PATH.write_text(settings_schema(), encoding="utf-8")
