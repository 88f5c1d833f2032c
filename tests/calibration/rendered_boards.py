"""Sets of rendered views that several tests share; each is made once a session."""

from dataclasses import dataclass, replace
from functools import cache

import numpy as np
from board_renderer import Layout, Pixels, Scene, random_pose, render_view

from hybridtrack.calibration.bundle import ViewPoints, whitening
from hybridtrack.calibration.view_data import BoardCorners, LensFit, ViewImages
from hybridtrack.geometry import FisheyeLens, PerspectiveLens, se3, so3
from hybridtrack.module import Target

MARKERS = ((4, 2), (9, 3), (5, 7))
LENS = PerspectiveLens(380.0, 381.0, 241.0, 157.5, (-0.15, 0.04, 0.0), (4e-4, -3e-4))
SMALL = Layout(width=480, height=320, centroid=(0.2, -0.13), mirror=(True, False))


def board(kind: str = "shuttered_checker", steady: tuple = MARKERS, **changes) -> Target:
    """A 12x9 board of 30 mm squares."""
    values = {"columns": 12, "rows": 9, "square_m": 0.03, "blink_hz": 61.0, "steady_dark": list(steady)}
    return Target(kind=kind, **(values | changes))


@dataclass(frozen=True)
class RenderedSet:
    """Views with the scene, layout and poses they were rendered from."""

    views: list[ViewImages]
    scene: Scene
    layout: Layout
    poses: np.ndarray

    def true_fit(self) -> LensFit:
        """The truth in the form of a lens fit without uncertainty."""
        nothing = np.zeros((0, 2))
        numbers = np.arange(len(self.poses))
        return LensFit(self.scene.lens, numbers, self.poses, nothing, np.zeros(0), nothing, (), np.zeros((0, 0)), 1.0,
                       joint_covariance=np.zeros((6 * len(numbers), 6 * len(numbers))))  # fmt: skip

    def true_corners(self, view: int, ij: np.ndarray) -> np.ndarray:
        """Colour positions (N, 2) of corners `ij`."""
        board_m = self.scene.target.corners_m()[ij[:, 1] - 1, ij[:, 0] - 1]
        return self.scene.lens.project(se3.transform(self.poses[view], board_m))


def rendered(
    scene: Scene, layout: Layout, seed: int, count: int, tilt_deg: float = 30.0, fill: float = 0.7, offset: float = 0.12
) -> RenderedSet:
    """Render `count` views with poses, thresholds and noise drawn from `seed`."""
    rng = np.random.default_rng(seed)
    pixels = Pixels.draw(rng, scene, layout.event_positions().shape[:2])
    views, poses = [], []
    for k in range(count):
        pose = random_pose(rng, scene.lens, scene.target, rng.uniform(0.3, 1.0) * tilt_deg, fill, offset)
        views.append(render_view(rng, scene, layout, pixels, pose, k))
        poses.append(pose)
    return RenderedSet(views, scene, layout, np.array(poses))


@cache
def shuttered_set() -> RenderedSet:
    """Six views of a shuttered board with markers, mirrored in x, centroid off the integer."""
    return rendered(Scene(board(), LENS), SMALL, 1, 6)


@cache
def counterphase_set() -> RenderedSet:
    """Four views of a counterphase board without markers, mirrored in y, clear sites omitted from bins."""
    layout = replace(SMALL, mirror=(False, True), clear_in_frame="omitted", clear_site=(1, 2), centroid=(-0.1, 0.22))
    return rendered(Scene(board("counterphase_checker", ()), LENS), layout, 2, 4)


def as_boards(found: RenderedSet, rng: np.random.Generator, sigma_px: float) -> list[BoardCorners]:
    """True corners with noise, where they lie on the array."""
    out = []
    ij = np.stack(np.meshgrid(np.arange(1, 12), np.arange(1, 9)), axis=-1).reshape(-1, 2)
    for v in range(len(found.poses)):
        uv = found.true_corners(v, ij)
        on = np.all((uv > 2) & (uv < [found.layout.width - 3, found.layout.height - 3]), axis=1)
        noisy = uv[on] + rng.normal(size=(on.sum(), 2)) * sigma_px
        out.append(BoardCorners(v, ij[on], noisy, np.tile(max(sigma_px, 1e-6) ** 2 * np.eye(2), (on.sum(), 1, 1)),
                                np.full((on.sum(), 2), np.nan), True))  # fmt: skip
    return out


def corner_views(
    rng: np.random.Generator,
    lens: PerspectiveLens | FisheyeLens,
    count: int,
    sigma_px: float,
    tilt_deg: float = 35.0,
    spread: float = 0.3,
    size: tuple[int, int] = (1280, 800),
    nearest_m: float = 0.35,
) -> tuple[list[ViewPoints], np.ndarray]:
    """Corners of a 12x9 board in `count` views from `nearest_m` on, with noise of `sigma_px`, and the true poses."""
    points = board().corners_m().reshape(-1, 3)
    views, poses = [], []
    while len(views) < count:
        axis = rng.normal(size=2)
        axis *= np.radians(rng.uniform(0.3, 1.0) * tilt_deg) / np.linalg.norm(axis)
        R = so3.exp(np.array([*axis, 0.0])) @ so3.exp(np.array([0.0, 0.0, rng.uniform(-np.pi, np.pi)]))
        z = rng.uniform(nearest_m, 1.7 * nearest_m)
        centre = np.array([rng.uniform(-spread, spread) * z, rng.uniform(-spread, spread) * 0.6 * z, z])
        pose = se3.compose(R, centre - R @ np.array([0.18, 0.135, 0.0]))
        uv = lens.project(se3.transform(pose, points))
        with np.errstate(invalid="ignore"):
            on = np.all((uv > 4) & (uv < np.array(size) - 5), axis=1)
        if on.sum() < 40:
            continue
        noise = rng.normal(size=(on.sum(), 2)) * sigma_px
        covariance = np.tile(max(sigma_px, 1e-4) ** 2 * np.eye(2), (on.sum(), 1, 1))
        views.append(ViewPoints(points[on], uv[on] + noise, whitening(covariance)))
        poses.append(pose)
    return views, np.array(poses)
