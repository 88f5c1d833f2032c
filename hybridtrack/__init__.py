"""hybridtrack: calibration, tracking and odometry for hybrid event-and-colour camera modules."""

__version__ = "0.1.0"
__all__ = ["__version__"]
