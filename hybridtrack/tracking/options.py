"""Options of the tracker."""

from dataclasses import dataclass
from typing import Literal, get_args

from hybridtrack.errors import OptionError

Mode = Literal["hybrid", "frames", "events"]


@dataclass(frozen=True)
class TrackerOptions:
    """How to track. Lengths are in frame px unless the name says otherwise.

    `mode`: frames and events, frames alone, or events alone after the frame in which a feature starts.
    `max_features` slots, refilled by detection when `detect`; `output_rate_hz` of lines between frames;
    `fastest_rate_hz` limits event updates at speed; `patch_radius` half width of a patch (at least; a coarse event grid
    needs more); `corner_share` of the strongest corner's response that a corner must have; `min_correlation` with its
    own template under which a frame does not show the feature; `forward_backward_px` gate of Lucas-Kanade from
    frame to frame; `lost_sigma_px` position deviation at which a feature is lost, colour px; `lost_after_frames` frames
    in a row without it; `flash_log_step` mean change of log light over the array within 1 ms that is a flash;
    `buffered_events` most events kept for the frame to come.
    """

    mode: Mode = "hybrid"
    max_features: int = 150
    detect: bool = True
    output_rate_hz: float = 1000.0
    fastest_rate_hz: float = 8000.0
    patch_radius: int = 10
    corner_share: float = 0.02
    min_correlation: float = 0.6
    forward_backward_px: float = 1.0
    lost_sigma_px: float = 8.0
    lost_after_frames: int = 8
    flash_log_step: float = 0.6
    buffered_events: int = 8_000_000

    def __post_init__(self) -> None:
        if self.mode not in get_args(Mode):
            raise OptionError(f"mode must be one of {', '.join(get_args(Mode))}, got '{self.mode}'")
        limits = {
            "max_features": (1, 100_000),
            "output_rate_hz": (1.0, 8000.0),
            "fastest_rate_hz": (1.0, 100_000.0),
            "patch_radius": (4, 40),
            "corner_share": (0.0, 1.0),
            "min_correlation": (0.0, 1.0),
            "forward_backward_px": (0.0, 100.0),
            "lost_sigma_px": (0.1, 1000.0),
            "lost_after_frames": (1, 1_000_000),
            "flash_log_step": (0.05, 100.0),
            "buffered_events": (1000, 1_000_000_000),
        }
        for name, (low, high) in limits.items():
            value = getattr(self, name)
            if not low <= value <= high:
                raise OptionError(f"{name} must lie in {low} to {high}, got {value}")
        if self.fastest_rate_hz < self.output_rate_hz:
            raise OptionError(
                f"fastest_rate_hz must be at least output_rate_hz ({self.output_rate_hz}), got {self.fastest_rate_hz}"
            )
