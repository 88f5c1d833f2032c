"""A world of points seen along a trolley's path: tracks with known truth, made without rendering a picture."""

from collections.abc import Callable
from dataclasses import dataclass, field

import numpy as np
import pytest

from hybridtrack.geometry import FisheyeLens, PerspectiveLens, se3
from hybridtrack.odometry.observations import FrameTimes, View, gather_views, view_of
from hybridtrack.odometry.places import Place, unit_roots
from hybridtrack.tracking.tracks_file import Tracks

Array = np.ndarray

WIDTH, HEIGHT = 1280, 800
LENS = PerspectiveLens(900.0, 905.0, 645.0, 395.0, (-0.12, 0.04, 0.0), (0.0005, -0.0004))
LOOK_DOWN = np.array([[1.0, 0.0, 0.0], [0.0, -1.0, 0.0], [0.0, 0.0, -1.0]])


@dataclass(frozen=True)
class WorldOptions:
    """How the world and the tracks in it are made; the defaults are a lap of a small greenhouse."""

    seed: int = 1
    path: str = "lap"  # lap, turn (pure rotation), line, still
    frames: int = 180
    rate_hz: float = 60.0
    radius_m: float = 0.45
    laps: float = 1.0
    height_m: float = 1.2
    relief_m: float = 0.5
    planar: bool = False
    points: int = 700
    noise_px: float = 0.0
    claimed_px: float = 0.3
    drifting_share: float = 0.0
    drift_px_s: float = 60.0
    deaths_per_s: float = 0.3
    row_time_s: float = 9e-6
    blackout: tuple[int, int] = (0, 0)
    twins: bool = False  # every place looks like the place half a lap on
    lens: PerspectiveLens | FisheyeLens = field(default_factory=lambda: LENS)


def pose_at(t_s: Array, options: WorldOptions) -> Array:
    """True world_from_camera (N, 4, 4): `laps` laps in the whole span, with sway on the cable."""
    span = options.frames / options.rate_hz
    phase = 2.0 * np.pi * options.laps * t_s / span
    lapping = options.path == "lap"
    x = options.radius_m * (np.cos(phase) if lapping else 2.0 * phase / np.pi)
    y = options.radius_m * np.sin(phase) if lapping else np.zeros_like(phase)
    sway = 0.03 * np.sin(2.0 * np.pi * 0.9 * t_s)
    rotation = np.stack([sway, 0.6 * sway + 0.05, 0.3 * np.sin(phase)], axis=-1)
    position = np.stack([x, y, options.height_m + 0.02 * np.sin(2.0 * phase)], axis=-1)
    if options.path in ("turn", "still"):
        position = np.tile([0.0, 0.0, options.height_m], (*position.shape[:-1], 1))
    if options.path == "turn":
        rotation = np.stack([0.3 * np.sin(phase), 0.3 * np.cos(phase), 0.5 * np.sin(phase)], axis=-1)
    if options.path == "still":
        rotation = np.zeros_like(rotation)
    turned = se3.exp(np.concatenate([np.zeros_like(rotation), rotation], axis=-1))
    return se3.compose(LOOK_DOWN @ turned[..., :3, :3], position)


class SyntheticLap:
    """Tracks of one world with everything that is true of them."""

    def __init__(self, options: WorldOptions) -> None:
        self.options, self.lens = options, options.lens
        self.rng = np.random.default_rng(options.seed)
        self.points = self._scattered()
        t_ns = (1_000_000_000 + np.arange(options.frames) * 1e9 / options.rate_hz).astype(np.int64)
        self.times = FrameTimes(t_ns, 0.5 * (HEIGHT - 1), options.row_time_s)
        self.t_s = (t_ns - t_ns[0]) * 1e-9
        self.world_from_camera = pose_at(self.t_s, options)
        self.uv, self.seen = self._projected()
        self.tracks, self.point_of_track = self._tracked()
        self.descriptors = self._look_of_points()

    def _scattered(self) -> Array:
        reach = self.options.radius_m * (1.0 if self.options.path == "lap" else 4.0) + 1.1
        points = self.rng.uniform(-1.0, 1.0, (self.options.points, 3)) * [reach, reach, 0.0]
        points[:, 0] += 0.0 if self.options.path == "lap" else reach - 1.1
        if not self.options.planar:
            points[:, 2] = self.rng.uniform(0.0, self.options.relief_m, len(points))
        return points

    def _row_dt(self, v: Array) -> Array:
        return (v - 0.5 * (HEIGHT - 1)) * self.options.row_time_s

    def _projected(self) -> tuple[Array, Array]:
        """True positions (K, P, 2) at each point's own row time, NaN where out of view."""
        uv = np.full((len(self.t_s), len(self.points), 2), np.nan)
        for k, pose in enumerate(self.world_from_camera):
            local = se3.transform(se3.inverse(pose), self.points)
            near = np.flatnonzero((local[:, 2] > 0.05) & (np.abs(local[:, :2]) < 1.2 * local[:, 2:]).all(axis=1))
            v = np.full(len(near), 0.5 * HEIGHT)
            now = np.full((len(near), 2), np.nan)
            for _ in range(6):
                camera = se3.inverse(pose_at(self.t_s[k] + self._row_dt(v), self.options))
                now = self.lens.project(se3.transform(camera, self.points[near, None, :])[:, 0])
                v = np.where(np.isfinite(now[:, 1]), np.clip(now[:, 1], 0, HEIGHT - 1), v)
            uv[k, near] = now
        inside = (uv >= 5.0) & (uv <= np.array([WIDTH, HEIGHT]) - 6.0)
        seen = inside.all(axis=2)
        return np.where(seen[..., None], uv, np.nan), seen

    def _tracked(self) -> tuple[Tracks, dict[int, int]]:
        options, rng = self.options, self.rng
        following = np.full(len(self.points), -1)
        drift = np.zeros((len(self.points), 2))
        born = np.zeros(len(self.points))
        lines, owner, count = [], {}, 0
        for k in range(len(self.t_s)):
            dark = options.blackout[0] <= k < options.blackout[1]
            dies = rng.random(len(self.points)) < options.deaths_per_s / options.rate_hz
            following[~self.seen[k] | dies | dark] = -1
            new = np.flatnonzero(self.seen[k] & (following < 0)) if not dark else np.empty(0, int)
            following[new] = count + np.arange(len(new))
            owner.update(zip(range(count, count + len(new)), new.tolist(), strict=True))
            count += len(new)
            drifts = rng.random(len(new)) < options.drifting_share
            angle = rng.uniform(0, 2 * np.pi, len(new))
            drift[new] = options.drift_px_s * drifts[:, None] * np.stack([np.cos(angle), np.sin(angle)], axis=1)
            born[new] = self.t_s[k]
            here = np.flatnonzero(following >= 0)
            noise = options.noise_px * rng.standard_normal((len(here), 2))
            uv = self.uv[k, here] + noise + drift[here] * (self.t_s[k] - born[here])[:, None]
            t_ns = self.times.t_ns[k] + np.round(self._row_dt(self.uv[k, here, 1]) * 1e9).astype(np.int64)
            lines.append((following[here].copy(), t_ns, uv))
        ids, t_ns, uv = (np.concatenate(parts) for parts in zip(*lines, strict=True))
        cov = np.tile(np.array([options.claimed_px**2, 0.0, options.claimed_px**2], np.float32), (len(ids), 1))
        flags = [np.zeros(len(ids), np.uint8) for _ in range(3)]
        return Tracks(ids, t_ns, uv, cov, *flags).in_order(), owner

    def _look_of_points(self) -> Array:
        looks = self.rng.gamma(0.5, 1.0, (len(self.points), 32))
        if self.options.twins:  # mirrored through the middle, the lap meets the same looks twice
            half = len(self.points) // 2
            self.points[half : 2 * half] = self.points[:half] * [-1.0, -1.0, 1.0]
            self.uv, self.seen = self._projected()
            self.tracks, self.point_of_track = self._tracked()
            looks[half : 2 * half] = looks[:half]
        return looks

    def views(self, floor_px: float = 0.01) -> list[View]:
        """What odometry takes in."""
        return gather_views(self.tracks, self.times, self.lens, floor_px)

    def points_of(self, view: View) -> Array:
        """True positions (N, 3) of what a view's rays look at."""
        return self.points[[self.point_of_track[track] for track in view.ids.tolist()]]

    def look(self, frame: int) -> Place | None:
        """Features of one frame: every point in view, its look and position a little off."""
        rng = np.random.default_rng((self.options.seed, frame))
        here = np.flatnonzero(self.seen[frame])
        if not len(here) or self.options.blackout[0] <= frame < self.options.blackout[1]:
            return None
        uv = self.uv[frame, here] + 0.5 * rng.standard_normal((len(here), 2))
        samples = {
            "ids": np.arange(len(here)),
            "uv": uv,
            "uv_at_frame": uv,
            "dt_s": self._row_dt(uv[:, 1]),
            "covariance": np.tile([0.25, 0.0, 0.25], (len(here), 1)),
        }
        view = view_of(frame, int(self.times.t_ns[frame]), samples, self.lens, 0.1)
        looks = self.descriptors[here] * np.exp(0.1 * rng.standard_normal((len(here), 32)))
        return Place(view, unit_roots(looks[view.ids]))


@pytest.fixture(scope="session")
def make_lap() -> Callable[..., SyntheticLap]:
    """Make a world, `make_lap(seed=3, noise_px=0.3)`; one with the same options is made once."""
    made: dict[WorldOptions, SyntheticLap] = {}

    def make(**changes: object) -> SyntheticLap:
        options = WorldOptions(**changes)  # type: ignore[arg-type]
        if options not in made:
            made[options] = SyntheticLap(options)
        return made[options]

    return make
