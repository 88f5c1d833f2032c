"""`hybridtrack verify`: does a calibration still hold, from ordinary motion, with no target at hand."""

import sys
from pathlib import Path
from typing import Annotated

import typer

from hybridtrack.cli.console import print_findings, print_table, report_written, shown_progress

EXIT_CODES = {"holds": 0, "drifted": 1, "cannot tell": 2}


def verify_command(
    recording: Annotated[Path, typer.Argument(help="Recording of ordinary motion over textured ground (*.h5).")],
    module: Annotated[Path, typer.Option(help="The calibrated module to be checked (*.module.json).")],
    out: Annotated[Path, typer.Option(help="Folder for summary.json and report.html.")] = Path("out"),
) -> None:
    """Check in the field whether a calibration still holds: no target, just motion.

    What frames say of the light at each event pixel is held against its events. The answer is one of: holds;
    drifted, by how much, then calibrate anew; cannot tell, when there was too little motion or texture. The event
    map is told to a few hundredths of a pixel, the frame offset to a millisecond or two only. Settings of the
    recording that differ from those of the calibration are named.

    Move the module by hand for five seconds, to and fro in two directions, at a walking pace, over anything with
    texture. Exit code 0: holds; 1: drifted; 2: cannot tell, or refused.

    Example: hybridtrack verify walk.h5 --module bench-1/calibrated.module.json
    """
    from hybridtrack.calibration.field_check import check_field, check_summary
    from hybridtrack.files import write_json
    from hybridtrack.module import load_contrast_map, load_module
    from hybridtrack.recording import Recording
    from hybridtrack.report.page import write_page
    from hybridtrack.report.verify_page import verify_page, verify_table

    checked = load_module(module)
    with Recording.open(recording) as opened, shown_progress() as progress:
        result = check_field(opened, checked, load_contrast_map(checked, module), progress)
    write_json(out / "summary.json", check_summary(result))
    write_page(verify_page(result, checked, str(recording)), out / "report.html")
    print_table(verify_table(result), f"{checked.name or module}: {result.verdict}")
    print_findings(result.findings)
    report_written(out / "report.html")
    sys.exit(EXIT_CODES[result.verdict])
