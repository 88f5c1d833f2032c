"""`hybridtrack demo`: the whole job on synthetic recordings, told on one page."""

from pathlib import Path
from typing import Annotated

import typer

from hybridtrack.cli.console import console, print_table, report_written, shown_progress


def demo_command(
    out: Annotated[Path, typer.Option(help="Folder for the recordings, results and report.html.")] = Path("demo"),
    seed: Annotated[int, typer.Option(help="One seed, one demo.")] = 2026,
    frames_too: Annotated[bool, typer.Option("--frames-too", help="Also run the lap on frames alone.")] = False,
) -> None:
    """Make a board recording and a greenhouse lap, calibrate, track, find the path, and score it all.

    Takes a few minutes on two cores; the first run also compiles the kernels. The last line is the page to open.
    """
    console.print("Compiling kernels on the first run, then about three minutes of work on two cores.")
    from hybridtrack.benchmark.demo_run import run_demo
    from hybridtrack.examples import example_folder
    from hybridtrack.report.demo_page import demo_page, error_table, path_table
    from hybridtrack.report.page import write_page

    with shown_progress() as progress:
        result = run_demo(example_folder("sequences"), out, seed, frames_too, progress)
        progress("drawing the page", 0.0)
        write_page(demo_page(result), out / "report.html")
    print_table(error_table(result), "Calibration against truth")
    print_table(path_table(result), "Path against truth")
    report_written(out / "report.html")
