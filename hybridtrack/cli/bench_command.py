"""`hybridtrack bench`: how far results can be trusted, on synthetic recordings of seeds not used in tuning."""

import sys
from collections.abc import Callable
from pathlib import Path
from typing import TYPE_CHECKING, Annotated

import typer

from hybridtrack.cli.console import console, print_table, report_written, shown_progress
from hybridtrack.report.page import Table

if TYPE_CHECKING:
    from hybridtrack.benchmark.study import Study

bench_app = typer.Typer(
    no_args_is_help=True, help="Measure accuracy and speed on synthetic recordings with known truth."
)

Seeds = Annotated[int, typer.Option(help="How many recordings, one a seed.")]
First = Annotated[int, typer.Option(help="First seed; seeds below 1000 were used in tuning.")]
Out = Annotated[Path | None, typer.Option(help="Folder for the table as CSV.")]


def _finish(name: str, run: Callable[[Callable[[str, float], None]], "Study"], out: Path | None) -> None:
    from hybridtrack.benchmark.study import write_study_csv

    with shown_progress() as progress:
        study = run(progress)
    print_table(Table(study.columns, study.rows), study.title)
    for note in study.notes:
        console.print(note, soft_wrap=True, markup=False)
    for check in study.checks:
        console.print(check.sentence(), soft_wrap=True, markup=False)
    if out is not None:
        write_study_csv(study, out / f"{name}.csv")
        report_written(out / f"{name}.csv")
    if not study.passed:
        sys.exit(1)


@bench_app.command("calibration")
def bench_calibration(
    seeds: Seeds = 10,
    first_seed: First = 1000,
    views: Annotated[int, typer.Option(help="Views a recording.")] = 12,
    dwell_s: Annotated[float, typer.Option(help="Seconds a view.")] = 0.5,
    out: Out = None,
) -> None:
    """Calibrate synthetic modules of several layouts and compare with the truth. Exit code 1 where a limit fails."""
    from hybridtrack.benchmark.calibration_study import run_calibration_study
    from hybridtrack.examples import example_folder

    chosen = list(range(first_seed, first_seed + seeds))
    targets = example_folder("calib_targets")
    _finish("calibration", lambda progress: run_calibration_study(chosen, targets, views, dwell_s, progress), out)


@bench_app.command("contrast")
def bench_contrast(
    seeds: Seeds = 4,
    first_seed: First = 1000,
    views: Annotated[int, typer.Option(help="Views a recording.")] = 14,
    dwell_s: Annotated[float, typer.Option(help="Seconds a view.")] = 0.7,
    out: Out = None,
) -> None:
    """Calibrate modules from a target with several steps of light: thresholds, noise, maps. Exit code 1 on a limit."""
    from hybridtrack.benchmark.contrast_study import run_contrast_study
    from hybridtrack.examples import example_folder

    chosen = list(range(first_seed, first_seed + seeds))
    targets = example_folder("calib_targets")
    _finish("contrast", lambda progress: run_contrast_study(chosen, targets, views, dwell_s, progress), out)


@bench_app.command("odometry")
def bench_odometry(
    seeds: Seeds = 3,
    first_seed: First = 1000,
    recipe: Annotated[str, typer.Option(help="Greenhouse recipe in the folder sequences.")] = "greenhouse_lap",
    out: Out = None,
) -> None:
    """Calibrate modules from a board, run laps of the greenhouse with them, and compare with the truth.

    Frames alone and hybrid stand side by side. Exit code 1 where a limit fails.
    """
    from hybridtrack.benchmark.odometry_study import run_odometry_study
    from hybridtrack.examples import example_folder

    chosen = list(range(first_seed, first_seed + seeds))
    sequences = example_folder("sequences")
    _finish("odometry", lambda progress: run_odometry_study(chosen, sequences, recipe, progress), out)


@bench_app.command("verify")
def bench_verify(
    seeds: Seeds = 3,
    first_seed: First = 1000,
    recipe: Annotated[str, typer.Option(help="Greenhouse recipe in the folder sequences.")] = "greenhouse_moderate",
    duration_s: Annotated[float, typer.Option(help="Seconds of motion.")] = 5.0,
    out: Out = None,
) -> None:
    """Check modules in the field, unchanged and drifted, in bright and dim rooms. Exit code 1 where a limit fails."""
    from hybridtrack.benchmark.verify_study import run_verify_study
    from hybridtrack.examples import example_folder

    chosen = list(range(first_seed, first_seed + seeds))
    sequences = example_folder("sequences")
    _finish("verify", lambda progress: run_verify_study(chosen, sequences, recipe, duration_s, progress), out)


@bench_app.command("tracking")
def bench_tracking(
    seeds: Seeds = 3,
    first_seed: First = 1000,
    speeds: Annotated[str, typer.Option(help="Peak picture speeds, colour px/s.")] = "500,1000,2000,4000,8000,16000",
    oracle: Annotated[bool, typer.Option(help="Also follow sharp pictures at 1 kHz.")] = True,
    out: Out = None,
) -> None:
    """Follow one path at rising speed with events, frames and both, beside a baseline and an oracle.

    Exit code 1 where a limit fails.
    """
    from hybridtrack.benchmark.tracking_study import run_tracking_study
    from hybridtrack.errors import OptionError
    from hybridtrack.examples import example_folder
    from hybridtrack.report.page import write_page
    from hybridtrack.report.tracking_study_page import tracking_study_page

    try:
        chosen_speeds = [float(speed) for speed in speeds.split(",")]
    except ValueError:
        raise OptionError(f"speeds must be numbers with commas between them, got '{speeds}'") from None
    chosen = list(range(first_seed, first_seed + seeds))

    def run(progress: Callable[[str, float], None]) -> "Study":
        result = run_tracking_study(chosen_speeds, chosen, example_folder("sequences"), oracle, progress)
        if out is not None:
            write_page(tracking_study_page(result), out / "report.html")
        return result.study

    _finish("tracking", run, out)
