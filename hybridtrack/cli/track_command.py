"""`hybridtrack track`: follow features through a recording."""

from pathlib import Path
from typing import Annotated

import typer

from hybridtrack.cli.console import print_table, report_written, shown_progress


def track_command(
    recording: Annotated[Path, typer.Argument(help="Recording (*.h5).")],
    module: Annotated[
        Path | None, typer.Option(help="Calibrated module (*.module.json); by default the one the recording carries.")
    ] = None,
    out: Annotated[Path, typer.Option(help="Folder for run.tracks.h5, summary.json, report.html.")] = Path("out"),
    mode: Annotated[str, typer.Option(help="hybrid, frames or events.")] = "hybrid",
    points: Annotated[Path | None, typer.Option(help="CSV id,t_ns,u,v: follow these and detect no others.")] = None,
    features: Annotated[int, typer.Option(help="Features to keep alive.")] = 150,
    overlay: Annotated[bool, typer.Option("--overlay", help="Also write overlay.mp4: tracks over the frames.")] = False,
) -> None:
    """Follow features: frame corners, and event-driven updates between the frames.

    Each sample has a position on the colour array, a covariance, a state (alive, weak, lost, out_of_view) with its
    reason, and what it came from. Example: hybridtrack track lap.h5 --module bench-1/calibrated.module.json --out lap-1
    """
    from hybridtrack.cli.module_choice import module_for
    from hybridtrack.files import write_json
    from hybridtrack.recording import Recording
    from hybridtrack.report.page import write_page
    from hybridtrack.report.track_page import track_page, track_summary, track_table
    from hybridtrack.report.track_picture import picture_of_run
    from hybridtrack.tracking import TrackerOptions, read_points, track_recording, write_tracks

    options = TrackerOptions(mode=mode, max_features=features)  # type: ignore[arg-type]
    chosen = read_points(points) if points is not None else None
    with Recording.open(recording) as opened:
        description = module_for(opened, module)
        with shown_progress() as progress:
            tracks = track_recording(opened, description, options, points=chosen, progress=progress)
        write_tracks(out / "run.tracks.h5", tracks)
        write_json(out / "summary.json", track_summary(tracks, mode))
        page = track_page(tracks, str(recording), mode, lambda: picture_of_run(opened, description, tracks))
        write_page(page, out / "report.html")
        if overlay:
            from hybridtrack.tracking.overlay import write_overlay

            with shown_progress() as progress:
                write_overlay(opened, description, tracks, out / "overlay.mp4", progress)
    print_table(track_table(tracks), str(recording))
    report_written(out / "report.html")
