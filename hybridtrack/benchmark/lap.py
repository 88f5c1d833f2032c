"""One module, calibrated from a board and carried round the greenhouse: the chain that the demo and a study share.

What is estimated sees recordings, target and nominal module; the lap is run with the *estimated* module. The truth is
read after the estimates exist.
"""

from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from hybridtrack.benchmark.calibration_score import CalibrationScore, score_calibration
from hybridtrack.benchmark.metrics import TrajectoryError, absolute_trajectory_error, poses_at
from hybridtrack.calibration import CalibrationResult, calibrate
from hybridtrack.errors import DegenerateDataError, OptionError
from hybridtrack.odometry import OdometryOptions, OdometryResult, odometry_of_tracks
from hybridtrack.recording import Recording
from hybridtrack.recording.truth import Truth, read_truth
from hybridtrack.synthesis.board import BoardRecipe
from hybridtrack.synthesis.generate import generate
from hybridtrack.synthesis.greenhouse import GreenhouseRecipe
from hybridtrack.synthesis.recipe import load_recipe
from hybridtrack.tracking import TrackerOptions, Tracks, track_recording

Progress = Callable[[str, float], None]


@dataclass(frozen=True)
class LapRecordings:
    """Paths of a board recording and a lap of one and the same true module."""

    board: Path
    board_recipe: BoardRecipe
    lap: Path
    events: int


def make_recordings(
    sequences: Path, folder: Path, seed: int, progress: Progress, lap_recipe: str, duration_s: float | None = None
) -> LapRecordings:
    """Synthesise both recordings into `folder`. `sequences` holds the recipes `board_quick` and `lap_recipe`, whose lap
    lasts `duration_s` where that is given."""
    board_recipe = load_recipe(sequences / "board_quick.toml")
    lap = load_recipe(sequences / f"{lap_recipe}.toml")
    if not isinstance(board_recipe, BoardRecipe) or not isinstance(lap, GreenhouseRecipe):
        raise OptionError(f"{sequences}: a board and a greenhouse recipe are required, got others")
    # One module in both: the same draw from the same seed.
    lap = lap.model_copy(update={"module_seed": seed, "truth": board_recipe.truth})
    if duration_s is not None:
        lap = lap.model_copy(update={"duration_s": duration_s})
    paths = folder / "board.h5", folder / "lap.h5"
    events = generate(board_recipe, paths[0], seed, lambda stage, part: progress("making the board recording", part))
    events += generate(lap, paths[1], seed, lambda stage, part: progress("making the greenhouse lap", part))
    return LapRecordings(paths[0], board_recipe, paths[1], events)


def calibrate_board(recordings: LapRecordings, progress: Progress) -> tuple[CalibrationResult, CalibrationScore]:
    """Calibrate from the board recording, then score against the truth."""
    recipe = recordings.board_recipe
    with Recording.open(recordings.board) as opened:
        result = calibrate(
            opened,
            recipe.target.load(),
            recipe.module.load(),
            progress=lambda stage, part: progress("calibrating", part),
        )
    truth = read_truth(recordings.board).module
    assert truth is not None
    return result, score_calibration(result.module, truth)


def score_path(result: OdometryResult, truth: Truth) -> TrajectoryError:
    """Absolute trajectory error of the longest segment after similarity alignment, one pose a frame.

    Raises DegenerateDataError where there are too few poses to align.
    """
    trajectory = result.trajectory
    segments, counts = np.unique(trajectory.segment[trajectory.found], return_counts=True)
    if not len(segments):
        raise DegenerateDataError("at least one pose is required to score a trajectory, got none")
    chosen = trajectory.segment == segments[np.argmax(counts)]
    true = poses_at(truth.pose_t_ns, truth.world_from_camera, trajectory.t_ns[chosen])
    inside = np.isfinite(true[:, 0, 0])
    return absolute_trajectory_error(trajectory.world_from_camera[chosen][inside], true[inside])


@dataclass(frozen=True)
class LapRun:
    """Tracks, odometry and the error of its path, for one mode."""

    tracks: Tracks
    odometry: OdometryResult
    error: TrajectoryError


def run_lap(recordings: LapRecordings, calibration: CalibrationResult, mode: str, progress: Progress) -> LapRun:
    """Tracks and odometry over the lap with the estimated module, then their score."""

    def show(stage: str, part: float) -> None:
        progress(f"{mode}: {stage}", part)

    module = calibration.module
    with Recording.open(recordings.lap) as opened:
        tracks = track_recording(opened, module, TrackerOptions(mode=mode), progress=show)  # type: ignore[arg-type]
        result = odometry_of_tracks(tracks, opened, module, OdometryOptions(mode=mode), show)
    return LapRun(tracks, result, score_path(result, read_truth(recordings.lap)))
