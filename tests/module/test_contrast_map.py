"""Threshold maps beside the module file."""

from pathlib import Path

import numpy as np
import pytest

from hybridtrack.errors import FileFormatError, MissingFileError, ModuleMismatchError
from hybridtrack.module import (
    Contrast,
    ContrastMap,
    EventGrid,
    HybridModule,
    load_contrast_map,
    load_module,
    save_contrast_map,
)

WREN = Path(__file__).parents[2] / "calib_targets" / "wren.module.json"


def saved(folder: Path) -> tuple[HybridModule, ContrastMap]:
    """A module of Wren's layout that names a map of its grid, the map saved in `folder`."""
    wren = load_module(WREN)
    random = np.random.default_rng(1)
    maps = [random.uniform(0.2, 0.4, wren.event_grid.shape) for _ in range(4)]
    maps[0][3, 5] = np.nan
    digest = save_contrast_map(ContrastMap(*maps), folder / "wren.contrast.h5")
    contrast = Contrast(on_threshold=0.3, off_threshold=0.3, map_file="wren.contrast.h5", map_sha256=digest)
    return wren.model_copy(update={"contrast": contrast}), ContrastMap(*maps)


def test_a_map_is_read_back_as_written(tmp_path: Path) -> None:
    """All four planes come back to single precision, unknown pixels unknown."""
    module, written = saved(tmp_path)
    found = load_contrast_map(module, tmp_path / "wren.module.json")
    assert found is not None
    for name in ("on_threshold", "off_threshold", "on_sigma", "off_sigma"):
        assert np.allclose(getattr(found, name), getattr(written, name), rtol=1e-6, equal_nan=True)


def test_a_module_without_a_map_has_none(tmp_path: Path) -> None:
    """Nothing is looked for where nothing is named."""
    assert load_contrast_map(load_module(WREN), tmp_path / "wren.module.json") is None


def test_a_missing_map_is_refused(tmp_path: Path) -> None:
    """The sentence names the file."""
    module, _ = saved(tmp_path)
    (tmp_path / "wren.contrast.h5").unlink()
    with pytest.raises(MissingFileError, match=r"wren\.contrast\.h5: expected the threshold map"):
        load_contrast_map(module, tmp_path / "wren.module.json")


def test_a_map_that_was_changed_is_refused(tmp_path: Path) -> None:
    """Its digest is not the one in the module file."""
    module, written = saved(tmp_path)
    save_contrast_map(ContrastMap(*[written.off_threshold] * 4), tmp_path / "wren.contrast.h5")
    with pytest.raises(FileFormatError, match="SHA-256 differs"):
        load_contrast_map(module, tmp_path / "wren.module.json")


def test_a_file_of_another_kind_is_refused(tmp_path: Path) -> None:
    """Text in its place is no map, whatever the module says of its digest."""
    module, _ = saved(tmp_path)
    (tmp_path / "wren.contrast.h5").write_text("not a map")
    assert module.contrast is not None
    module = module.model_copy(update={"contrast": module.contrast.model_copy(update={"map_sha256": None})})
    with pytest.raises(FileFormatError, match="is not a threshold map that can be read"):
        load_contrast_map(module, tmp_path / "wren.module.json")


def test_a_map_of_another_grid_is_refused(tmp_path: Path) -> None:
    """Shapes are named."""
    module, _ = saved(tmp_path)
    module = module.model_copy(update={"event_grid": EventGrid(width=160, height=100)})
    with pytest.raises(ModuleMismatchError, match="a map of the module's event grid"):
        load_contrast_map(module, tmp_path / "wren.module.json")
