"""Module files: round trip, unknown fields, refusals; the event-to-colour map."""

import json
from pathlib import Path

import numpy as np
import pytest

from hybridtrack.errors import FileFormatError, MissingFileError, NotCalibratedError
from hybridtrack.module import ColourFromEvent, HybridModule, load_module, nominal_matrix, save_module

WREN = Path(__file__).parents[2] / "calib_targets" / "wren.module.json"


@pytest.fixture
def wren() -> HybridModule:
    return load_module(WREN)


def test_the_nominal_map_follows_the_convention_pixel_by_pixel(wren: HybridModule) -> None:
    """xm = width - 1 - x where mirrored, then u = cluster * xm + clear site."""
    grid = wren.event_grid.model_copy(update={"mirror_x": True})
    matrix = nominal_matrix(wren.cluster, grid)
    for x, y in [(0, 0), (17, 3), (319, 199)]:
        u, v = matrix @ [x, y, 1]
        assert (u, v) == (4 * (320 - 1 - x) + 2, 4 * y + 2)


def test_the_calibrated_map_and_its_inverse_agree(wren: HybridModule) -> None:
    """An affine map with a radial term is inverted to far below a thousandth of a pixel."""
    event_map = ColourFromEvent(
        matrix=((-4.001, 0.002, 1278.2), (0.001, 3.999, 2.1)), radial=2e-4, centre=(640.0, 400.0)
    )
    module = wren.model_copy(update={"colour_from_event": event_map})
    xy = np.random.default_rng(0).uniform(0, 199, (500, 2))
    np.testing.assert_allclose(module.event_from_colour_px(module.colour_from_event_px(xy)), xy, atol=1e-9)


def test_the_radial_term_moves_a_corner_by_its_definition(wren: HybridModule) -> None:
    """At the array's corner r is 1, so that the position moves by k times its offset from the centre."""
    centre = (639.5, 399.5)
    straight = ColourFromEvent(matrix=((4.0, 0.0, -0.5), (0.0, 4.0, -0.5)), radial=0.0, centre=centre)
    bent = straight.model_copy(update={"radial": 1e-3})
    corner = np.array([0.0, 0.0])
    moved = wren.model_copy(update={"colour_from_event": bent}).colour_from_event_px(corner)
    still = wren.model_copy(update={"colour_from_event": straight}).colour_from_event_px(corner)
    np.testing.assert_allclose(moved - still, 1e-3 * (still - centre), rtol=1e-12)


def test_unknown_fields_survive_rewriting(tmp_path: Path) -> None:
    """A field that this version does not know is kept, at the root and inside a block."""
    data = json.loads(WREN.read_text())
    data["bench_note"], data["cluster"]["pitch_um"] = "north door", 4.0
    source, target = tmp_path / "a.module.json", tmp_path / "b.module.json"
    source.write_text(json.dumps(data))
    save_module(load_module(source), target)
    again = json.loads(target.read_text())
    assert again["bench_note"] == "north door"
    assert again["cluster"]["pitch_um"] == 4.0


@pytest.mark.parametrize(
    ("change", "message"),
    [
        ({"format": "photo"}, "expected format 'hybridtrack-module', got 'photo'"),
        ({"version": 2}, "version 1, got 2"),
        ({"colour_array": {"width": -3, "height": 8}}, r"field 'colour_array.width'.*greater than 0, got -3"),
        ({"cluster": None}, "field 'cluster'"),
        ({"lens": {"model": "pinhole"}}, "field 'lens'"),
    ],
)
def test_a_bad_file_is_refused_by_field_requirement_and_value(tmp_path: Path, change: dict, message: str) -> None:
    """The one sentence names file, field, requirement and what was received."""
    data = json.loads(WREN.read_text()) | change
    path = tmp_path / "bad.module.json"
    path.write_text(json.dumps(data))
    with pytest.raises(FileFormatError, match=message) as caught:
        load_module(path)
    assert "bad.module.json" in str(caught.value)


def test_broken_json_and_missing_files_are_refused(tmp_path: Path) -> None:
    """Neither shows a parser's traceback."""
    path = tmp_path / "half.module.json"
    path.write_text('{"format": "hybridtrack-mod')
    with pytest.raises(FileFormatError, match="syntax error"):
        load_module(path)
    with pytest.raises(MissingFileError, match="found none"):
        load_module(tmp_path / "none.json")


def test_a_nominal_module_refuses_what_only_calibration_knows(wren: HybridModule) -> None:
    """The sentence says which field is null."""
    assert not wren.is_calibrated
    with pytest.raises(NotCalibratedError, match="'lens' is null"):
        wren.lens_model()
    with pytest.raises(NotCalibratedError, match=r"'timing\.frame_offset_ns' is null"):
        wren.known_timing()
