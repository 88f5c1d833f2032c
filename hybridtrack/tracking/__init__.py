"""Frame corners, brightness reconstruction, event-driven alignment and the tracker."""

from hybridtrack.tracking.offline import track_recording
from hybridtrack.tracking.options import TrackerOptions
from hybridtrack.tracking.points_file import Points, read_points, write_points
from hybridtrack.tracking.tracker import Tracker
from hybridtrack.tracking.tracks_file import Tracks, read_tracks, write_tracks

__all__ = [
    "Points",
    "Tracker",
    "TrackerOptions",
    "Tracks",
    "read_points",
    "read_tracks",
    "track_recording",
    "write_points",
    "write_tracks",
]
