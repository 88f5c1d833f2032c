"""Recipes are read, checked and refused with the field at fault."""

from pathlib import Path

import pytest

from hybridtrack.errors import FileFormatError, MissingFileError
from hybridtrack.module import save_module, save_target
from hybridtrack.synthesis.board import BoardRecipe
from hybridtrack.synthesis.generate import generate
from hybridtrack.synthesis.recipe import load_recipe
from tests.synthesis.boards import board_target
from tests.synthesis.modules import small_module

SEQUENCES = Path(__file__).parents[2] / "sequences"
HEAD = 'kind = "board"\n[module]\nfile = "m.json"\n[target]\nfile = "t.json"\n'


def written(folder: Path, text: str) -> Path:
    """A recipe file with its module and target beside it."""
    plain = small_module(80, 50).model_copy(update={"contrast": None, "colour_from_event": None})
    save_module(plain, folder / "m.json")
    save_target(board_target(), folder / "t.json")
    (folder / "r.toml").write_text(text, encoding="utf-8")
    return folder / "r.toml"


@pytest.mark.parametrize("path", sorted(SEQUENCES.glob("*.toml")), ids=lambda path: path.stem)
def test_every_recipe_in_the_house_can_be_read(path: Path) -> None:
    """Each file in sequences is valid, and the files that it names are there."""
    recipe = load_recipe(path)
    assert recipe.module.load().name
    if isinstance(recipe, BoardRecipe):
        assert recipe.target.load().columns > 2


def test_files_count_from_the_recipe_and_overrides_lie_over_them(tmp_path: Path) -> None:
    """Relative files are found beside the recipe; overrides replace single values of a table."""
    recipe = load_recipe(
        written(
            tmp_path,
            HEAD.replace('file = "m.json"\n', 'file = "m.json"\noverrides = { frame_mode = { row_order = -1 } }\n'),
        )
    )
    assert isinstance(recipe, BoardRecipe)
    module = recipe.module.load()
    assert module.frame_mode.row_order == -1
    assert module.frame_mode.binning == 2


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("kind = 3\n", r"field 'kind': expected one of board, greenhouse, got 3"),
        ("kind = \n", "expected TOML text, got a syntax error"),
        ('kind = "board"\n', "field 'module' is required and missing"),
        (HEAD + "[views]\ncount = 0\n", r"field 'views.count': .*greater than or equal to 1, got 0"),
        (HEAD + "[views]\ncounts = 4\n", r"field 'views.counts': Extra inputs are not permitted, got 4"),
        (HEAD + "[pixels]\ntau_ns = -3.0\n", r"field 'pixels': tau_ns must be positive, got -3"),
        (HEAD + "[pixels]\ntau = 3.0\n", r"field 'pixels.tau': .*, got 3"),
        (HEAD + "[readout]\nwhile_waiting = 'sit'\n", "field 'readout.while_waiting'"),
    ],
)
def test_bad_recipes_are_refused_with_field_and_value(text: str, message: str, tmp_path: Path) -> None:
    """The message names the field, the requirement and what was there."""
    with pytest.raises(FileFormatError, match=message):
        load_recipe(written(tmp_path, text))


def test_missing_files_are_refused(tmp_path: Path) -> None:
    """A recipe, or a file that it names, which is not there."""
    with pytest.raises(MissingFileError, match="expected a recipe"):
        load_recipe(tmp_path / "none.toml")
    recipe = load_recipe(written(tmp_path, HEAD.replace("t.json", "u.json")))
    with pytest.raises(MissingFileError, match=r"u\.json"):
        generate(recipe, tmp_path / "out.h5")
    assert not (tmp_path / "out.h5").exists()


def test_generate_reads_the_recipe_and_tells_its_progress(tmp_path: Path) -> None:
    """From the file's path to a recording, with stages told in order."""
    path = written(tmp_path, HEAD + "[views]\ncount = 1\ndwell_s = 0.06\n[truth]\ncentre_px = 3.0\n")
    told: list[tuple[str, float]] = []
    count = generate(path, tmp_path / "out.h5", 5, lambda stage, fraction: told.append((stage, fraction)))
    assert count > 1000
    assert (tmp_path / "out.h5").stat().st_size > 10_000
    assert [stage for stage, _ in told][-1] == "done"
    assert all(0 <= fraction <= 1 for _, fraction in told)
