"""The calibration study: board recordings of many modules, calibrated and compared with the truth."""

from collections.abc import Callable
from pathlib import Path
from tempfile import TemporaryDirectory

import numpy as np

from hybridtrack.benchmark.board_scenarios import board_scenario, layout_of
from hybridtrack.benchmark.calibration_honesty import BLOCKS
from hybridtrack.benchmark.calibration_score import CalibrationScore, score_calibration
from hybridtrack.benchmark.own_process import MeasuredCalibration, calibrate_apart
from hybridtrack.benchmark.study import Check, Study
from hybridtrack.errors import HybridtrackError
from hybridtrack.module import Target
from hybridtrack.recording.truth import read_truth
from hybridtrack.synthesis.board import BoardRecipe
from hybridtrack.synthesis.generate import generate

Progress = Callable[[str, float], None]
COLUMNS = (
    "seed", "layout", "target", "mirror, clear site", "off lattice", "map px", "focal %", "lens px", "line time %",
    "exposure us", "offset us", "in sigma", "ON %", "OFF %", "hot", "dead", *(f"NEES {name}" for name in BLOCKS),
    "events M", "calibrate s", "GiB",
)  # fmt: skip
ENOUGH_FOR_HONESTY = 50
BY_NAME = ("no", "yes")


def _row(seed: int, target: Target, score: CalibrationScore, events: int, run: MeasuredCalibration) -> tuple[str, ...]:
    right = "right" if score.mirror_right and score.clear_site_right else "WRONG"
    off_lattice = BY_NAME[score.off_lattice]
    if score.off_lattice != score.off_lattice_true:
        off_lattice = "MISSED" if score.off_lattice_true else "FALSE"
    return (
        str(seed), layout_of(seed), target.kind.removesuffix("_checker"), right, off_lattice, f"{score.map_rms_px:.4f}",
        f"{score.focal_percent:.4f}", f"{score.lens_rms_px:.4f}", f"{score.line_time_percent:+.4f}",
        f"{score.exposure_us:+.2f}", f"{score.offset_us:+.1f}", f"{score.offset_sigmas:+.1f}",
        f"{score.on_percent:+.2f}", f"{score.off_percent:+.2f}", f"{score.hot_found:.3f}", f"{score.dead_found:.3f}",
        *(f"{score.nees[name].value:.1f}/{score.nees[name].freedom}" for name in BLOCKS),
        f"{events * 1e-6:.1f}", f"{run.seconds:.1f}", "" if run.peak_gib is None else f"{run.peak_gib:.2f}",
    )  # fmt: skip


def percentile(values: list[float], share: float = 0.95) -> float:
    """The value that `share` of the magnitudes do not exceed; of few values the worst. NaN counts as worst."""
    magnitudes = np.sort(np.abs(np.array(values, float)))
    return float(np.percentile(magnitudes, 100 * share, method="higher")) if len(magnitudes) else float("nan")


def _offset_checks(scores: list[CalibrationScore]) -> list[Check]:
    """The frame offset alone where the latency was separated, their sum elsewhere."""
    checks = []
    for separated, name, limit in ((True, "latency separated", 20.0), (False, "latency included", 50.0)):
        errors = [s.offset_us for s in scores if s.latency_separated == separated]
        if errors:
            checks.append(
                Check(f"frame offset error, {name}, {len(errors)} recordings", percentile(errors), limit, "us")
            )
    return checks


def _accuracy_checks(scores: list[CalibrationScore], asked: int) -> list[Check]:
    right = sum(score.mirror_right and score.clear_site_right for score in scores)
    return [
        Check("recordings calibrated", len(scores), asked, at_least=True),
        Check("mirroring and clear site right", right, asked, "recordings", at_least=True),
        Check("map error over the field", percentile([s.map_rms_px for s in scores]), 0.02, "colour px RMS"),
        Check("focal error", percentile([s.focal_percent for s in scores]), 0.05, "%"),
        Check("lens error over the field", percentile([s.lens_rms_px for s in scores]), 0.1, "colour px RMS"),
        Check("line time error", percentile([s.line_time_percent for s in scores]), 0.05, "%"),
        Check("exposure error", percentile([s.exposure_us for s in scores]), 10.0, "us"),
        *_offset_checks(scores),
        Check("worst frame offset error", percentile([s.offset_sigmas for s in scores], 1.0), 3.0, "deviations"),
        Check("ON threshold error", percentile([s.on_percent for s in scores]), 5.0, "%"),
        Check("OFF threshold error", percentile([s.off_percent for s in scores]), 5.0, "%"),
        Check(
            "hot pixels, precision and recall",
            float(np.mean([s.hot_found for s in scores] or [0])),
            0.99,
            at_least=True,
        ),
    ]


def _lattice_checks(scores: list[CalibrationScore]) -> list[Check]:
    """Off-lattice modules found, and lattices taken for something else."""
    checks = []
    odd = [score.off_lattice for score in scores if score.off_lattice_true]
    plain = [score.off_lattice for score in scores if not score.off_lattice_true]
    if odd:
        checks.append(Check(f"off-lattice maps found of {len(odd)}", 100 * float(np.mean(odd)), 95, "%", at_least=True))
    if plain:
        checks.append(Check(f"false alarms among {len(plain)} lattices", 100 * float(np.mean(plain)), 5, "%"))
    return checks


def _cost_checks(runs: list[MeasuredCalibration]) -> list[Check]:
    checks = [Check("time to calibrate", percentile([run.seconds for run in runs]), 60.0, "s")]
    peaks = [run.peak_gib for run in runs if run.peak_gib is not None]
    return [*checks, Check("peak memory", percentile(peaks), 1.5, "GiB")] if peaks else checks


def _honesty(scores: list[CalibrationScore]) -> tuple[list[Check], list[str]]:
    """Judged over enough seeds, else only told."""
    checks, notes = [], []
    for block in BLOCKS:
        judged = [score.nees[block] for score in scores]
        if not judged:
            continue
        ratio = float(np.mean([b.value / b.freedom for b in judged]))
        inside = 100 * float(np.mean([b.inside for b in judged]))
        if len(judged) < ENOUGH_FOR_HONESTY:
            notes.append(
                f"{block}: mean NEES over degrees of freedom {ratio:.2f}, {inside:.0f} % inside the 95 % region."
            )
            continue
        checks += [
            Check(f"{block}: mean NEES over degrees of freedom", ratio, 0.7, at_least=True),
            Check(f"{block}: mean NEES over degrees of freedom", ratio, 1.4),
            Check(f"{block}: errors inside the 95 % region", inside, 88, "%", at_least=True),
        ]
    if notes:
        notes.insert(0, f"Honesty, told but not judged on fewer than {ENOUGH_FOR_HONESTY} recordings:")
    return checks, notes


def calibrate_scenario(
    recipe: BoardRecipe, seed: int, recording: Path, progress: Progress
) -> tuple[CalibrationScore, int, MeasuredCalibration]:
    """Synthesise one board recording, calibrate it and score it; returns score, events and the calibration.

    The estimator is given the recording, the target and the nominal module; the truth is read afterwards.
    """
    events = generate(recipe, recording, seed, lambda stage, fraction: progress(f"{recipe.name}: synthesis", fraction))
    progress(f"{recipe.name}: calibration", 0.0)
    run = calibrate_apart(recording, recipe.target.load(), recipe.module.load())
    progress(f"{recipe.name}: calibration", 1.0)
    truth = read_truth(recording).module
    assert truth is not None
    return score_calibration(run.module, truth), events, run


def run_calibration_study(seeds: list[int], targets: Path, views: int, dwell_s: float, progress: Progress) -> Study:
    """Calibrate one synthetic module a seed. `targets`: the folder of example modules and targets."""
    rows: list[tuple[str, ...]] = []
    scores: list[CalibrationScore] = []
    runs: list[MeasuredCalibration] = []
    for seed in seeds:
        recipe = board_scenario(targets, seed, views, dwell_s)
        assert isinstance(recipe, BoardRecipe)
        target = recipe.target.load()
        with TemporaryDirectory(prefix="hybridtrack-") as folder:
            try:
                score, events, run = calibrate_scenario(recipe, seed, Path(folder) / "board.h5", progress)
            except HybridtrackError as refusal:
                empty = [""] * (len(COLUMNS) - 4)
                rows.append((str(seed), layout_of(seed), target.kind, f"refused: {refusal}", *empty))
                continue
        scores.append(score)
        runs.append(run)
        rows.append(_row(seed, target, score, events, run))
    honesty_checks, honesty_notes = _honesty(scores)
    return Study(
        title=f"Calibration of {len(seeds)} synthetic modules, {views} views of {dwell_s:g} s each",
        columns=COLUMNS,
        rows=tuple(rows),
        checks=(*_accuracy_checks(scores, len(seeds)), *_lattice_checks(scores), *_cost_checks(runs), *honesty_checks),
        notes=(
            "Errors are estimate minus truth; limits hold for 95 % of the recordings unless they say worst. The frame "
            "offset is compared with true offset plus true event latency where these were not separated. "
            "hot, dead: the lower of precision and recall. NEES: of a block, over its degrees of freedom.",
            *honesty_notes,
        ),
    )
