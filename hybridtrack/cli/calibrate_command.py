"""`hybridtrack calibrate`: from a recording of a blinking target, or from photographs, to a calibrated module."""

from pathlib import Path
from typing import Annotated

import typer

from hybridtrack.cli.console import print_findings, print_table, report_written, shown_progress
from hybridtrack.errors import OptionError
from hybridtrack.report.page import BLINK_CAUTION


def _calibrate_recording(recording: Path, target: Path, module: Path | None, out: Path, lens_model: str | None) -> None:
    from hybridtrack.calibration import CalibrationOptions, calibrate, summary
    from hybridtrack.files import write_json
    from hybridtrack.module import load_module, load_target, save_module
    from hybridtrack.recording import Recording
    from hybridtrack.report.calibration_page import calibration_page, calibration_table
    from hybridtrack.report.page import write_page

    board = load_target(target)
    with Recording.open(recording) as opened, shown_progress() as progress:
        nominal = load_module(module) if module is not None else opened.module
        if nominal is None:
            raise OptionError(f"{recording}: names no module; --module with a nominal one is required")
        result = calibrate(opened, board, nominal, CalibrationOptions(lens_model=lens_model), progress)
    save_module(result.module, out / "calibrated.module.json")
    write_json(out / "summary.json", summary(result))
    write_page(calibration_page(result, str(recording)), out / "report.html")
    print_table(calibration_table(result), f"{result.module.name}, calibrated")
    print_findings(result.module.findings or [])
    report_written(out / "report.html")


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
        Path | None, typer.Argument(help="Recording of the target (*.h5); none with --photos.")
    ] = None,
    target: Annotated[Path | None, typer.Option(help="The blinking target (*.target.json).")] = None,
    module: Annotated[Path | None, typer.Option(help="Nominal module; else the one that the recording names.")] = None,
    out: Annotated[Path, typer.Option(help="Folder for calibrated.module.json, summary.json, report.html.")] = Path(
        "out"
    ),
    lens_model: Annotated[
        str | None, typer.Option(help="Lens model to use; else the one with the least held-out error.")
    ] = None,
    photos: Annotated[
        Path | None, typer.Option(help="Calibrate a lens alone, from a folder of board photographs.")
    ] = None,
    corners: Annotated[str, typer.Option(help="Inner corners of the photographed board.")] = "9x6",
    square_mm: Annotated[float, typer.Option(help="Square of the photographed board, mm.")] = 25.0,
) -> None:
    """Estimate lens, event-to-colour map, clocks, thresholds and defects, each with its deviation.

    The nominal module may have mirroring and clear site wrong, and no lens: they are found. Show the target in six or
    more still views, tilted up to 35 degrees and turned, some of them into the picture's corners.

    Example: hybridtrack calibrate board.h5 --target calib_targets/lamp_panel.target.json --module
    calib_targets/wren.module.json --out bench-1
    """
    if photos is not None:
        if recording is not None:
            raise OptionError("calibrate: a recording or --photos is required, got both")
        _calibrate_photos(photos, corners, square_mm, out, module, lens_model)
        return
    if recording is None or target is None:
        raise OptionError("calibrate: a recording and --target are required (or --photos), got too little")
    _calibrate_recording(recording, target, module, out, lens_model)


calibrate_command.__doc__ = f"{calibrate_command.__doc__}\n\n    Caution: {BLINK_CAUTION}"
