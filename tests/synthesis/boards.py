"""Small boards, modules and recipes that the tests of this room share."""

from pathlib import Path
from typing import Any

import numpy as np

from hybridtrack.geometry import PerspectiveLens
from hybridtrack.module import FrameMode, HybridModule, Target, lens_parameters, save_module, save_target
from hybridtrack.synthesis.board import BoardRecipe
from hybridtrack.synthesis.board_optics import BoardScene
from hybridtrack.synthesis.recipe_parts import ModuleSource, TargetSource
from tests.synthesis.modules import small_module


def board_target(**fields: Any) -> Target:
    """A shuttered 8 x 5 board with three squares that stay dark; `fields` override."""
    known = {
        "kind": "shuttered_checker",
        "columns": 8,
        "rows": 5,
        "square_m": 0.03,
        "blink_hz": 61.0,
        "steady_dark": [(4, 2), (7, 3), (1, 1)],
    }
    return Target(**{**known, **fields})


def lens_module(columns: int = 80, rows: int = 50, **parts: Any) -> HybridModule:
    """A module with a mildly distorting lens over 4 * columns x 4 * rows colour pixels."""
    width, height = 4 * columns, 4 * rows
    lens = PerspectiveLens(0.75 * width, 0.751 * width, width / 2 + 3, height / 2 - 2, (-0.1, 0.02, 0.0), (3e-4, -2e-4))
    return small_module(columns, rows, **{"lens": lens_parameters(lens), **parts})


def board_scene(target: Target | None = None, **fields: Any) -> BoardScene:
    """A board without fall-off of light and with a plain background; `fields` override."""
    target = target or board_target()
    known = {"dark_dn": 30.0, "mount_dn": 20.0, "background_dn": 15.0, "waves": np.zeros((0, 4)), "vignetting": 0.0}
    return BoardScene(target, target.square_xy_m, **{**known, **fields})


def board_recipe(
    folder: Path, module: HybridModule | None = None, target: Target | None = None, **parts: Any
) -> BoardRecipe:
    """A recipe of a quick, small recording with its files in `folder`; `parts` override."""
    plain = small_module(80, 50).model_copy(update={"contrast": None, "defects": None, "colour_from_event": None})
    save_module(module or plain, folder / "small.module.json")
    save_target(target or board_target(), folder / "small.target.json")
    known: dict[str, Any] = {
        "truth": {"centre_px": 4.0, "hot": 2, "dead": 2},
        "views": {"count": 3, "dwell_s": 0.15, "fill": (0.8, 0.95)},
        "frames": {"rate_hz": 120.0, "exposure_ms": 3.0},
    }
    sources = {
        "module": ModuleSource(file=folder / "small.module.json"),
        "target": TargetSource(file=folder / "small.target.json"),
    }
    return BoardRecipe.model_validate({**known, **sources, **parts})


def frame_mode(**fields: Any) -> FrameMode:
    """Frames of the small module, binned by two; `fields` override."""
    return FrameMode(**{"width": 160, "height": 100, "binning": 2, **fields})
