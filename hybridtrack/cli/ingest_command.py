"""`hybridtrack ingest`: make a recording from tables and pictures of other origin."""

from pathlib import Path
from typing import Annotated

import typer

from hybridtrack.cli.console import console, report_written, shown_progress
from hybridtrack.errors import OptionError

SENSOR_PANEL = "Frames and sensors"
EVENT_PANEL = "Events"


def _column_names(text: str) -> tuple[str, str, str, str]:
    names = tuple(name.strip() for name in text.split(","))
    if len(names) != 4:
        raise OptionError(f"--columns: four names (stamp, x, y, polarity) are required, got '{text}'")
    return names[0], names[1], names[2], names[3]


def ingest_command(
    out: Annotated[Path, typer.Argument(help="Recording to write (*.h5).")],
    events: Annotated[
        Path | None, typer.Option(help="Events: .csv, .txt, .npz, .h5.", rich_help_panel=EVENT_PANEL)
    ] = None,
    columns: Annotated[
        str,
        typer.Option(
            help="Names of stamp, x, y and polarity; the order in a CSV with no header.", rich_help_panel=EVENT_PANEL
        ),
    ] = "t,x,y,p",
    time_unit: Annotated[str, typer.Option(help="s, ms, us or ns; of all tables.", rich_help_panel=EVENT_PANEL)] = "us",
    polarity: Annotated[
        str, typer.Option(help="01: 1 is ON; +-1: +1 is ON; 10: 0 is ON.", rich_help_panel=EVENT_PANEL)
    ] = "01",
    time_origin_ns: Annotated[int, typer.Option(help="Added to every event stamp.", rich_help_panel=EVENT_PANEL)] = 0,
    pixel_origin: Annotated[
        int, typer.Option(help="Number of the first column and row.", rich_help_panel=EVENT_PANEL)
    ] = 0,
    delimiter: Annotated[str, typer.Option(help="Between the cells of a CSV.", rich_help_panel=EVENT_PANEL)] = ",",
    reorder_ms: Annotated[
        float, typer.Option(help="How late an event may stand in the table.", rich_help_panel=EVENT_PANEL)
    ] = 10.0,
    frames: Annotated[
        Path | None, typer.Option(help="A video, or a folder of pictures.", rich_help_panel=SENSOR_PANEL)
    ] = None,
    frame_stamps: Annotated[
        Path | None, typer.Option(help="CSV with t and exposure, one row a picture.", rich_help_panel=SENSOR_PANEL)
    ] = None,
    stamp: Annotated[
        str, typer.Option(help="What a frame stamp marks: start, mid or end of exposure.", rich_help_panel=SENSOR_PANEL)
    ] = "start",
    exposure_ms: Annotated[
        float | None, typer.Option(help="Exposure, where no table has it.", rich_help_panel=SENSOR_PANEL)
    ] = None,
    grey: Annotated[bool, typer.Option("--grey", help="Store one channel.", rich_help_panel=SENSOR_PANEL)] = False,
    imu: Annotated[
        Path | None, typer.Option(help="CSV with t,gx,gy,gz,ax,ay,az (rad/s, m/s^2).", rich_help_panel=SENSOR_PANEL)
    ] = None,
    triggers: Annotated[
        Path | None, typer.Option(help="CSV with t,channel,edge.", rich_help_panel=SENSOR_PANEL)
    ] = None,
    module: Annotated[Path | None, typer.Option(help="Nominal module to store with the recording.")] = None,
    events_from_video: Annotated[
        Path | None, typer.Option(help="No module yet: a plain video, from which event pixels are simulated.")
    ] = None,
    cluster: Annotated[int, typer.Option(help="Pixels a side of a cluster, with --events-from-video.")] = 4,
    seed: Annotated[int, typer.Option(help="Seed of the simulated pixels' noise.")] = 0,
) -> None:
    """Make a recording from event tables, videos, pictures and sensor tables.

    Nothing is guessed: say what the columns, units and codings are. The recording appears whole or not at all.

    Examples: hybridtrack ingest run.h5 --events run.csv --time-unit us --frames run.mp4 --frame-stamps run_frames.csv;
    hybridtrack ingest clip.h5 --events-from-video clip.mp4
    """
    if events_from_video is not None:
        if any(source is not None for source in (events, frames, frame_stamps, imu, triggers)):
            raise OptionError("ingest: --events-from-video makes events and frames itself; give it alone")
        from hybridtrack.cli.simulated_video import simulate_video

        simulate_video(events_from_video, out, cluster, seed)
        report_written(out)
        return
    from hybridtrack.module import load_module
    from hybridtrack.recording.event_tables import EventTableOptions
    from hybridtrack.recording.ingest import IngestOptions, IngestSources, ingest

    table = EventTableOptions(
        _column_names(columns), time_unit, polarity, time_origin_ns, pixel_origin, delimiter.replace("\\t", "\t")
    )
    exposure_ns = None if exposure_ms is None else round(exposure_ms * 1e6)
    options = IngestOptions(table, stamp, exposure_ns, grey, round(reorder_ms * 1e6))
    sources = IngestSources(events, frames, frame_stamps, imu, triggers)
    with shown_progress() as progress:
        counts = ingest(sources, out, load_module(module) if module is not None else None, options, progress)
    console.print(
        f"{counts.events:,} events, {counts.frames} frames, {counts.imu} IMU samples, {counts.triggers} edges"
    )
    report_written(out)
