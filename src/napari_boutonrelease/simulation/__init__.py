"""Known truth to movie: demo, test bed and planner's engine. Shares nothing with the estimators."""

from .movie import Simulation, simulate_recording
from .plan import plan_recording
from .recipe import BoutonRecipe, Recipe, recipe_from_dict
from .truth import Truth, read_truth, truth_to_json

__all__ = [
    "BoutonRecipe",
    "Recipe",
    "Simulation",
    "Truth",
    "plan_recording",
    "read_truth",
    "recipe_from_dict",
    "simulate_recording",
    "truth_to_json",
]
