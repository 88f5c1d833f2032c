"""Start-up, localisation, mapping, keyframes, loops and the odometer: from tracks to a trajectory and a map."""

from hybridtrack.odometry.observations import FrameTimes, View, frame_times, gather_views
from hybridtrack.odometry.odometer import Odometer
from hybridtrack.odometry.options import OdometryOptions
from hybridtrack.odometry.outputs import write_outputs
from hybridtrack.odometry.result import MapPoints, OdometryResult
from hybridtrack.odometry.run import odometry_of_tracks, run_odometry
from hybridtrack.odometry.trajectory import Trajectory, read_trajectory, write_trajectory

__all__ = [
    "FrameTimes",
    "MapPoints",
    "Odometer",
    "OdometryOptions",
    "OdometryResult",
    "Trajectory",
    "View",
    "frame_times",
    "gather_views",
    "odometry_of_tracks",
    "read_trajectory",
    "run_odometry",
    "write_outputs",
    "write_trajectory",
]
