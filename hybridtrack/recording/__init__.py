"""Events, frames and inertial data: the HDF5 store, importers and health checks."""

from hybridtrack.recording.arrays import Events, FrameTable, Imu, Series, Triggers
from hybridtrack.recording.reader import Recording
from hybridtrack.recording.writer import RecordingWriter

__all__ = ["Events", "FrameTable", "Imu", "Recording", "RecordingWriter", "Series", "Triggers"]
