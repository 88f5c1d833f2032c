"""The field check end to end on a short ride of a small module."""

from pathlib import Path

import numpy as np
import pytest

from hybridtrack.benchmark.verify_study import Change
from hybridtrack.calibration.field_check import check_field
from hybridtrack.module import HybridModule
from hybridtrack.recording import Recording
from hybridtrack.recording.truth import read_truth
from hybridtrack.synthesis.generate import generate
from hybridtrack.synthesis.recipe import recipe_from_data

TARGETS = Path(__file__).parents[2] / "calib_targets"
SMALL = {
    "colour_array": {"width": 640, "height": 400},
    "event_grid": {"width": 160, "height": 100},
    "frame_mode": {"width": 320, "height": 200},
}


@pytest.fixture(scope="module")
def ride(tmp_path_factory: pytest.TempPathFactory) -> tuple[Path, HybridModule]:
    """A ride to and fro, and the module that made it, mirrored across."""
    data = {
        "kind": "greenhouse",
        "name": "small ride",
        "duration_s": 2.0,
        "module": {"file": TARGETS / "wren.module.json", "overrides": SMALL},
        "truth": {"mirror_x": True, "clear_site": [1, 2]},
        "motion": {"preset": "lap", "lap_s": 9.0, "half_length_m": 1.0, "half_width_m": 0.32, "sway_deg": 3.0},
    }
    path = tmp_path_factory.mktemp("ride") / "ride.h5"
    generate(recipe_from_data(data, "small ride"), path, 6)
    module = read_truth(path).module
    assert module is not None
    return path, module


@pytest.mark.parametrize(("change", "verdict"), [(Change("nothing"), "holds"), (Change("map", (0.3, -0.2)), "drifted")])
def test_a_shift_of_the_map_is_found(ride: tuple[Path, HybridModule], change: Change, verdict: str) -> None:
    """What was shifted is found to a few hundredths of a pixel and within its deviations, and nothing else."""
    path, module = ride
    with Recording.open(path) as recording:
        check = check_field(recording, change.of(module))
    assert check.map.verdict == verdict
    error = check.shift_px - change.map_px
    assert np.linalg.norm(error) < 0.12
    assert error @ np.linalg.solve(check.covariance, error) < 14.0
    assert 0.75 < check.gain < 1.25
