import numpy as np
import pytest

from napari_boutonrelease.errors import InputError
from napari_boutonrelease.simulation import PRESETS, amplitude_limit, plan_recording, preset_recipe, simulate_recording


@pytest.mark.parametrize("name", PRESETS)
def test_every_preset_gives_a_movie(name):
    recipe = preset_recipe(name, trials=2)
    simulation = simulate_recording(recipe, rng=np.random.default_rng(1))
    assert simulation.frames.shape == (recipe.n_frames, recipe.height_px, recipe.width_px)
    assert simulation.protocol.stimuli.trials == 2
    assert simulation.truth.boutons.size == recipe.n_boutons
    assert simulation.frames.max() < 60_000


def quanta_in_noise(name):
    recipe = preset_recipe(name, trials=3)
    truth = plan_recording(recipe, rng=np.random.default_rng(1))
    slow = recipe.decay_s > 1
    limits = [
        amplitude_limit(
            truth,
            spot,
            pulse=0,
            before_s=2.5 if slow else 0.3,
            after_s=15.0 if slow else 0.4,
            offset=True,
            background=True,
            neighbours=True,
        )
        for spot in truth.boutons
    ]
    return np.median(truth.q_dff[truth.boutons] / limits)


@pytest.mark.parametrize(("name", "low", "high"), [("fast-pair", 4, 5), ("slow-single", 4, 6.5), ("dim", 1.6, 2.2)])
def test_one_vesicle_stands_out_of_the_noise_as_promised(name, low, high):
    assert low < quanta_in_noise(name) < high


def test_silent_preset_releases_nothing_at_all():
    truth = plan_recording(preset_recipe("silent"), rng=np.random.default_rng(3))
    assert truth.vesicle_s.size == 0
    assert set(truth.kind) == {"silent", "speck"}


def test_unknown_names_are_answered_with_what_there_is():
    with pytest.raises(InputError, match=r"no preset 'fast'; choose one of fast-pair, fast-single"):
        preset_recipe("fast")
    with pytest.raises(InputError, match=r"no such setting.*'speed'"):
        preset_recipe("fast-pair", speed=1)
