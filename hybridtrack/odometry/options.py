"""Every number that decides how odometry runs, in one frozen object.

Gates on reprojection are in standard deviations of an observation: the track's own covariance plus `model_sigma_px`,
which stands for what the tracker does not know of (lens, clocks, corners that creep).
"""

from dataclasses import dataclass, fields
from typing import Literal, get_args

from hybridtrack.errors import OptionError

Mode = Literal["hybrid", "frames"]


@dataclass(frozen=True)
class OdometryOptions:
    """Options of `run_odometry` and `Odometer`; every number must be positive.

    `start_depth`: median depth of the first map, in the trajectory's unit; it sets the scale, which one camera alone
    does not know. `seed` fixes every random draw.
    """

    mode: str = "hybrid"
    start_depth: float = 1.0
    seed: int = 1
    # observations
    model_sigma_px: float = 0.2
    # start-up
    start_min_tracks: int = 30
    start_parallax_deg: float = 2.0
    start_max_wait_s: float = 3.0
    # localisation
    inlier_sigma: float = 4.0
    min_inliers: int = 10
    weak_inliers: int = 25
    min_inlier_share: float = 0.4
    # mapping
    triangulation_parallax_deg: float = 1.0
    point_parallax_deg: float = 0.7
    keyframe_flow_share: float = 0.06
    keyframe_overlap: float = 0.75
    window_keyframes: int = 8
    max_bundle_keyframes: int = 300
    # places
    places: int = 600
    loop_min_gap_s: float = 1.0
    loop_min_inliers: int = 25
    loop_max_drift: float = 0.25

    def __post_init__(self) -> None:
        if self.mode not in get_args(Mode):
            raise OptionError(f"mode: expected one of {', '.join(get_args(Mode))}, got {self.mode!r}")
        for field in fields(self):
            value = getattr(self, field.name)
            if field.name not in ("mode", "seed") and not value > 0:
                raise OptionError(f"{field.name}: expected a positive number, got {value}")
        if self.window_keyframes < 3:
            raise OptionError(f"window_keyframes: expected at least 3, got {self.window_keyframes}")
