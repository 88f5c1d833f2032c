"""`hybridtrack calibrate`: from a recording of a blinking target, or from photographs, to a calibrated module."""

import sys
from pathlib import Path
from typing import TYPE_CHECKING, Annotated

import typer

from hybridtrack.cli.console import print_findings, print_table, report_written, shown_progress
from hybridtrack.errors import OptionError
from hybridtrack.report.page import BLINK_CAUTION

if TYPE_CHECKING:
    from hybridtrack.cli.calibration_output import Calibrated, CalibrationJob


def _job(target: Path, module: Path | None, lens_model: str | None, limits: Path | None) -> "CalibrationJob":
    from hybridtrack.calibration.limits import load_limits
    from hybridtrack.cli.calibration_output import CalibrationJob
    from hybridtrack.module import load_module, load_target

    return CalibrationJob(
        load_target(target),
        load_module(module) if module is not None else None,
        lens_model,
        load_limits(limits) if limits is not None else None,
        "" if limits is None else str(limits),
    )


def _print_calibration(done: "Calibrated") -> None:
    from hybridtrack.report.calibration_page import calibration_table
    from hybridtrack.report.repeatability_page import limits_table

    print_table(calibration_table(done.result), f"{done.result.module.name}, calibrated from {done.path}")
    if done.checks:
        print_table(limits_table(done.checks), "Limits")
    print_findings(done.result.module.findings or [])


def _with_progress(recording: Path, job: "CalibrationJob", which: str = "") -> "Calibrated":
    from hybridtrack.cli.calibration_output import calibrate_file

    with shown_progress() as progress:
        return calibrate_file(
            recording, job, lambda stage, fraction: progress(f"{which}: {stage}" if which else stage, fraction)
        )


def _require_different(recordings: list[Path]) -> None:
    from hybridtrack.recording import Recording

    digests = []
    for path in recordings:
        with Recording.open(path) as opened:
            digests.append(opened.digest())
    if digests[0] == digests[1]:
        raise OptionError(
            f"calibrate: two recordings are required for repeatability, got one of the same content twice: "
            f"{recordings[0]} and {recordings[1]}"
        )


def _calibrate_one(recording: Path, job: "CalibrationJob", out: Path) -> bool:
    from hybridtrack.cli.calibration_output import write_calibration

    done = _with_progress(recording, job)
    write_calibration(done, job, out)
    _print_calibration(done)
    report_written(out / "report.html")
    return done.passed


def _calibrate_two(recordings: list[Path], job: "CalibrationJob", out: Path) -> bool:
    """The first one's files in `out`, with the comparison; the second one's in its folder `second`."""
    from hybridtrack.calibration.repeatability import compare_calibrations, repeatability_summary
    from hybridtrack.cli.calibration_output import write_calibration
    from hybridtrack.report.repeatability_page import block_table, difference_table, repeatability_section

    _require_different(recordings)
    first, second = (
        _with_progress(path, job, which) for path, which in zip(recordings, ("first", "second"), strict=True)
    )
    compared = compare_calibrations(first.result.module, second.result.module, first.result.blink.period_ns)
    section = repeatability_section(compared, str(recordings[0]), str(recordings[1]))
    more = {"repeatability": {"second": str(recordings[1]), **repeatability_summary(compared)}}
    write_calibration(second, job, out / "second")
    write_calibration(first, job, out, more, (section,))
    for one in (first, second):
        _print_calibration(one)
    print_table(difference_table(compared), "Repeatability")
    print_table(block_table(compared))
    print_findings([section.text])
    report_written(out / "report.html")
    return compared.agrees and first.passed and second.passed


def _calibrate_photos(
    folder: Path, corners: str, square_mm: float, out: Path, module: Path | None, lens_model: str | None
) -> None:
    from hybridtrack.calibration.photos import calibrate_photos
    from hybridtrack.cli.photo_output import write_photo_calibration
    from hybridtrack.module import load_module

    try:
        columns, rows = (int(number) for number in corners.lower().split("x"))
    except ValueError:
        raise OptionError(f"--corners: inner corners as COLUMNSxROWS are required, got '{corners}'") from None
    with shown_progress() as progress:
        result = calibrate_photos(folder, columns, rows, square_mm * 1e-3, lens_model, progress)
    write_photo_calibration(result, out, load_module(module) if module is not None else None)


def calibrate_command(
    recording: Annotated[
        list[Path] | None,
        typer.Argument(help="Recording of the target (*.h5); two of one module to compare them; none with --photos."),
    ] = None,
    target: Annotated[Path | None, typer.Option(help="The blinking target (*.target.json).")] = None,
    module: Annotated[Path | None, typer.Option(help="Nominal module; else the one that the recording names.")] = None,
    out: Annotated[Path, typer.Option(help="Folder for calibrated.module.json, summary.json, report.html.")] = Path(
        "out"
    ),
    lens_model: Annotated[
        str | None, typer.Option(help="Lens model to use; else the one with the least held-out error.")
    ] = None,
    limits: Annotated[
        Path | None, typer.Option(help="Limits of a production line (TOML or JSON): pass or fail per number.")
    ] = None,
    batch: Annotated[
        bool, typer.Option("--batch", help="Calibrate a lot: any number of recordings, or folders of them.")
    ] = False,
    photos: Annotated[
        Path | None, typer.Option(help="Calibrate a lens alone, from a folder of board photographs.")
    ] = None,
    corners: Annotated[str, typer.Option(help="Inner corners of the photographed board.")] = "9x6",
    square_mm: Annotated[float, typer.Option(help="Square of the photographed board, mm.")] = 25.0,
) -> None:
    """Estimate lens, event-to-colour map, clocks, thresholds and defects, each with its deviation.

    The nominal module may have mirroring and clear site wrong, and no lens: they are found. Show the target in six or
    more still views, tilted up to 35 degrees and turned, some of them into the picture's corners.

    Two recordings of one module are compared: differences of all numbers in deviations (exit code 1 if they disagree).
    With --batch each recording is a module: percentiles, spread and outliers of each number; a refusal of one is said,
    and the rest goes on.

    --limits FILE holds one table for each number, named as in summary.json, with min, max and max_sigma (of its
    deviation), all optional: [lens.fx] min = 820, max = 860, max_sigma = 0.5. guard_deviations = 2 at the top asks
    values to stay that many deviations inside. Exit code 1 where a number fails. An unknown name is refused with the
    list of all names.

    Example: hybridtrack calibrate board.h5 --target calib_targets/lamp_panel.target.json --module
    calib_targets/wren.module.json --out bench-1
    """
    if photos is not None:
        if recording or limits is not None or batch:
            raise OptionError("calibrate: recordings (with --limits, --batch) or --photos are required, got both")
        _calibrate_photos(photos, corners, square_mm, out, module, lens_model)
        return
    if not recording or target is None:
        raise OptionError("calibrate: a recording and --target are required (or --photos), got too little")
    if len(recording) > 2 and not batch:
        raise OptionError(f"calibrate: one recording, two to compare, or --batch is required, got {len(recording)}")
    job = _job(target, module, lens_model, limits)
    if batch:
        from hybridtrack.cli.calibrate_batch import calibrate_lot

        passed = calibrate_lot(recording, job, out)
    elif len(recording) == 2:
        passed = _calibrate_two(recording, job, out)
    else:
        passed = _calibrate_one(recording[0], job, out)
    if not passed:
        sys.exit(1)


calibrate_command.__doc__ = f"{calibrate_command.__doc__}\n\n    Caution: {BLINK_CAUTION}"
