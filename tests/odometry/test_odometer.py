"""The odometer from views alone: laps, losses, segments."""

from collections.abc import Callable

import numpy as np
import pytest

from hybridtrack.benchmark.metrics import absolute_trajectory_error, honesty, nees
from hybridtrack.geometry import sim3
from hybridtrack.odometry.finishing import finish
from hybridtrack.odometry.odometer import LOST, RUNNING, STARTING, Odometer
from hybridtrack.odometry.options import OdometryOptions
from hybridtrack.odometry.result import OdometryResult, result_of

Array = np.ndarray
WIDTH = 1280


def run(lap: object, with_look: bool = True, floor_px: float = 0.3) -> tuple[OdometryResult, list[str]]:
    """Result and the state after each frame."""
    odometer = Odometer(WIDTH, OdometryOptions(), lap.look if with_look else None)  # type: ignore[attr-defined]
    states = [odometer.push(view) for view in lap.views(floor_px)]  # type: ignore[attr-defined]
    return result_of(odometer, finish(odometer)), states


def score(result: OdometryResult, lap: object, segment: int = 0) -> tuple[float, Array]:
    """Absolute trajectory error in percent of the path, and NEES (N,), of one segment."""
    rows = np.flatnonzero(result.trajectory.segment == segment)
    truth = lap.world_from_camera[rows]  # type: ignore[attr-defined]
    error = absolute_trajectory_error(result.trajectory.world_from_camera[rows], truth)
    scale = sim3.decompose(error.similarity)[0]
    units = np.diag([scale] * 3 + [1.0] * 3)
    return error.percent, nees(error.errors, units @ result.trajectory.covariance[rows] @ units)


def test_exact_without_noise(make_lap: Callable) -> None:
    """Without noise and under a global shutter the lap comes back to a millionth of its length."""
    lap = make_lap(row_time_s=0.0)
    result, states = run(lap, with_look=False)
    assert states[-1] == RUNNING
    assert not result.failures
    assert score(result, lap)[0] < 1e-4


@pytest.mark.parametrize("row_time_s", [9e-6, 20e-6])
def test_rolling_shutter_leaves_what_acceleration_does(make_lap: Callable, row_time_s: float) -> None:
    """Without noise, rows at their own times cost less than 0.01 % of the path, up to a readout of a whole frame."""
    lap = make_lap(row_time_s=row_time_s)
    result, _ = run(lap, with_look=False)
    assert not result.failures
    assert score(result, lap)[0] < 0.01


def test_ignoring_the_rows_times_would_cost_ten_times_that(make_lap: Callable) -> None:
    """The same lap with every ray taken at the frame's time is ten times as far off: the correction does the work."""
    lap = make_lap(row_time_s=20e-6)
    odometer = Odometer(WIDTH, OdometryOptions(), None)
    for view in lap.views(0.3):
        view.dt_s[:] = 0.0
        odometer.push(view)
    result = result_of(odometer, finish(odometer))
    kept = max(score(result, lap, segment)[0] for segment in np.unique(result.trajectory.segment))
    assert kept > 0.02 or result.failures


def test_a_noisy_lap_with_drifting_tracks(make_lap: Callable) -> None:
    """0.3 px of noise and one track in five drifting at 60 px/s: every frame has a pose, right to 0.1 % of the path."""
    lap = make_lap(noise_px=0.3, drifting_share=0.2)
    result, _ = run(lap)
    assert not result.failures
    assert result.summary["health"] == {"ok": 180}
    assert score(result, lap)[0] < 0.1


def test_a_planar_world(make_lap: Callable) -> None:
    """A world that is a plane starts and runs like any other."""
    lap = make_lap(planar=True, noise_px=0.3)
    result, _ = run(lap)
    assert not result.failures
    assert score(result, lap)[0] < 0.1


def test_covariances_are_honest_over_worlds(make_lap: Callable) -> None:
    """Over 6 laps with world, tracks and noise redrawn (180 poses each, dependent), mean NEES over 6 is 0.6 to 1.5."""
    values = []
    for seed in range(10, 16):
        lap = make_lap(seed=seed, noise_px=0.3, frames=120, radius_m=0.3)
        result, _ = run(lap, with_look=False)
        values.append(score(result, lap)[1])
    assert 0.6 < honesty(np.concatenate(values), 6).mean_ratio < 1.5


def test_a_turning_camera_never_starts(make_lap: Callable) -> None:
    """Pure rotation: all poses lost, no map, and the reason in one sentence."""
    result, states = run(make_lap(path="turn", noise_px=0.3))
    assert set(states) == {STARTING}
    assert not result.trajectory.found.any()
    assert len(result.points.positions) == 0
    assert "could not start" in result.failures[0]
    assert "rotation alone" in result.failures[0]


def test_a_still_camera_never_starts(make_lap: Callable) -> None:
    """A camera that stands still is told that the picture did not move."""
    result, _ = run(make_lap(path="still", noise_px=0.3, frames=60))
    assert "the picture moved by" in result.failures[0]


def test_a_loss_is_found_again_by_the_look_of_the_place(make_lap: Callable) -> None:
    """After 15 dark frames the pose comes back in the same segment; the dark frames stay lost and are not bridged."""
    lap = make_lap(noise_px=0.3, blackout=(80, 95))
    result, states = run(lap)
    assert states[85] == LOST
    assert states[-1] == RUNNING
    assert result.summary["segments"] == 1
    assert set(np.flatnonzero(~result.trajectory.found)) == set(range(80, 95))
    assert score(result, lap)[0] < 0.1
    assert result.failures == ["the pose is lost in 15 of 180 frames"]


def test_a_loss_without_places_starts_a_new_segment(make_lap: Callable) -> None:
    """Where nothing ties the parts together they keep their own segments, each right, and that is a failure."""
    lap = make_lap(noise_px=0.3, blackout=(80, 95))
    result, _ = run(lap, with_look=False)
    assert result.summary["segments"] == 2
    for segment in (0, 1):
        assert score(result, lap, segment)[0] < 0.1
    assert any("2 segments" in failure for failure in result.failures)


def test_an_odometer_without_views_has_an_empty_result() -> None:
    """No view, no pose, no error."""
    odometer = Odometer(WIDTH, OdometryOptions())
    assert len(result_of(odometer, finish(odometer)).trajectory) == 0
