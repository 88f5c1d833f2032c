"""What the parts of the tracker share: the module, the options, the features and the lines they give rise to."""

from dataclasses import dataclass, field

import numpy as np

from hybridtrack.module import FrameMode, HybridModule
from hybridtrack.tracking.feature_table import Features, FeatureTable, Pace, new_features
from hybridtrack.tracking.options import TrackerOptions
from hybridtrack.tracking.track_state import ALIVE, LEFT_PICTURE, OUT_OF_VIEW
from hybridtrack.tracking.tracks_file import Tracks

Array = np.ndarray
# Stated covariances over the filters' own: errors have heavier tails than noise gives, for corners lie on outlines too,
# where two depths meet. Measured on tuning rides at 700 and 2100 px/s so that the 95 % ellipse holds about nine in ten.
HEAVY_TAILS = {"hybrid": 2.4, "frames": 4.0, "events": 2.0}
LONGEST_EXPOSURE_NS = 40_000_000  # over which past states are kept at full density


@dataclass
class Counters:
    """What the tracker did. `events_dropped`: the buffer was full."""

    frames: int = 0
    events_used: int = 0
    events_dropped: int = 0
    flashes: int = 0
    started: int = 0
    lost: int = 0
    out_of_view: int = 0


@dataclass(frozen=True)
class Slots:
    """What is kept of each feature beside the kernels' arrays; one row a slot."""

    id: Array  # int64, -1: free
    state: Array  # uint8
    reason: Array  # uint8
    missed: Array  # int64, frames in a row that did not show it
    smear: Array  # movement in the exposure of the own template, frame px
    sharpened: Array  # bool, whether events took that smear out of it
    at_frame: Array  # float64 (M, 2), where it was in the last frame


@dataclass
class Core:
    """Shared state; lengths in frame px."""

    module: HybridModule
    options: TrackerOptions
    features: Features
    slots: Slots
    radius: float
    pace: Pace
    counters: Counters = field(default_factory=Counters)

    @property
    def mode(self) -> FrameMode:
        """The module's frame mode."""
        return self.module.frame_mode

    @property
    def table(self) -> FeatureTable:
        """The features' records."""
        return self.features.table

    def active(self) -> Array:
        """Slots (K,) that hold a feature."""
        return np.flatnonzero(self.table.active)

    def inside(self, uv: Array) -> Array:
        """Whether frame positions (..., 2) lie in the picture."""
        size = np.array([self.mode.width, self.mode.height])
        return np.all((uv > -0.5) & (uv < size - 0.5), axis=-1)

    def typical_speed(self) -> float:
        """Median speed of the features, frame px/s; 0 with none."""
        active = self.active()
        return float(np.median(np.linalg.norm(self.table.state[active, 2:4], axis=1))) if len(active) else 0.0

    def lines(self, slot: Array, t_ns: Array, uv: Array, cov: Array, source: int) -> Tracks:
        """Lines in colour px of the given slots (N,), positions (N, 2) and covariances (N, 3) in frame px."""
        inside = self.inside(uv)
        state = np.where(inside, self.slots.state[slot], OUT_OF_VIEW)
        reason = np.where(inside, self.slots.reason[slot], LEFT_PICTURE)
        return Tracks(
            self.slots.id[slot],
            np.asarray(t_ns, np.int64),
            self.mode.colour_from_frame(uv),
            (np.asarray(cov) * (HEAVY_TAILS[self.options.mode] * self.mode.binning**2)).astype(np.float32),
            state.astype(np.uint8),
            reason.astype(np.uint8),
            np.full(len(slot), source, np.uint8),
        )

    def release(self, slot: int) -> None:
        """Free a slot."""
        self.table.active[slot] = 0
        self.slots.id[slot] = -1
        self.slots.state[slot] = ALIVE


def new_core(module: HybridModule, options: TrackerOptions, capacity: int) -> Core:
    """A tracker's state with no features."""
    pitch = max(module.cluster.width, module.cluster.height) / module.frame_mode.binning
    with_events = options.mode != "frames"
    radius = float(max(options.patch_radius, int(np.ceil(4.5 * pitch)) if with_events else 0))
    features = new_features(capacity, 2 * (int(radius) + 14) + 1)
    slots = Slots(
        np.full(capacity, -1, np.int64),
        np.zeros(capacity, np.uint8),
        np.zeros(capacity, np.uint8),
        np.zeros(capacity, np.int64),
        np.zeros(capacity),
        np.zeros(capacity, bool),
        np.zeros((capacity, 2)),
    )
    return Core(module, options, features, slots, radius, new_pace(module, options, radius))


def new_pace(module: HybridModule, options: TrackerOptions, radius: float) -> Pace:
    """Constants of the event filter for a module."""
    longest = int(np.ceil(1e9 / options.output_rate_hz))
    parts = int(np.ceil(longest / 1e6))
    base = longest // parts
    affine = event_from_frame(module)
    (x_u, x_v, x_0), (y_u, y_v, y_0) = affine.tolist()
    reach = np.ceil(np.abs(affine[:, :2]).sum(axis=1) * radius).astype(np.int64) + map_slack(module, affine)
    return Pace(
        width=module.frame_mode.width,
        height=module.frame_mode.height,
        radius=radius,
        x_u=x_u,
        x_v=x_v,
        x_0=x_0,
        y_u=y_u,
        y_v=y_v,
        y_0=y_0,
        reach_x=int(reach[0]),
        reach_y=int(reach[1]),
        acceleration_share=60.0,
        acceleration_floor=1000.0,
        acceleration_time_s=0.01,
        speed_memory_s=0.1,
        gain_rate=0.5,
        level_discount=0.5,
        slack=1.2,
        slack_fresh=1.6,
        output_ns=base * parts,
        history_ns=LONGEST_EXPOSURE_NS // 150,
        base_ns=base,
        shortest_ns=int(1e9 / options.fastest_rate_hz),
        step_px=1.0,
        surprise=9.0,
        lag_ns=0,
        measuring=0,
        common_share=0.10,
        common_floor=40.0,
        common_time_s=0.01,
    )


def event_from_frame(module: HybridModule) -> Array:
    """The affine map (2, 3) from frame px to the event grid at the middle of the frame."""
    mode = module.frame_mode
    middle = 0.5 * np.array([mode.width - 1.0, mode.height - 1.0])
    at = module.event_from_colour_px(mode.colour_from_frame(middle + np.array([[0.0, 0.0], [1.0, 0.0], [0.0, 1.0]])))
    linear = np.stack([at[1] - at[0], at[2] - at[0]], axis=1)
    return np.column_stack([linear, at[0] - linear @ middle])


def map_slack(module: HybridModule, affine: Array) -> int:
    """Event px by which the module's map departs from `affine` at most, rounded up, plus one."""
    uv = module.frame_mode.frame_from_colour(module.event_pixel_positions())
    columns, rows = np.meshgrid(np.arange(uv.shape[1]), np.arange(uv.shape[0]))
    away = uv @ affine[:, :2].T + affine[:, 2] - np.stack([columns, rows], axis=-1)
    return 1 + int(np.ceil(np.abs(away).max() - 1e-6))
