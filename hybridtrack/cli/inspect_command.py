"""`hybridtrack inspect`: what is in a recording, and whether it can be trusted."""

from pathlib import Path
from typing import Annotated

import typer

from hybridtrack.cli.console import print_findings, print_table, report_written, shown_progress


def inspect_command(
    recording: Annotated[Path, typer.Argument(help="Recording to look at (*.h5).")],
    module: Annotated[
        Path | None, typer.Option(help="Module description; else the one that the recording names.")
    ] = None,
    out: Annotated[Path | None, typer.Option(help="Folder for report.html with the figures.")] = None,
) -> None:
    """Print and draw what is in a recording: rates, clocks, gaps, defects and periodic light.

    Findings are plain sentences: stamps out of order, pixels off the grid, dropped frames, saturation, a blink that is
    locked to the frame rate. Example: hybridtrack inspect bench.h5 --out bench-look
    """
    from hybridtrack.module import load_module
    from hybridtrack.recording import Recording
    from hybridtrack.recording.health import examine
    from hybridtrack.report.health_page import health_page, health_table
    from hybridtrack.report.page import write_page

    with Recording.open(recording) as opened, shown_progress() as progress:
        report = examine(opened, load_module(module) if module is not None else None, progress)
    print_table(health_table(report), str(recording))
    print_findings(report.findings)
    if out is not None:
        write_page(health_page(report, str(recording)), out / "report.html")
        report_written(out / "report.html")
