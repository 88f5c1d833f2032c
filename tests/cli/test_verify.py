"""`hybridtrack verify` from end to end: shifts found, verdicts as exit codes, files written, refusals in one
sentence."""

import json
from pathlib import Path

import numpy as np
import pytest

from hybridtrack.benchmark.verify_study import Change
from hybridtrack.module import HybridModule, save_module
from hybridtrack.recording.truth import read_truth
from hybridtrack.synthesis.generate import generate
from hybridtrack.synthesis.recipe import recipe_from_data
from tests.cli.test_commands import assert_refused, run

WREN = Path(__file__).parents[2] / "calib_targets" / "wren.module.json"
SMALL = {
    "colour_array": {"width": 640, "height": 400},
    "event_grid": {"width": 160, "height": 100},
    "frame_mode": {"width": 320, "height": 200},
}
STILL = {"preset": "lap", "lap_s": 9000.0, "half_length_m": 0.01, "half_width_m": 0.01, "sway_deg": 0.0}
MOVING = {"preset": "lap", "lap_s": 9.0, "half_length_m": 1.0, "half_width_m": 0.32, "sway_deg": 3.0}


def ridden(folder: Path, name: str, motion: dict[str, object]) -> tuple[Path, HybridModule]:
    """A short ride of a small module, and the module that made it."""
    data = {
        "kind": "greenhouse",
        "name": name,
        "duration_s": 2.0,
        "module": {"file": WREN, "overrides": SMALL},
        "truth": {"mirror_x": True, "clear_site": [1, 2]},
        "motion": motion,
    }
    path = folder / f"{name}.h5"
    generate(recipe_from_data(data, name), path, 6)
    module = read_truth(path).module
    assert module is not None
    return path, module


@pytest.fixture(scope="module")
def ride(tmp_path_factory: pytest.TempPathFactory) -> tuple[Path, HybridModule]:
    """A ride with motion enough."""
    return ridden(tmp_path_factory.mktemp("verify"), "small ride", MOVING)


@pytest.mark.parametrize(
    ("change", "code", "verdict"), [(Change("nothing"), 0, "holds"), (Change("map", (0.7, -0.5)), 1, "drifted")]
)
def test_the_exit_code_is_the_verdict(
    ride: tuple[Path, HybridModule], tmp_path: Path, change: Change, code: int, verdict: str
) -> None:
    """0 holds and 1 drifted; the summary carries the shift with its covariance; the page stands beside it.

    Two seconds of a small module make few stretches: only a shift of most of a pixel is sure.
    """
    path, module = ride
    save_module(change.of(module), tmp_path / "m.module.json")
    result = run("verify", path, "--module", tmp_path / "m.module.json", "--out", tmp_path / "out")
    assert result.returncode == code, result.stderr
    summary = json.loads((tmp_path / "out" / "summary.json").read_text())
    assert summary["verdict"] == verdict
    error, covariance = np.array(summary["map_shift_px"]) - change.map_px, np.array(summary["map_shift_covariance_px2"])
    assert np.linalg.norm(error) < 0.12
    assert error @ np.linalg.solve(covariance, error) < 14.0
    assert 0.75 < summary["gain"] < 1.25
    assert "<svg" in (tmp_path / "out" / "report.html").read_text()


def test_a_module_at_rest_is_refused(tmp_path: Path) -> None:
    """Exit code 2 and one sentence: nothing moved; no page claims anything."""
    path, module = ridden(tmp_path, "rest", STILL)
    save_module(module, tmp_path / "m.module.json")
    result = run("verify", path, "--module", tmp_path / "m.module.json", "--out", tmp_path / "out")
    assert_refused(result, "too little motion")
    assert not (tmp_path / "out").exists()


def test_an_uncalibrated_module_is_refused(ride: tuple[Path, HybridModule], tmp_path: Path) -> None:
    """Exit code 2: the nominal module has neither map nor thresholds to check."""
    assert_refused(run("verify", ride[0], "--module", WREN, "--out", tmp_path / "out"), "calibrated map")
