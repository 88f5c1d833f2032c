"""Recipes of synthetic recordings: TOML files, one a recording, told apart by `kind`."""

import tomllib
from pathlib import Path
from typing import Any

from pydantic import BaseModel, ValidationError

from hybridtrack.errors import FileFormatError, MissingFileError
from hybridtrack.files import first_problem
from hybridtrack.synthesis.board import BoardRecipe
from hybridtrack.synthesis.greenhouse import GreenhouseRecipe

Recipe = BoardRecipe | GreenhouseRecipe
KINDS: dict[str, type[BaseModel]] = {"board": BoardRecipe, "greenhouse": GreenhouseRecipe}


def recipe_from_data(data: dict[str, Any], source: str, folder: Path | None = None) -> Recipe:
    """Check a recipe's tables; relative files in it count from `folder`. Raises FileFormatError."""
    kind = data.get("kind")
    if kind not in KINDS:
        raise FileFormatError(f"{source}: field 'kind': expected one of {', '.join(KINDS)}, got {kind!r}")
    try:
        return KINDS[kind].model_validate(data, context={"folder": folder})  # type: ignore[return-value]
    except ValidationError as error:
        raise FileFormatError(f"{source}: {first_problem(error)}") from None


def load_recipe(path: Path | str) -> Recipe:
    """Read a recipe. Raises MissingFileError or FileFormatError, which name field, requirement and value."""
    file = Path(path)
    if not file.is_file():
        raise MissingFileError(f"{file}: expected a recipe (TOML), found no such file")
    try:
        data = tomllib.loads(file.read_text(encoding="utf-8"))
    except (tomllib.TOMLDecodeError, UnicodeDecodeError) as error:
        raise FileFormatError(f"{file}: expected TOML text, got a syntax error ({error})") from None
    return recipe_from_data(data, str(file), file.parent)
