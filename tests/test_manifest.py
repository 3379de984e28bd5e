"""The napari manifest: complete, consistent and found."""

from __future__ import annotations

from importlib.metadata import entry_points
from importlib.util import find_spec
from pathlib import Path

import numpy as np
import pytest
from npe2 import PluginManifest

NAME = "napari-boutonrelease"


@pytest.fixture(scope="module")
def manifest():
    return PluginManifest.from_file(Path(find_spec("napari_boutonrelease").origin).with_name("napari.yaml"))


def test_the_entry_point_names_the_manifest(manifest):
    (point,) = entry_points(group="napari.manifest", name=NAME)
    assert point.value == "napari_boutonrelease:napari.yaml"
    assert manifest.name == NAME


def test_every_reference_in_the_manifest_exists(manifest):
    contributions = manifest.contributions
    commands = {command.id for command in contributions.commands}
    assert {sample.command for sample in contributions.sample_data} <= commands
    assert {widget.command for widget in contributions.widgets or ()} <= commands
    assert all(command.startswith(f"{NAME}.") for command in commands)


def test_every_command_can_be_imported(manifest):
    manifest.validate_imports()


def test_sample_keys_are_pinned(manifest):
    assert {sample.key for sample in manifest.contributions.sample_data} == {"fast-pair", "slow-single"}
