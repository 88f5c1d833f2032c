"""The whole job once, on synthetic recordings: board, calibration, lap, tracks, path, scores."""

import time
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

from hybridtrack.benchmark.calibration_score import CalibrationScore
from hybridtrack.benchmark.lap import LapRecordings, LapRun, calibrate_board, make_recordings, run_lap
from hybridtrack.calibration import CalibrationResult
from hybridtrack.module import HybridModule, save_module
from hybridtrack.odometry import write_outputs
from hybridtrack.recording.truth import Truth, read_truth
from hybridtrack.tracking import write_tracks

Progress = Callable[[str, float], None]


@dataclass(frozen=True)
class DemoResult:
    """What the demo's page tells: estimates first, truth only to score them. `seconds` by stage."""

    recordings: LapRecordings
    calibration: CalibrationResult
    score: CalibrationScore
    hybrid: LapRun
    frames: LapRun | None
    true_module: HybridModule
    truth: Truth
    seconds: dict[str, float]


def run_demo(sequences: Path, folder: Path, seed: int, frames_too: bool, progress: Progress) -> DemoResult:
    """Run everything into `folder`: recordings, calibrated module, tracks, trajectory and map.

    `frames_too` runs the lap a second time on frames alone, to compare.
    """
    folder.mkdir(parents=True, exist_ok=True)
    marks = [time.perf_counter()]
    recordings = make_recordings(sequences, folder, seed, progress, "greenhouse_demo")
    marks.append(time.perf_counter())
    calibration, score = calibrate_board(recordings, progress)
    save_module(calibration.module, folder / "calibrated.module.json")
    marks.append(time.perf_counter())
    hybrid = run_lap(recordings, calibration, "hybrid", progress)
    write_tracks(folder / "run.tracks.h5", hybrid.tracks)
    write_outputs(hybrid.odometry, folder)
    marks.append(time.perf_counter())
    frames = run_lap(recordings, calibration, "frames", progress) if frames_too else None
    marks.append(time.perf_counter())
    truth = read_truth(recordings.lap)
    true_module = read_truth(recordings.board).module
    assert true_module is not None
    stages = ("synthesis", "calibration", "hybrid tracks and path", "frames alone")
    seconds = {stage: marks[k + 1] - marks[k] for k, stage in enumerate(stages) if k < 3 or frames_too}
    return DemoResult(recordings, calibration, score, hybrid, frames, true_module, truth, seconds)
