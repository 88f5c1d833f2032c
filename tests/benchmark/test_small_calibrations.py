"""Whole calibrations of a small module, from synthetic recording to score: every kind of target and frame."""

from pathlib import Path
from typing import Any

import numpy as np
import pytest

from hybridtrack.benchmark.calibration_score import CalibrationScore, score_calibration
from hybridtrack.calibration import CalibrationResult, calibrate
from hybridtrack.errors import DegenerateDataError
from hybridtrack.recording import Recording
from hybridtrack.recording.truth import read_truth
from hybridtrack.synthesis.board import BoardRecipe
from hybridtrack.synthesis.generate import generate
from hybridtrack.synthesis.recipe import recipe_from_data

TARGETS = Path(__file__).parents[2] / "calib_targets"
SMALL = {
    "colour_array": {"width": 640, "height": 400},
    "event_grid": {"width": 160, "height": 100},
    "frame_mode": {"width": 320, "height": 200},
}


def calibrated(
    folder: Path,
    target: str,
    seed: int,
    target_parts: dict[str, Any] | None = None,
    stated: dict[str, Any] | None = None,
    **parts: Any,
) -> tuple[CalibrationResult, CalibrationScore]:
    """Synthesise, calibrate from the data sheet, and score. `parts` of the recipe and `target_parts` override; `stated`
    is what the target file that the estimator gets says otherwise."""
    overrides = {**SMALL, **parts.pop("module", {})}
    data = {
        "kind": "board",
        "name": "small",
        "module": {"file": TARGETS / "wren.module.json", "overrides": overrides},
        "target": {"file": TARGETS / f"{target}.target.json", "overrides": target_parts or {}},
        "truth": {"mirror_x": "random", "mirror_y": "random", "clear_site": "random", "hot": 6, "dead": 4},
        "views": {"count": 6, "dwell_s": 0.3, "between": "gap", "between_s": 0.05},
        **parts,
    }
    recipe = recipe_from_data(data, "small")
    assert isinstance(recipe, BoardRecipe)
    generate(recipe, folder / "small.h5", seed)
    with Recording.open(folder / "small.h5") as recording:
        result = calibrate(recording, recipe.target.load().model_copy(update=stated or {}), recipe.module.load())
    truth = read_truth(folder / "small.h5").module
    assert truth is not None
    return result, score_calibration(result.module, truth)


def assert_good(score: CalibrationScore, deviations: float = 4.0) -> None:
    """Within limits that a small module with short views can keep, and within its own deviations."""
    assert score.mirror_right
    assert score.clear_site_right
    assert score.map_rms_px < 0.03
    assert score.focal_percent < 0.05
    assert abs(score.line_time_percent) < 0.05
    assert abs(score.offset_us) < 50.0
    assert abs(score.offset_sigmas) < deviations
    assert abs(score.on_percent) < 10.0
    assert abs(score.off_percent) < 10.0
    for name in ("map", "lens", "clocks"):
        assert score.nees[name].value / score.nees[name].freedom < deviations


@pytest.mark.study
def test_a_shuttered_panel(tmp_path: Path) -> None:
    """The plain case, which the panel with steps of several sizes holds, too."""
    _, score = calibrated(tmp_path, "lamp_panel", 3)
    assert_good(score)


@pytest.mark.parametrize("direction", [pytest.param("down", marks=pytest.mark.study), "left"])
def test_a_screen_that_sweeps(tmp_path: Path, direction: str) -> None:
    """Its sweep of half a blink is counted in: clocks and thresholds are right, and the sweep's time is found although
    the target file is 3 % off."""
    result, score = calibrated(
        tmp_path, "bench_screen", 4, {"scanout_s": 0.0072, "scan_direction": direction}, {"scanout_s": 0.0072 * 1.03}
    )
    assert_good(score)
    assert any("swept in 7.20" in finding for finding in result.findings)


def test_a_panel_with_steps_of_several_sizes(tmp_path: Path) -> None:
    """Steps played in whatever order and for however long are found: thresholds to what two seconds of a small module
    allow and within their deviations, geometry as from one step. Cycles that differ also tell a frame offset of more
    than half a blink period."""
    levels = [1.5, 0.45, 1.0]
    result, score = calibrated(
        tmp_path,
        "lamp_panel",
        5,
        {"levels": levels},
        light={"cycles_per_level": 2},
        frames={"exposure_ms": 6.0},
        truth={"mirror_x": "random", "mirror_y": "random", "clear_site": "random", "frame_offset_ms": 12.0},
        views={"count": 6, "dwell_s": 0.5, "between": "gap", "between_s": 0.05},
    )
    assert score.mirror_right
    assert score.clear_site_right
    assert score.map_rms_px < 0.03
    assert score.nees["clocks"].value / score.nees["clocks"].freedom < 4.0
    assert abs(read_truth(tmp_path / "small.h5").module.timing.frame_offset_ns) > 7.5e6  # type: ignore[union-attr]
    assert abs(score.offset_us) < 60.0
    assert abs(score.on_percent) < 4.0
    assert abs(score.off_percent) < 4.0
    assert score.nees["thresholds"].value / score.nees["thresholds"].freedom < 4.0
    steps = result.frames.light_steps
    assert steps is not None
    expected = np.expm1(sorted(levels, reverse=True)) / np.expm1(max(levels))
    assert np.allclose(steps.strength, expected, atol=0.03)
    several, truth = result.thresholds.several, read_truth(tmp_path / "small.h5")
    assert several is not None
    error = several.maps.on - truth.extras["on_threshold"]
    seen = np.isfinite(error)
    assert np.mean(seen) > 0.4
    assert np.std(error[seen]) < 0.9 * np.std(truth.extras["on_threshold"])
    assert 0.7 < np.std((error / several.maps.on_sigma)[seen]) < 1.3


def test_frames_that_hardly_show_the_steps_are_refused(tmp_path: Path) -> None:
    """Few frames of long exposure mix the cycles: no number is better than a wrong one."""
    with pytest.raises(DegenerateDataError, match="steps of light of a target with several levels"):
        calibrated(
            tmp_path,
            "lamp_panel",
            5,
            {"levels": [1.5, 0.45, 1.0]},
            light={"cycles_per_level": 2},
            frames={"exposure_ms": 9.0},
            views={"count": 6, "dwell_s": 0.4, "between": "gap", "between_s": 0.05},
        )


def test_steps_on_a_counterphase_target_are_refused(tmp_path: Path) -> None:
    """One sentence says which target tells steps of several sizes."""
    with pytest.raises(DegenerateDataError, match="are read from a shuttered target"):
        calibrated(tmp_path, "bench_screen", 4, {"levels": [0.5, 1.2], "scanout_s": 0.0})
