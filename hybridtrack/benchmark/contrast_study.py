"""The contrast study: modules calibrated from a target with several steps of light, two models of the pixel in turn."""

from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from tempfile import TemporaryDirectory

import numpy as np

from hybridtrack.benchmark.board_scenarios import LAYOUTS, layout_of
from hybridtrack.benchmark.calibration_honesty import BlockNees, threshold_nees
from hybridtrack.benchmark.calibration_study import ENOUGH_FOR_HONESTY, percentile
from hybridtrack.benchmark.study import Check, Study
from hybridtrack.calibration import calibrate
from hybridtrack.errors import HybridtrackError
from hybridtrack.recording import Recording
from hybridtrack.recording.truth import Truth, read_truth
from hybridtrack.synthesis.board import BoardRecipe
from hybridtrack.synthesis.generate import generate
from hybridtrack.synthesis.recipe import recipe_from_data

Array = np.ndarray
Progress = Callable[[str, float], None]

COLUMNS = (
    "seed", "layout", "pixels", "found as", "ON %", "in sigma", "OFF %", "in sigma", "noise %", "ON map", "OFF map",
    "known", "NEES",
)  # fmt: skip
PIXELS = ("steps", "resets")


@dataclass(frozen=True)
class ContrastScore:
    """Errors of both thresholds in percent and in their deviations, of the noise in percent; RMS error of single
    pixels' thresholds over their true spread where they count as known, and the share of the grid where they do."""

    model: str
    percent: tuple[float, float]
    deviations: tuple[float, float]
    noise_percent: float
    map_error: tuple[float, float]
    known: float
    nees: BlockNees


def contrast_scenario(targets: Path, seed: int, views: int, dwell_s: float) -> BoardRecipe:
    """The recipe of one seed: layouts and models of the pixel in turn."""
    data = {
        "kind": "board",
        "name": f"steps {seed}",
        "module": {"file": targets / "wren.module.json", "overrides": LAYOUTS[layout_of(seed)]},
        "target": {"file": targets / "lamp_panel_levels.target.json"},
        "truth": {"mirror_x": "random", "mirror_y": "random", "clear_site": "random"},
        "views": {"count": views, "dwell_s": dwell_s, "tilt_max_deg": 35.0},
        "light": {"cycles_per_level": 2 + seed // 2 % 3},
        "pixels": {"reference": PIXELS[seed % 2]},
    }
    recipe = recipe_from_data(data, f"contrast scenario {seed}")
    assert isinstance(recipe, BoardRecipe)
    return recipe


def score_contrast(recording: Path, recipe: BoardRecipe, show: Progress) -> ContrastScore:
    """Calibrate, then compare with the truth. Raises what `calibrate` raises."""
    with Recording.open(recording) as opened:
        result = calibrate(opened, recipe.target.load(), recipe.module.load(), progress=show)
    truth = read_truth(recording)
    several, contrast = result.thresholds.several, result.module.contrast
    assert contrast is not None
    assert truth.module is not None
    true = truth.module.contrast
    assert true is not None
    maps = (None, None) if several is None else (several.maps.on, several.maps.off)
    known = np.zeros(result.thresholds.on_map.shape, bool) if several is None else several.known
    sigma = result.module.uncertainty
    assert sigma is not None
    percent, deviations, errors = [], [], []
    for name, found in zip(("on", "off"), maps, strict=True):
        wanted = float(getattr(true, f"{name}_threshold"))
        error = (getattr(contrast, f"{name}_threshold") or np.nan) - wanted
        percent.append(100.0 * error / wanted)
        deviations.append(error / (sigma.of(f"contrast.{name}_threshold") or np.nan))
        errors.append(float("nan") if found is None else map_error(found, truth, f"{name}_threshold", known))
    noise = np.nan if contrast.noise_width is None else contrast.noise_width / (true.noise_width or np.nan) - 1.0
    return ContrastScore(
        result.thresholds.model,
        (percent[0], percent[1]),
        (deviations[0], deviations[1]),
        100.0 * float(noise),
        (errors[0], errors[1]),
        float(np.mean(known)),
        threshold_nees(result.module, truth.module),
    )


def map_error(found: Array, truth: Truth, name: str, known: Array) -> float:
    """RMS error of the known pixels' thresholds over the true spread of all."""
    true = truth.extras[name]
    return float(np.sqrt(np.mean((found - true)[known] ** 2)) / np.std(true)) if known.any() else float("nan")


def _row(seed: int, score: ContrastScore) -> tuple[str, ...]:
    cells = [f"{p:+.2f}|{d:+.1f}" for p, d in zip(score.percent, score.deviations, strict=True)]
    on, off = (cell.split("|") for cell in cells)
    return (
        str(seed), layout_of(seed), PIXELS[seed % 2], score.model, *on, *off, f"{score.noise_percent:+.0f}",
        f"{score.map_error[0]:.2f}", f"{score.map_error[1]:.2f}", f"{score.known:.2f}",
        f"{score.nees.value:.1f}/{score.nees.freedom}",
    )  # fmt: skip


def run_contrast_study(seeds: list[int], targets: Path, views: int, dwell_s: float, progress: Progress) -> Study:
    """Calibrate one synthetic module a seed. `targets`: the folder of example modules and targets."""
    rows: list[tuple[str, ...]] = []
    scores: list[ContrastScore] = []
    for seed in seeds:
        recipe = contrast_scenario(targets, seed, views, dwell_s)

        def show(stage: str, part: float, name: str = recipe.name) -> None:
            progress(f"{name}: {stage}", part)

        with TemporaryDirectory(prefix="hybridtrack-") as folder:
            recording = Path(folder) / "board.h5"
            try:
                generate(recipe, recording, seed, show)
                score = score_contrast(recording, recipe, show)
            except HybridtrackError as refusal:
                rows.append((str(seed), layout_of(seed), PIXELS[seed % 2], f"refused: {refusal}", *[""] * 9))
                continue
        scores.append(score)
        rows.append(_row(seed, score))
    each = [abs(p) for score in scores for p in score.percent]
    maps = [error for score in scores for error in score.map_error]
    known = float(np.mean([score.known for score in scores])) if scores else float("nan")
    ratio = float(np.mean([s.nees.value / s.nees.freedom for s in scores])) if scores else float("nan")
    enough = len(scores) >= ENOUGH_FOR_HONESTY
    honesty = (
        Check("thresholds: mean NEES over degrees of freedom", ratio, 0.7, at_least=True),
        Check("thresholds: mean NEES over degrees of freedom", ratio, 1.4),
    )
    return Study(
        title=f"Contrast of {len(seeds)} synthetic modules from five steps of light, {views} views of {dwell_s:g} s",
        columns=COLUMNS,
        rows=tuple(rows),
        checks=(
            Check("recordings calibrated", len(scores), len(seeds), at_least=True),
            Check("threshold error", percentile(each), 2.0, "%"),
            Check("single pixels' error where known, over the true spread", percentile(maps), 0.4),
            *(honesty if enough else ()),
        ),
        notes=(
            f"Thresholds of single pixels count as known on {100 * known:.0f} % of the grid. Thresholds' mean NEES "
            f"over degrees of freedom {ratio:.2f}"
            + ("." if enough else f" (judged from {ENOUGH_FOR_HONESTY} seeds on)."),
        ),
    )
