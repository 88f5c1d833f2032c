"""Odometry of a whole recording: tracks, views, the odometer, its finish."""

from collections.abc import Callable
from dataclasses import replace
from typing import cast

from hybridtrack.errors import DegenerateDataError
from hybridtrack.module import HybridModule
from hybridtrack.odometry.finishing import finish
from hybridtrack.odometry.map_file import colours_of
from hybridtrack.odometry.observations import TrackTable, frame_times, gather_views
from hybridtrack.odometry.odometer import Odometer
from hybridtrack.odometry.options import Mode, OdometryOptions
from hybridtrack.odometry.places import Place, describe
from hybridtrack.odometry.result import OdometryResult, result_of
from hybridtrack.recording import Recording

Progress = Callable[[str, float], None]

FEWEST_FRAMES = 3


def _silent(stage: str, fraction: float) -> None:
    """No progress shown."""


def odometry_of_tracks(
    tracks: TrackTable,
    recording: Recording,
    module: HybridModule,
    options: OdometryOptions,
    progress: Progress = _silent,
) -> OdometryResult:
    """Odometry from tracks that exist already; the recording gives frame times and pictures of places.

    Raises NotCalibratedError without lens or clocks, DegenerateDataError without frames or samples near them.
    """
    recording.require_frames(FEWEST_FRAMES)
    lens, times = module.lens_model(), frame_times(recording.frames, module)
    views = gather_views(tracks, times, lens, options.model_sigma_px)

    def look(frame: int) -> Place | None:
        return describe(recording.frame_image(frame), views[frame], times, module, options.places)

    odometer = Odometer(module.colour_array.width, options, look)
    for number, view in enumerate(views):
        odometer.push(view)
        progress("odometry", (number + 1) / len(views))
    progress("adjusting the map", 0.0)
    result = result_of(odometer, finish(odometer))
    colours = colours_of(result.points, recording.frame_image, module.frame_mode)
    progress("adjusting the map", 1.0)
    return replace(result, points=replace(result.points, colours=colours))


def run_odometry(
    recording: Recording, module: HybridModule, options: OdometryOptions | None = None, progress: Progress = _silent
) -> OdometryResult:
    """Track and run odometry in `options.mode`. Raises as `odometry_of_tracks` and the tracker do."""
    from hybridtrack.tracking import TrackerOptions, track_recording

    chosen = options or OdometryOptions()
    recording.require_frames(FEWEST_FRAMES)
    if chosen.mode == "hybrid":
        recording.require_events()
    module.lens_model()
    tracks = track_recording(recording, module, TrackerOptions(mode=cast(Mode, chosen.mode)), progress=progress)
    if not len(tracks):
        raise DegenerateDataError(f"{recording.path}: expected at least one track, and the tracker found none")
    return odometry_of_tracks(tracks, recording, module, chosen, progress)
