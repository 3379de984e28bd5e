"""Known truth to movie: demo, test bed and planner's engine. Shares nothing with the estimators."""

from .bounds import amplitude_limit, expected_profile, noise_variance, rest_image
from .movie import Simulation, frame_blocks, protocol_of, simulate_recording
from .plan import plan_recording
from .presets import PRESETS, Preset, preset_recipe
from .recipe import BoutonRecipe, Recipe, recipe_from_dict
from .truth import Truth, read_truth, truth_to_json
from .write import SimulatedFiles, write_simulation

__all__ = [
    "PRESETS",
    "BoutonRecipe",
    "Preset",
    "Recipe",
    "SimulatedFiles",
    "Simulation",
    "Truth",
    "amplitude_limit",
    "expected_profile",
    "frame_blocks",
    "noise_variance",
    "plan_recording",
    "preset_recipe",
    "protocol_of",
    "read_truth",
    "recipe_from_dict",
    "rest_image",
    "simulate_recording",
    "truth_to_json",
    "write_simulation",
]
