"""What the model sees of a pixel: bands, published indices, the user's formulas; made block by block from a recipe."""

from classify.features.absorption import Dip, dips
from classify.features.build import build_recipe
from classify.features.facts import SceneFacts, scene_facts
from classify.features.fit import fit_recipe, scene_recipe
from classify.features.fitness import recipe_findings
from classify.features.formula import Formula, FormulaError, parse_formula
from classify.features.indices import Availability, Index, index_availability, index_catalogue
from classify.features.recipe import Recipe

__all__ = [
    "Availability",
    "Dip",
    "Formula",
    "FormulaError",
    "Index",
    "Recipe",
    "SceneFacts",
    "build_recipe",
    "dips",
    "fit_recipe",
    "index_availability",
    "index_catalogue",
    "parse_formula",
    "recipe_findings",
    "scene_facts",
    "scene_recipe",
]
