"""The study of the field check: rides of unchanged and of drifted modules, in bright and in dim rooms."""

from collections.abc import Callable
from dataclasses import dataclass
from functools import partial
from pathlib import Path
from tempfile import TemporaryDirectory

import numpy as np

from hybridtrack.benchmark.lap import calibrate_board, make_recordings
from hybridtrack.benchmark.study import Check, Study
from hybridtrack.calibration.field_check import FieldCheck, check_field
from hybridtrack.errors import HybridtrackError
from hybridtrack.module import HybridModule
from hybridtrack.recording import Recording
from hybridtrack.synthesis.generate import generate
from hybridtrack.synthesis.greenhouse import GreenhouseRecipe
from hybridtrack.synthesis.recipe import load_recipe

Array = np.ndarray
Progress = Callable[[str, float], None]

COLUMNS = ("seed", "room", "changed", "verdict", "shift px", "deviation", "error px", "clock ms", "deviation", "gain")
DIM = 0.25
MAP_SHIFT_PX, CLOCK_SHIFT_MS, SMALL_CLOCK_SHIFT_MS = 0.25, 4.0, 0.05


@dataclass(frozen=True)
class Change:
    """What was done to the module before it was checked: shift of the map (u, v) px and of the frame offset, ms."""

    name: str
    map_px: tuple[float, float] = (0.0, 0.0)
    clock_ms: float = 0.0

    def of(self, module: HybridModule) -> HybridModule:
        """The module as it would be on file, had the real one changed since."""
        event_map, timing = module.colour_from_event, module.timing
        assert event_map is not None
        assert timing is not None
        matrix = np.array(event_map.matrix)
        matrix[:, 2] -= self.map_px
        offset = (timing.frame_offset_ns or 0.0) - 1e6 * self.clock_ms
        return module.model_copy(
            update={
                "colour_from_event": event_map.model_copy(update={"matrix": tuple(map(tuple, matrix.tolist()))}),
                "timing": timing.model_copy(update={"frame_offset_ns": offset}),
            }
        )


def changes_of(seed: int) -> list[Change]:
    """Unchanged, the map shifted in a random direction, the clock by much and by little."""
    random = np.random.default_rng([seed, 40])
    turn, sign = random.uniform(0, 2 * np.pi), random.choice([-1.0, 1.0])
    shift = (MAP_SHIFT_PX * float(np.cos(turn)), MAP_SHIFT_PX * float(np.sin(turn)))
    return [
        Change("nothing"),
        Change("map", map_px=shift),
        Change("clock", clock_ms=sign * CLOCK_SHIFT_MS),
        Change("clock by little", clock_ms=sign * SMALL_CLOCK_SHIFT_MS),
    ]


@dataclass(frozen=True)
class Outcome:
    """One check: None where it was refused."""

    change: Change
    check: FieldCheck | None

    @property
    def verdict(self) -> str:
        """As the command says it."""
        return "cannot tell" if self.check is None else self.check.verdict


def _row(seed: int, room: str, outcome: Outcome) -> tuple[str, ...]:
    check, change = outcome.check, outcome.change
    if check is None:
        return (str(seed), room, change.name, "refused", *[""] * 6)
    error = float(np.linalg.norm(check.shift_px - change.map_px))
    sigma = float(np.sqrt(np.linalg.eigvalsh(check.covariance)[-1]))
    return (
        str(seed), room, change.name, check.verdict, f"{check.shift_px[0]:+.3f}, {check.shift_px[1]:+.3f}",
        f"{sigma:.3f}", f"{error:.3f}", f"{1e-3 * check.clock_us:+.2f}", f"{1e-3 * check.clock_sigma_us:.2f}",
        f"{check.gain:.2f}",
    )  # fmt: skip


def _shown(show: Progress, name: str, _: str, part: float) -> None:
    show(f"checking, changed: {name}", part)


def check_ride(ride: Path, module: HybridModule, changes: list[Change], show: Progress) -> list[Outcome]:
    """Check one ride against the module as calibrated and as each change makes it."""
    outcomes = []
    for change in changes:
        with Recording.open(ride) as opened:
            try:
                checked = check_field(opened, change.of(module), None, partial(_shown, show, change.name))
            except HybridtrackError:
                outcomes.append(Outcome(change, None))
                continue
        outcomes.append(Outcome(change, checked))
    return outcomes


def dimmed(recipe: GreenhouseRecipe, factor: float) -> GreenhouseRecipe:
    """The same ride in a room with less light."""
    lamp = recipe.lamp.model_copy(update={"white_dn": recipe.lamp.white_dn * factor})
    return recipe.model_copy(update={"lamp": lamp})


def share(outcomes: list[Outcome], name: str, verdict: str) -> float:
    """Percent of the outcomes of a change that had a verdict."""
    own = [outcome.verdict == verdict for outcome in outcomes if outcome.change.name == name]
    return 100.0 * float(np.mean(own)) if own else float("nan")


def run_verify_study(
    seeds: list[int], sequences: Path, ride_recipe: str, duration_s: float, progress: Progress
) -> Study:
    """One module a seed: calibrated from a board, ridden in a bright and a dim room. `sequences`: folder of recipes."""
    rows: list[tuple[str, ...]] = []
    outcomes: list[Outcome] = []
    for seed in seeds:
        with TemporaryDirectory(prefix="hybridtrack-") as folder:

            def show(stage: str, part: float, seed: int = seed) -> None:
                progress(f"seed {seed}: {stage}", part)

            recordings = make_recordings(sequences, Path(folder), seed, show, ride_recipe, duration_s)
            calibration, _ = calibrate_board(recordings, show)
            base = load_recipe(sequences / f"{ride_recipe}.toml")
            assert isinstance(base, GreenhouseRecipe)
            truth = recordings.board_recipe.truth
            dim = dimmed(base, DIM).model_copy(update={"module_seed": seed, "truth": truth, "duration_s": duration_s})
            dim_path = Path(folder) / "dim.h5"
            generate(dim, dim_path, seed, lambda stage, part: show("making the ride in a dim room", part))
            for room, path in (("bright", recordings.lap), ("dim", dim_path)):
                for outcome in check_ride(path, calibration.module, changes_of(seed), show):
                    outcomes.append(outcome)
                    rows.append(_row(seed, room, outcome))
    return Study(
        title=f"Field check of {len(seeds)} synthetic modules, {duration_s:g} s of {ride_recipe}, two rooms each",
        columns=COLUMNS,
        rows=tuple(rows),
        checks=(
            Check(f"map shifts of {MAP_SHIFT_PX:g} px found", share(outcomes, "map", "drifted"), 95, "%",
            at_least=True), Check(f"clock shifts of {CLOCK_SHIFT_MS:g} ms found", share(outcomes, "clock",
            "drifted"), 95, "%",
                  at_least=True),
            Check(f"clock shifts of {SMALL_CLOCK_SHIFT_MS:g} ms found", share(outcomes, "clock by little", "drifted"),
                  95, "%", at_least=True),
            Check("unchanged modules said to hold", share(outcomes, "nothing", "holds"), 90, "%", at_least=True),
            Check("false alarms on unchanged modules", share(outcomes, "nothing", "drifted"), 0.5, "%"),
        ),
        notes=(
            f"Rooms are as the recipe has them, and {DIM:g} times as bright. A clock shift of "
            f"{SMALL_CLOCK_SHIFT_MS:g} ms should be found, and is not: how late a dim pixel is drowns it.",
        ),
    )  # fmt: skip
