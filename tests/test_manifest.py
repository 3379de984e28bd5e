"""The napari manifest: complete, consistent and found."""

from __future__ import annotations

from functools import partial
from importlib.metadata import entry_points
from importlib.util import find_spec
from pathlib import Path

import numpy as np
import pytest
from napari._app_model.constants import MenuId
from npe2 import PluginManifest
from npe2.manifest.utils import import_python_name

from napari_boutonrelease import movie_from_array
from napari_boutonrelease.docks.arrange import DOCKS
from napari_boutonrelease.recording.timing import resolve_timing
from napari_boutonrelease.simulation import presets

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
    assert {widget.command for widget in contributions.widgets} <= commands
    assert {reader.command for reader in contributions.readers} <= commands
    for menu, items in contributions.menus.items():
        assert menu in {str(known) for known in MenuId.contributables()}, "napari drops other menus in silence"
        assert {item.command for item in items} <= commands
    assert all(command.startswith(f"{NAME}.") for command in commands)


def test_every_dock_is_in_the_menu_and_all_of_them_at_once(manifest):
    titles = {widget.display_name for widget in manifest.contributions.widgets}
    assert titles == {"Bouton release: all docks", *DOCKS}


def test_every_command_can_be_imported(manifest):
    manifest.validate_imports()


def test_sample_keys_are_pinned(manifest):
    assert {sample.key for sample in manifest.contributions.sample_data} == {"fast-pair", "slow-single"}


@pytest.mark.parametrize("key", ["fast-pair", "slow-single"])
def test_sample_layers_carry_calibration_and_protocol(manifest, key, monkeypatch):
    """What napari makes of a sample: one image in s and µm, with the protocol that its frames obey."""
    monkeypatch.setattr(presets, "preset_recipe", partial(presets.preset_recipe, trials=3))
    (sample,) = (entry for entry in manifest.contributions.sample_data if entry.key == key)
    (command,) = (entry for entry in manifest.contributions.commands if entry.id == sample.command)
    ((frames, layer, kind),) = import_python_name(command.python_name)()
    protocol = layer["metadata"]["protocol"]
    recipe = layer["metadata"]["truth"].recipe
    assert kind == "image"
    assert frames.shape == (recipe.n_frames, recipe.height_px, recipe.width_px)
    assert layer["scale"] == (protocol.frame_interval_s, protocol.pixel_size_um, protocol.pixel_size_um)
    assert (layer["units"], layer["axis_labels"]) == (("s", "um", "um"), ("t", "y", "x"))
    timing = resolve_timing(movie_from_array(frames), protocol)
    assert protocol.stimuli.trials == 3
    assert timing.stimulus_s.shape == (protocol.stimuli.trials, protocol.stimuli.pulses)
    assert np.ptp(frames) > 0
