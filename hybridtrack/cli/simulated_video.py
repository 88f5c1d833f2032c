"""The part of `hybridtrack ingest` that simulates event pixels from a plain video."""

from pathlib import Path

from hybridtrack.cli.console import console, shown_progress


def simulate_video(video: Path, out: Path, cluster: int, seed: int) -> None:
    """Write a recording whose events come from simulated event pixels looking at the video."""
    from hybridtrack.synthesis.video_events import VideoEventOptions, events_from_video

    with shown_progress() as progress:
        count = events_from_video(video, out, VideoEventOptions(cluster=cluster), seed, progress)
    console.print(f"{count:,} simulated events: they show what the pixel model knows, not what silicon does")
