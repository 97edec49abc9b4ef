"""The recipe: what to measure, where, with which limits."""

from printmetrics.recipe.context import CONTEXT_COLUMNS, moment
from printmetrics.recipe.load import correction_sizes, load_recipe
from printmetrics.recipe.model import Correct, Images, Optics, Recipe, ScaleSource, Web

__all__ = [
    "CONTEXT_COLUMNS",
    "Correct",
    "Images",
    "Optics",
    "Recipe",
    "ScaleSource",
    "Web",
    "correction_sizes",
    "load_recipe",
    "moment",
]
