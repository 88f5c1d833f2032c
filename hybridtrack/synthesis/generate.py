"""From a recipe and a seed to a recording with truth."""

from collections.abc import Callable
from pathlib import Path

from hybridtrack.synthesis.board import BoardRecipe, generate_board
from hybridtrack.synthesis.greenhouse import generate_greenhouse
from hybridtrack.synthesis.recipe import Recipe, load_recipe


def generate(
    recipe: Recipe | Path | str,
    out: Path | str,
    seed: int = 0,
    progress: Callable[[str, float], None] | None = None,
) -> int:
    """Write the synthetic recording of `recipe` (or its file) and `seed` to `out`; returns the number of events.

    One seed, one result, whatever the number of threads. `progress(stage, fraction)` is told how far it is.
    Raises MissingFileError, FileFormatError, OptionError.
    """
    if not isinstance(recipe, Recipe):
        recipe = load_recipe(recipe)
    if isinstance(recipe, BoardRecipe):
        return generate_board(recipe, out, seed, progress)
    return generate_greenhouse(recipe, out, seed, progress)
