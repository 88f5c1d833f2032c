"""The odometry study: laps of the greenhouse with calibrated modules, frames alone and hybrid, against the truth."""

import time
from collections.abc import Callable
from pathlib import Path
from tempfile import TemporaryDirectory

import numpy as np

from hybridtrack.benchmark.lap import LapRun, calibrate_board, make_recordings, run_lap
from hybridtrack.benchmark.study import Check, Study
from hybridtrack.errors import HybridtrackError

Progress = Callable[[str, float], None]
COLUMNS = (
    "seed",
    "mode",
    "path m",
    "ATE % of path",
    "ATE mm",
    "turn deg",
    "lost frames",
    "segments",
    "loops",
    "seconds",
)
MODES = ("hybrid", "frames")


def _row(seed: int, run: LapRun, mode: str, seconds: float) -> tuple[str, ...]:
    error, summary = run.error, run.odometry.summary
    lost = int(np.count_nonzero(~run.odometry.trajectory.found))
    return (
        str(seed), mode, f"{error.path_m:.2f}", f"{error.percent:.3f}", f"{1e3 * error.rms_m:.1f}",
        f"{error.turn_rms_deg:.3f}", str(lost), str(summary["segments"]), str(summary["loops_used"]), f"{seconds:.1f}",
    )  # fmt: skip


def run_odometry_study(seeds: list[int], sequences: Path, lap_recipe: str, progress: Progress) -> Study:
    """Synthesise, calibrate and run one lap a seed, in both modes. `sequences` is the folder of recipes."""
    rows: list[tuple[str, ...]] = []
    percents: dict[str, list[float]] = {mode: [] for mode in MODES}
    closed = 0
    for seed in seeds:
        with TemporaryDirectory(prefix="hybridtrack-") as folder:

            def show(stage: str, part: float, seed: int = seed) -> None:
                progress(f"seed {seed}: {stage}", part)

            recordings = make_recordings(sequences, Path(folder), seed, show, lap_recipe)
            calibration, _ = calibrate_board(recordings, show)
            for mode in MODES:
                began = time.perf_counter()
                try:
                    run = run_lap(recordings, calibration, mode, show)
                except HybridtrackError as refusal:
                    percents[mode].append(float("nan"))
                    rows.append((str(seed), mode, f"refused: {refusal}", *[""] * 7))
                    continue
                percents[mode].append(run.error.percent)
                closed += mode == "hybrid" and run.odometry.summary["loops_used"] > 0
                rows.append(_row(seed, run, mode, time.perf_counter() - began))
    return Study(
        title=f"Odometry over {len(seeds)} synthetic greenhouse laps ({lap_recipe}), each with its calibrated module",
        columns=COLUMNS,
        rows=tuple(rows),
        checks=(
            *(Check(f"worst ATE, {mode}", float(np.max(percents[mode])), 2.0, "% of the path") for mode in MODES),
            Check("laps whose loop closes, hybrid", closed, len(seeds), at_least=True),
        ),
        notes=("ATE: absolute trajectory error, root mean square after similarity alignment (Sturm et al. 2012).",),
    )
