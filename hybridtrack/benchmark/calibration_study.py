"""The calibration study: board recordings of many modules, calibrated and compared with the truth."""

import time
from collections.abc import Callable
from pathlib import Path
from tempfile import TemporaryDirectory

import numpy as np

from hybridtrack.benchmark.board_scenarios import board_scenario, layout_of
from hybridtrack.benchmark.calibration_score import CalibrationScore, score_calibration
from hybridtrack.benchmark.study import Check, Study
from hybridtrack.calibration import calibrate
from hybridtrack.errors import HybridtrackError
from hybridtrack.module import Target
from hybridtrack.recording import Recording
from hybridtrack.recording.truth import read_truth
from hybridtrack.synthesis.board import BoardRecipe
from hybridtrack.synthesis.generate import generate

Progress = Callable[[str, float], None]
COLUMNS = (
    "seed", "layout", "target", "mirror, clear site", "map px", "focal %", "line time %", "offset us", "in sigma",
    "ON %", "OFF %", "hot", "dead", "events M", "calibrate s",
)  # fmt: skip


def _row(seed: int, target: Target, score: CalibrationScore, events: int, seconds: float) -> tuple[str, ...]:
    right = "right" if score.mirror_right and score.clear_site_right else "WRONG"
    return (
        str(seed), layout_of(seed), target.kind.removesuffix("_checker"), right, f"{score.map_rms_px:.4f}",
        f"{score.focal_percent:.4f}", f"{score.line_time_percent:+.4f}", f"{score.offset_us:+.1f}",
        f"{score.offset_sigmas:+.1f}", f"{score.on_percent:+.2f}", f"{score.off_percent:+.2f}",
        f"{score.hot_found:.2f}", f"{score.dead_found:.2f}", f"{events * 1e-6:.1f}", f"{seconds:.1f}",
    )  # fmt: skip


def _checks(scores: list[CalibrationScore], asked: int) -> tuple[Check, ...]:
    def worst(values: list[float]) -> float:
        return float(np.max(np.abs(values))) if values else float("nan")

    right = sum(score.mirror_right and score.clear_site_right for score in scores)
    return (
        Check("recordings calibrated", len(scores), asked, at_least=True),
        Check("mirroring and clear site right", right, asked, "recordings", at_least=True),
        Check("worst map error over the field", worst([s.map_rms_px for s in scores]), 0.15, "colour px RMS"),
        Check("worst focal error", worst([s.focal_percent for s in scores]), 0.2, "%"),
        Check("worst line time error", worst([s.line_time_percent for s in scores]), 0.5, "%"),
        Check("worst frame offset error", worst([s.offset_us for s in scores]), 50.0, "us"),
        Check("worst ON threshold error", worst([s.on_percent for s in scores]), 10.0, "%"),
        Check("worst OFF threshold error", worst([s.off_percent for s in scores]), 10.0, "%"),
    )


def calibrate_scenario(
    recipe: BoardRecipe, seed: int, recording: Path, progress: Progress
) -> tuple[CalibrationScore, int, float]:
    """Synthesise one board recording, calibrate it and score it; returns score, events and seconds of calibration.

    The estimator is given the recording, the target and the nominal module; the truth is read afterwards.
    """
    events = generate(recipe, recording, seed, lambda stage, fraction: progress(f"{recipe.name}: synthesis", fraction))
    began = time.perf_counter()
    with Recording.open(recording) as opened:
        result = calibrate(
            opened,
            recipe.target.load(),
            recipe.module.load(),
            progress=lambda stage, fraction: progress(f"{recipe.name}: calibration", fraction),
        )
    seconds = time.perf_counter() - began
    truth = read_truth(recording).module
    assert truth is not None
    return score_calibration(result.module, truth), events, seconds


def run_calibration_study(seeds: list[int], targets: Path, views: int, dwell_s: float, progress: Progress) -> Study:
    """Calibrate one synthetic module a seed. `targets`: the folder of example modules and targets."""
    rows, scores = [], []
    for seed in seeds:
        recipe = board_scenario(targets, seed, views, dwell_s)
        assert isinstance(recipe, BoardRecipe)
        with TemporaryDirectory(prefix="hybridtrack-") as folder:
            try:
                score, events, seconds = calibrate_scenario(recipe, seed, Path(folder) / "board.h5", progress)
            except HybridtrackError as refusal:
                rows.append((str(seed), layout_of(seed), recipe.target.load().kind, f"refused: {refusal}", *[""] * 11))
                continue
        scores.append(score)
        rows.append(_row(seed, recipe.target.load(), score, events, seconds))
    return Study(
        title=f"Calibration of {len(seeds)} synthetic modules, {views} views of {dwell_s:g} s each",
        columns=COLUMNS,
        rows=tuple(rows),
        checks=_checks(scores, len(seeds)),
        notes=(
            "Errors are estimate minus truth. The frame offset is compared with true offset plus true event latency, "
            "which one step size of light can't separate. hot, dead: the lower of precision and recall.",
        ),
    )
