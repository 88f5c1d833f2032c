"""A ride whose truth is known: common seed points, where they truly go, and the 1 kHz oracle."""

from dataclasses import dataclass
from pathlib import Path

import cv2
import numpy as np
from scipy.interpolate import CubicSpline

from hybridtrack.benchmark.baseline import flow_step
from hybridtrack.benchmark.metrics import SURVIVAL_STEP_NS, TruePaths
from hybridtrack.module import HybridModule
from hybridtrack.recording import Recording
from hybridtrack.synthesis.greenhouse import GreenhouseRecipe, build_world
from hybridtrack.synthesis.picture import points_seen, sharp_picture, visible_points
from hybridtrack.synthesis.view import View
from hybridtrack.tracking import Points
from hybridtrack.tracking.light_levels import frame_clock

Array = np.ndarray

SEEDS = 150
CORNER_QUALITY, APART_PX, BORDER_PX = 0.01, 12, 20
PATH_STEP_NS = 1_000_000
ORACLE_STEP_NS = 1_000_000


@dataclass(frozen=True, eq=False)
class Ride:
    """A recording of one seed and speed with its true `module`, `view`, common seed `points`, true `paths` every 10 ms,
    the seeds' places `sharp_uv` (S, 2) at `sharp_ns`, dense true positions `dense_uv` (T, S, 2) at `dense_ns` (T,), and
    the median image speed of the seeds."""

    recording: Path
    module: HybridModule
    view: View
    points: Points
    paths: TruePaths
    sharp_ns: float
    sharp_uv: Array
    dense_ns: Array
    dense_uv: Array
    speed_px_s: float

    def true_uv(self, ids: Array, t_ns: Array) -> Array:
        """True positions (N, 2) of seeds by id at times (N,), NaN where not visible about then."""
        out = np.full((len(ids), 2), np.nan)
        for seed in np.unique(ids):
            rows = np.flatnonzero(ids == seed)
            path = self.dense_uv[:, seed]
            known = np.isfinite(path).all(axis=1)
            if np.count_nonzero(known) < 4:
                continue
            spline = CubicSpline(self.dense_ns[known] - self.sharp_ns, path[known], extrapolate=False)
            out[rows] = spline(t_ns[rows] - self.sharp_ns)
        return out


def seed_corners(picture: Array, white_dn: float) -> Array:
    """Corners (S, 2) of a sharp picture in frame px (Shi and Tomasi 1994), away from the border."""
    grey = np.clip(picture * (255.0 / white_dn), 0, 255).astype(np.uint8)
    mask = np.zeros_like(grey)
    mask[BORDER_PX:-BORDER_PX, BORDER_PX:-BORDER_PX] = 1
    found = cv2.goodFeaturesToTrack(grey, SEEDS, CORNER_QUALITY, APART_PX, mask=mask)
    return np.empty((0, 2)) if found is None else found.reshape(-1, 2).astype(float)


def make_ride(recipe: GreenhouseRecipe, seed: int, recording: Path) -> Ride:
    """Seeds and truth of a recording that was made from `recipe` and `seed`.

    Corners are those of the sharp picture in the middle of the first frame; each is given at the middle of its own
    row's exposure in that frame, where it then is.
    """
    world = build_world(recipe, seed)
    module, mode = world.module_true, world.module_true.frame_mode
    with Recording.open(recording) as opened:
        starts, exposures = opened.frames.t_start_ns, opened.frames.exposure_ns
    first = frame_clock(module, int(starts[0]), int(exposures[0]))
    last = frame_clock(module, int(starts[-1]), int(exposures[-1]))
    sharp_ns = float(np.mean(first.span_ns))
    corners = seed_corners(sharp_picture(world.view, sharp_ns), mode.white_dn)
    sharp_uv = mode.colour_from_frame(corners)
    lens = module.lens_model()
    points, _ = points_seen(world.scene, lens, world.trajectory, sharp_uv, np.full(len(sharp_uv), sharp_ns))
    dense_ns = np.arange(first.span_ns[0], last.span_ns[1] + PATH_STEP_NS, PATH_STEP_NS)
    dense, _ = visible_points(world.scene, module, world.trajectory, points, dense_ns)
    every = np.arange(first.span_ns[1], last.span_ns[0], SURVIVAL_STEP_NS)
    uv, visible = visible_points(world.scene, module, world.trajectory, points, every)
    step = np.linalg.norm(np.diff(dense, axis=0), axis=2) / (PATH_STEP_NS * 1e-9)
    ride = Ride(
        recording, module, world.view, Points(np.arange(len(corners)), np.zeros(len(corners), np.int64), sharp_uv),
        TruePaths(np.arange(len(corners)), every, uv, visible), sharp_ns, sharp_uv, dense_ns, dense,
        float(np.nanmedian(step)),
    )  # fmt: skip
    rows_ns = first.middle_ns(corners[:, 1])
    at_rows = ride.true_uv(np.arange(len(corners)), rows_ns)
    good = np.isfinite(at_rows).all(axis=1)
    given = Points(np.flatnonzero(good), rows_ns[good], at_rows[good])
    visible = visible & good
    return Ride(
        recording, module, world.view, given, TruePaths(ride.paths.ids, every, uv, visible), sharp_ns, sharp_uv,
        dense_ns, dense, ride.speed_px_s,
    )  # fmt: skip


def track_oracle(ride: Ride) -> tuple[Array, Array]:
    """The seeds followed by pyramidal Lucas-Kanade on sharp, noise-free pictures at 1000 a second.

    Returns times (T,), positions (T, S, 2) in colour px, NaN once lost.
    """
    mode = ride.module.frame_mode
    times = np.arange(ride.sharp_ns, float(ride.paths.t_ns[-1]) + ORACLE_STEP_NS, ORACLE_STEP_NS)
    position, alive = mode.frame_from_colour(ride.sharp_uv), np.ones(len(ride.sharp_uv), bool)
    out = np.full((len(times), len(position), 2), np.nan)
    before: Array | None = None
    for k, t_ns in enumerate(times):
        picture = np.clip(np.rint(sharp_picture(ride.view, float(t_ns)) * (255.0 / mode.white_dn)), 0, 255)
        grey = picture.astype(np.uint8)
        if before is not None:
            held = np.flatnonzero(alive)
            position[held], good = flow_step(before, grey, position[held])
            alive[held] = good
        out[k, alive] = mode.colour_from_frame(position[alive])
        before = grey
    return times, out
