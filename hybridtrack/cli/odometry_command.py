"""`hybridtrack odometry`: from a recording to a camera path and a sparse map."""

import sys
from pathlib import Path
from typing import Annotated

import typer

from hybridtrack.cli.console import console, print_findings, print_table, report_written, shown_progress
from hybridtrack.report.page import POSE_CAUTION


def odometry_command(
    recording: Annotated[Path, typer.Argument(help="Recording (*.h5).")],
    module: Annotated[
        Path | None, typer.Option(help="Calibrated module (*.module.json); by default the one the recording carries.")
    ] = None,
    out: Annotated[
        Path, typer.Option(help="Folder for trajectory.csv, map.ply, pose_graph.json, summary.json, report.html.")
    ] = Path("out"),
    mode: Annotated[str, typer.Option(help="hybrid or frames.")] = "hybrid",
) -> None:
    """Estimate the camera's path, a pose a frame with its covariance and health, and a sparse map.

    One camera does not observe the scale: lengths are in the map's own unit. A lost pose is left empty and never
    bridged in silence. Exit code 1: done, but poses were lost or the path fell into parts.
    """
    from hybridtrack.cli.module_choice import module_for
    from hybridtrack.odometry import OdometryOptions, run_odometry, write_outputs
    from hybridtrack.recording import Recording
    from hybridtrack.report.odometry_page import odometry_page, odometry_table
    from hybridtrack.report.page import write_page

    options = OdometryOptions(mode=mode)
    with Recording.open(recording) as opened, shown_progress() as progress:
        result = run_odometry(opened, module_for(opened, module), options, progress)
    write_outputs(result, out)
    write_page(odometry_page(result, str(recording)), out / "report.html")
    print_table(odometry_table(result), str(recording))
    print_findings(result.failures)
    console.print(POSE_CAUTION, soft_wrap=True, markup=False)
    report_written(out / "report.html")
    if result.failures:
        sys.exit(1)
