"""From tracks to what each frame saw: rays with their own times and the covariance of each.

Under a rolling shutter every row sees the world from another pose. A view's pose belongs to mid-exposure of its middle
row; an observation keeps `dt_s`, its own time less that, and the estimators move the pose there. Minimal solvers, which
know no motion yet, take `rays_at_frame`: the track itself, interpolated between its own samples to the view's time.

An observation's residual is linear in the unit direction n of the point: r = W n with W = L^-1 d(uv)/d(direction) at
the measured ray b, L L' = covariance in px. A lens sees directions only, so W b = 0, and r is the reprojection error
over its standard deviation, for any lens and without projecting again.
"""

from dataclasses import dataclass
from typing import Protocol

import numpy as np

from hybridtrack.errors import DegenerateDataError
from hybridtrack.geometry import Lens
from hybridtrack.module import HybridModule
from hybridtrack.recording import FrameTable

Array = np.ndarray

NS = 1e-9
FRAME_SOURCES = ("frame", "both")
GONE = ("lost", "out_of_view")


class TrackTable(Protocol):
    """The columns of a tracks file that odometry reads; N samples sorted by time, then id."""

    @property
    def id(self) -> Array: ...
    @property
    def t_ns(self) -> Array: ...
    @property
    def uv(self) -> Array: ...
    @property
    def cov(self) -> Array: ...
    @property
    def state(self) -> Array: ...
    @property
    def source(self) -> Array: ...
    @property
    def states(self) -> tuple[str, ...]: ...
    @property
    def sources(self) -> tuple[str, ...]: ...


@dataclass(frozen=True, eq=False)
class View:
    """What one frame saw: N rays.

    `t_ns` mid-exposure of the middle row (event clock); `ids` (N,) of tracks; `uv` (N, 2) raw colour px; `dt_s` (N,)
    own time less t_ns; `rays` (N, 3) unit; `whitening` (N, 2, 3) W of the module docstring; `rays_at_frame` (N, 3)
    unit, where the track was at t_ns.
    """

    index: int
    t_ns: int
    ids: Array
    uv: Array
    dt_s: Array
    rays: Array
    whitening: Array
    rays_at_frame: Array

    def __len__(self) -> int:
        return len(self.ids)

    def select(self, rows: Array) -> "View":
        """The view with only some of its rays; `rows` as indices or mask."""
        return View(self.index, self.t_ns, *(column[rows] for column in self.columns))

    @property
    def columns(self) -> tuple[Array, ...]:
        """All per-ray columns, in the order of the constructor."""
        return self.ids, self.uv, self.dt_s, self.rays, self.whitening, self.rays_at_frame

    def at_frame_time(self) -> "View":
        """The view as it would be with one time for all rays: those of the tracks themselves, interpolated."""
        rays = self.rays_at_frame
        across = np.eye(3) - rays[:, :, None] * rays[:, None, :]
        whitening = np.ascontiguousarray(self.whitening @ across)
        return View(self.index, self.t_ns, self.ids, self.uv, np.zeros(len(self)), rays, whitening, rays)

    @property
    def ray_sigma_rad(self) -> float:
        """Median standard deviation of a ray's direction, in one axis."""
        if not len(self):
            return float("nan")
        return float(np.median(1.0 / np.sqrt(0.5 * np.sum(self.whitening**2, axis=(1, 2)))))


@dataclass(frozen=True)
class FrameTimes:
    """`t_ns` int64 (K,) mid-exposure of each frame's middle row, event clock, which lies at `middle_v` colour px; rows
    further down are exposed later by `s_per_px` a colour px (negative bottom up, zero under a global shutter)."""

    t_ns: Array
    middle_v: float = 0.0
    s_per_px: float = 0.0

    @property
    def interval_s(self) -> float:
        """Median time between frames."""
        return float(np.median(np.diff(self.t_ns))) * NS if len(self.t_ns) > 1 else float("inf")

    def row_dt_s(self, v: Array) -> Array:
        """Mid-exposure of positions v (...) in colour px, less that of the middle row."""
        return (np.asarray(v) - self.middle_v) * self.s_per_px


def frame_times(frames: FrameTable, module: HybridModule) -> FrameTimes:
    """Times of all frames. Raises NotCalibratedError where the module's clocks are not known."""
    timing, mode = module.known_timing(), module.frame_mode
    rolling = mode.shutter == "rolling"
    middle_row = 0.5 * (mode.height - 1)
    start = timing.exposure_start_ns(frames.t_start_ns, np.array(middle_row if rolling else 0.0))
    t_ns = np.round(start + 0.5 * timing.true_exposure_ns(frames.exposure_ns)).astype(np.int64)
    s_per_px = mode.row_order * (timing.line_time_ns or 0.0) * NS / mode.binning if rolling else 0.0
    return FrameTimes(t_ns, float(mode.colour_from_frame(np.array([0.0, middle_row]))[1]), s_per_px)


def whitening_of(lens: Lens, rays: Array, covariance_px: Array, floor_px: float) -> Array:
    """W (N, 2, 3) of rays (N, 3) whose pixels have covariance (N, 3) as uu, uv, vv, and `floor_px` beside it."""
    _, by_direction, _ = lens.project_with_jacobians(rays)
    matrix = np.empty((len(rays), 2, 2))
    matrix[:, 0, 0] = covariance_px[:, 0] + floor_px**2
    matrix[:, 0, 1] = matrix[:, 1, 0] = covariance_px[:, 1]
    matrix[:, 1, 1] = covariance_px[:, 2] + floor_px**2
    return np.linalg.inv(np.linalg.cholesky(matrix)) @ by_direction


def view_of(index: int, t_ns: int, samples: dict[str, Array], lens: Lens, floor_px: float) -> View:
    """A view from `ids` (N,), `uv`, `uv_at_frame` (N, 2), `dt_s` (N,), `covariance` (N, 3).

    Samples whose position or covariance is not finite, or which the lens does not reach, are left out.
    """
    rays = lens.unproject(samples["uv"], allow_outside=True)
    at_frame = lens.unproject(samples["uv_at_frame"], allow_outside=True)
    at_frame = np.where(np.isfinite(at_frame).all(axis=1, keepdims=True), at_frame, rays)
    covariance = samples["covariance"].astype(float)
    good = np.isfinite(rays).all(axis=1) & np.isfinite(covariance).all(axis=1)
    good &= (covariance[:, 0] >= 0) & (covariance[:, 0] * covariance[:, 2] >= covariance[:, 1] ** 2 * (1 - 1e-3))
    rays = rays[good]
    return View(
        index,
        int(t_ns),
        samples["ids"][good],
        samples["uv"][good],
        samples["dt_s"][good],
        rays,
        whitening_of(lens, rays, covariance[good], floor_px),
        at_frame[good],
    )


def _usable(tracks: TrackTable) -> Array:
    """Indices of samples that are in the picture and not lost, sorted by track, then time."""
    gone = [i for i, name in enumerate(tracks.states) if name in GONE]
    usable = ~np.isin(tracks.state, gone) & np.isfinite(tracks.uv).all(axis=1)
    chosen = np.flatnonzero(usable)
    return chosen[np.lexsort((tracks.t_ns[chosen], tracks.id[chosen]))]


def _nearest(sorted_values: Array, at: Array) -> Array:
    """Index (M,) of the value in a sorted array (S,) nearest to each of `at` (M,)."""
    right = np.minimum(np.searchsorted(sorted_values, at), len(sorted_values) - 1)
    left = np.maximum(right - 1, 0)
    return np.where(at - sorted_values[left] <= sorted_values[right] - at, left, right)


def _samples_of_frames(ids: Array, t_s: Array, v: Array, from_frame: Array, times: FrameTimes, frame_s: Array) -> Array:
    """Pairs (M, 2) of frame and sample: for every track and frame the sample taken for it, sorted by frame, then track.

    A sample belongs to the frame that reads its row nearest to its own time, if within 2 ms and a quarter of the frame
    interval; one that comes from a frame goes before one from events alone.
    """
    read_s = t_s - times.row_dt_s(v)
    frame = _nearest(frame_s, read_s)
    gap = np.abs(read_s - frame_s[frame])
    near = np.flatnonzero(gap <= min(2e-3, 0.25 * times.interval_s))
    order = near[np.lexsort((gap[near], ~from_frame[near], ids[near], frame[near]))]
    same = (np.diff(frame[order], prepend=-1) == 0) & (np.diff(ids[order], prepend=-1) == 0)
    chosen = order[~same]
    return np.stack([frame[chosen], chosen], axis=1)


def _interpolated(t_s: Array, uv: Array, at_s: Array) -> Array:
    """Positions (M, 2) of one track (S,), (S, 2) at times (M,), extended by its end slopes."""
    if len(t_s) < 2:
        return np.repeat(uv[:1], len(at_s), axis=0)
    left = np.clip(np.searchsorted(t_s, at_s) - 1, 0, len(t_s) - 2)
    span = np.maximum(t_s[left + 1] - t_s[left], 1e-9)
    share = np.clip((at_s - t_s[left]) / span, -1.0, 2.0)[:, None]
    return uv[left] * (1.0 - share) + uv[left + 1] * share


def _at_frames(ids: Array, t_s: Array, uv: Array, samples: Array, at_s: Array) -> Array:
    """Where the tracks of the given samples (M,) were at times (M,): the tracks themselves, interpolated (M, 2)."""
    moved = np.empty((len(samples), 2))
    starts = np.flatnonzero(np.r_[True, np.diff(ids) != 0])
    track = np.searchsorted(starts, samples, side="right") - 1
    order = np.argsort(track, kind="stable")
    bounds = np.searchsorted(track[order], np.arange(len(starts) + 1))
    stops = np.r_[starts[1:], len(ids)]
    for number, (start, stop) in enumerate(zip(starts, stops, strict=True)):
        rows = order[bounds[number] : bounds[number + 1]]
        moved[rows] = _interpolated(t_s[start:stop], uv[start:stop], at_s[rows])
    return moved


def gather_views(tracks: TrackTable, times: FrameTimes, lens: Lens, floor_px: float) -> list[View]:
    """One view for every frame, empty where no track was seen.

    Raises DegenerateDataError where the tracks hold no sample near any frame.
    """
    order = _usable(tracks)
    epoch = int(times.t_ns[0]) if len(times.t_ns) else 0
    t_s, uv, ids = (tracks.t_ns[order] - epoch) * NS, tracks.uv[order], tracks.id[order]
    frame_s = (times.t_ns - epoch) * NS
    wanted = [i for i, name in enumerate(tracks.sources) if name in FRAME_SOURCES]
    from_frame = np.isin(tracks.source[order], wanted)
    pairs = np.empty((0, 2), np.int64)
    if len(order) and len(frame_s):
        pairs = _samples_of_frames(ids, t_s, uv[:, 1], from_frame, times, frame_s)
    if not len(pairs):
        raise DegenerateDataError("tracks: expected samples within the readout of some frame, got none")
    frame, sample = pairs.T
    at_frame = _at_frames(ids, t_s, uv, sample, frame_s[frame])
    bounds = np.searchsorted(frame, np.arange(len(frame_s) + 1))
    views = []
    for index, t_ns in enumerate(times.t_ns):
        here = slice(bounds[index], bounds[index + 1])
        rows = sample[here]
        table = {
            "ids": ids[rows],
            "uv": uv[rows],
            "uv_at_frame": at_frame[here],
            "dt_s": t_s[rows] - frame_s[index],
            "covariance": tracks.cov[order[rows]],
        }
        views.append(view_of(index, int(t_ns), table, lens, floor_px))
    return views
