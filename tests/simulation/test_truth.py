import json

import numpy as np
import pytest

from napari_boutonrelease.errors import InputError
from napari_boutonrelease.simulation import (
    PRESETS,
    BoutonRecipe,
    Recipe,
    Truth,
    plan_recording,
    preset_recipe,
    read_truth,
    recipe_from_dict,
    truth_to_json,
)

FIELDS = [name for name in Truth.__dataclass_fields__ if name not in ("recipe", "kind")]


@pytest.mark.parametrize(
    "recipe",
    [
        Recipe(trials=3, pulses=2, specks_on_axon=1, spontaneous_per_s=0.5, dead_pixels=3, dark_frames=(4, 5)),
        Recipe(pulse_table_s=((0.1, 0.2), (0.9,)), n_boutons=0),
        Recipe(boutons=(BoutonRecipe(y_px=20, x_px=30, n_sites=2, p_site=0.1, q_dff=0.3, f0_photons=9),), trials=1),
    ],
)
def test_truth_comes_back_from_its_file_unchanged(recipe, tmp_path):
    truth = plan_recording(recipe, rng=np.random.default_rng(1))
    path = tmp_path / "movie.truth.json"
    path.write_text(truth_to_json(truth), encoding="utf-8")
    again = read_truth(path)
    assert again.recipe == recipe
    assert again.kind == truth.kind
    for name in FIELDS:
        before, after = getattr(truth, name), getattr(again, name)
        assert after.shape == before.shape, name
        assert after.dtype == before.dtype, name
        assert np.array_equal(before, after, equal_nan=before.dtype.kind == "f"), name


def test_truth_is_strict_json():
    text = truth_to_json(plan_recording(Recipe(trials=2), rng=np.random.default_rng(1)))
    assert "NaN" not in text
    assert json.loads(text)["version"] == 1


@pytest.mark.parametrize(
    ("text", "message"),
    [("{", "not the truth of a simulated recording"), ('{"version": 99}', "version 99"), ("[]", "not the truth")],
)
def test_another_file_is_refused_by_name(text, message, tmp_path):
    path = tmp_path / "other.json"
    path.write_text(text, encoding="utf-8")
    with pytest.raises(InputError, match=message):
        read_truth(path)


@pytest.mark.parametrize("name", PRESETS)
def test_recipes_come_back_from_their_dictionary(name):
    recipe = preset_recipe(name)
    assert recipe_from_dict(json.loads(json.dumps(recipe.as_dict()))) == recipe


def test_an_unknown_setting_is_named():
    with pytest.raises(InputError, match="Unknown settings of a simulation: speed"):
        recipe_from_dict({"speed": 1})
