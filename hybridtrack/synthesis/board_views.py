"""Where the camera stands before the board: a set of views, hand sway in them, and the ways between.

World axes are the board's. Poses are `world_from_camera`.
"""

from dataclasses import dataclass
from typing import Literal

import numpy as np
from pydantic import Field, model_validator

from hybridtrack.errors import OptionError
from hybridtrack.geometry import FisheyeLens, Lens, se3, so3
from hybridtrack.module import Target
from hybridtrack.synthesis.recipe_parts import Strict

Array = np.ndarray
GOLDEN_ANGLE = np.pi * (3.0 - np.sqrt(5.0))
# Where the board stands in the picture, view by view: -1 left or top, 0 middle, 1 right or bottom.
ANCHORS = ((0, 0), (-1, -1), (1, -1), (-1, 1), (1, 1), (0, 0), (-1, 0), (1, 0), (0, -1), (0, 1))
MARGIN_PX = 6.0
OUTLINE_POINTS = 9
STEP_NS = 1e6


class ViewRecipe(Strict):
    """`fill` is the range of the board's extent as a part of the picture's, whichever direction is fuller. A `partial`
    share of the views hangs over the picture's edge. `sway_event_px` is the peak of hand sway in event pixels.

    Between views: a `gap` in the recording of `between_s`, a `cut` in no time, or a `move` of `between_s`.
    """

    count: int = Field(default=12, ge=1)
    dwell_s: float = Field(default=0.5, gt=0)
    tilt_max_deg: float = Field(default=35.0, ge=0, lt=75)
    roll_max_deg: float = Field(default=25.0, ge=0, le=180)
    fill: tuple[float, float] = (0.7, 0.98)
    partial: float = Field(default=0.0, ge=0, le=1)
    sway_event_px: float = Field(default=0.0, ge=0, le=20)
    between: Literal["gap", "cut", "move"] = "gap"
    between_s: float = Field(default=0.25, ge=0)

    @model_validator(mode="after")
    def _consistent(self) -> "ViewRecipe":
        if not 0.1 <= self.fill[0] <= self.fill[1] <= 1.0:
            raise ValueError("fill must be two rising numbers in 0.1..1")
        if self.between == "move" and self.between_s <= 0:
            raise ValueError("between_s must be positive for a move")
        return self


def board_outline_m(target: Target, square_m: tuple[float, float]) -> Array:
    """Points (N, 3) round the board's edge."""
    s = np.linspace(0.0, 1.0, OUTLINE_POINTS)
    zero, one = np.zeros_like(s), np.ones_like(s)
    unit = np.concatenate([np.stack(pair, axis=1) for pair in ((s, zero), (one, s), (s, one), (zero, s))])
    size = np.array([target.columns * square_m[0], target.rows * square_m[1]])
    return np.concatenate([unit * size, np.zeros((len(unit), 1))], axis=1)


@dataclass(frozen=True)
class Framing:
    """What a view is asked to look like: size of the picture, where the board stands in it, its extent (a part of the
    picture's), and the part of it that hangs over the edge."""

    size_px: tuple[int, int]
    anchor: tuple[int, int]
    fill: float
    over: float


def bounds(lens: Lens, points: Array) -> tuple[Array, Array] | None:
    """Lowest and highest (u, v) of camera points (N, 3), or None where one can't be seen."""
    uv = lens.project(points)
    if not np.all(np.isfinite(uv)):
        return None
    return uv.min(axis=0), uv.max(axis=0)


def stand(lens: Lens, outline: Array, centre: Array, rotation: Array, framing: Framing) -> Array:
    """The pose with `rotation` (3, 3) from which the board fills the picture as asked. Raises OptionError."""
    size = np.array(framing.size_px, float)
    focal = np.array([lens.fx, lens.fy])
    local = (outline - centre) @ rotation
    span = np.ptp(local[:, :2], axis=0).max()
    ahead = rotation.T @ [0.0, 0.0, 1.0] if isinstance(lens, FisheyeLens) else np.array([0.0, 0.0, 1.0])
    place = ahead * lens.fx * span / (framing.fill * size.min())
    retreat = 1.0
    for turn in range(120):
        box = bounds(lens, local + place)
        if box is None:
            place = place * np.array([0.7, 0.7, 1.15])
            continue
        low, high = box
        extent = high - low
        slack = np.maximum(size / 2 - MARGIN_PX - extent / 2, 0.0) + framing.over * extent
        wanted = (size - 1) / 2 + np.array(framing.anchor) * slack
        zoom = np.max(extent / size) / framing.fill * retreat
        miss = wanted - (low + high) / 2
        inside = framing.over > 0 or (low.min() >= 0 and np.all(high <= size - 1))
        if turn > 20 and inside and np.max(np.abs(miss)) < 0.02 * size.max():
            return se3.compose(rotation, centre - rotation @ place)
        if turn > 20 and turn % 5 == 0 and not inside:
            retreat *= 1.05
        place[:2] = place[:2] * np.sqrt(zoom) + 0.6 * miss * place[2] / focal
        place[2] *= np.sqrt(zoom)
    raise OptionError(f"fill {framing.fill:.2f} with this tilt and lens leaves the board no place in the picture")


def look_at(direction: Array) -> Array:
    """The smallest rotation (3, 3) that turns the optical axis to `direction` (3,)."""
    axis = np.cross([0.0, 0.0, 1.0], direction)
    sine = float(np.linalg.norm(axis))
    return np.eye(3) if sine < 1e-12 else so3.exp(axis / sine * np.arctan2(sine, direction[2]))


def choose_views(
    recipe: ViewRecipe, outline: Array, lens: Lens, size_px: tuple[int, int], random: np.random.Generator
) -> Array:
    """Poses (V, 4, 4): tilts about directions spread round, rolls, distances, and places over the whole picture.

    Tilt is the angle between board and sensor; before a fisheye lens, between board and line of sight.
    """
    centre = 0.5 * (outline.min(axis=0) + outline.max(axis=0))
    start = random.uniform(0, 2 * np.pi)
    steps = random.permutation((np.arange(recipe.count) + 0.5) / recipe.count)
    fills = recipe.fill[0] + (recipe.fill[1] - recipe.fill[0]) * steps
    partial = random.permutation(recipe.count) < round(recipe.partial * recipe.count)
    poses = []
    for view in range(recipe.count):
        azimuth = start + GOLDEN_ANGLE * view
        tilt = np.radians(recipe.tilt_max_deg) * (0.15 if view == 0 else random.uniform(0.4, 1.0))
        roll = np.radians(recipe.roll_max_deg) * random.uniform(-1, 1)
        over = random.uniform(0.15, 0.3) if partial[view] else 0.0
        anchor = ANCHORS[view % len(ANCHORS)] if not (over and view % len(ANCHORS) in (0, 5)) else (1, 1)
        rotation = so3.exp(tilt * np.array([np.cos(azimuth), np.sin(azimuth), 0.0])) @ so3.exp([0.0, 0.0, roll])
        if isinstance(lens, FisheyeLens):
            place = (np.array(size_px) - 1) / 2 + 0.25 * np.array(anchor) * size_px
            rotation = rotation @ look_at(lens.unproject(place)).T
        poses.append(stand(lens, outline, centre, rotation, Framing(size_px, anchor, fills[view], over)))
    return np.stack(poses)


@dataclass(frozen=True)
class Segment:
    """A part of the recording without a gap inside: a view, or the way from view `view` to the next."""

    view: int
    is_move: bool
    t0_ns: float
    t1_ns: float


def timeline(recipe: ViewRecipe) -> list[Segment]:
    """Views and moves in order of time, from zero."""
    segments: list[Segment] = []
    now = 0.0
    for view in range(recipe.count):
        segments.append(Segment(view, False, now, now + 1e9 * recipe.dwell_s))
        now = segments[-1].t1_ns
        if recipe.between == "move" and view + 1 < recipe.count:
            segments.append(Segment(view, True, now, now + 1e9 * recipe.between_s))
            now = segments[-1].t1_ns
        elif recipe.between == "gap":
            now += 1e9 * recipe.between_s
    return segments


class BoardMotion:
    """The camera's pose at any time. A move is a smooth blend (minimum jerk); sway is a sum of slow sines."""

    def __init__(
        self, recipe: ViewRecipe, views: Array, focal_px: float, event_px: float, random: np.random.Generator
    ) -> None:
        """`views` (V, 4, 4); `event_px` colour px of one event pixel."""
        self.recipe, self.views, self.segments = recipe, views, timeline(recipe)
        self._starts = np.array([segment.t0_ns for segment in self.segments])
        self._rate = 2 * np.pi * random.uniform(0.5, 2.2, (6, 3)) * 1e-9
        self._phase = random.uniform(0, 2 * np.pi, (6, 3))
        angle = recipe.sway_event_px * event_px / focal_px
        depth = np.linalg.norm(views[:, :3, 3], axis=1).mean()
        self._sway = np.array([0.4 * depth, 0.4 * depth, 0.2 * depth, 0.6, 0.6, 0.5])[:, None] * angle / 3.0

    @property
    def is_still(self) -> bool:
        """Whether the camera keeps quite still in a view."""
        return self.recipe.sway_event_px == 0

    def segment_at(self, t_ns: Array) -> Array:
        """Index of the segment (...,) that each time falls into or after."""
        return np.clip(np.searchsorted(self._starts, t_ns, side="right") - 1, 0, len(self.segments) - 1)

    def poses(self, t_ns: Array) -> Array:
        """`world_from_camera` (K, 4, 4) at times (K,)."""
        t = np.atleast_1d(np.asarray(t_ns, float))
        result = np.empty((len(t), 4, 4))
        which = self.segment_at(t)
        for index in np.unique(which):
            segment, here = self.segments[index], which == index
            pose = self.views[segment.view]
            if not segment.is_move:
                result[here] = pose
                continue
            s = np.clip((t[here] - segment.t0_ns) / (segment.t1_ns - segment.t0_ns), 0.0, 1.0)
            blend = s**3 * (10.0 + s * (6.0 * s - 15.0))  # Flash and Hogan 1985
            way = se3.log(se3.inverse(pose) @ self.views[segment.view + 1])
            result[here] = pose @ se3.exp(blend[:, None] * way)
        if self.is_still:
            return result
        sway = np.sum(self._sway * np.sin(self._rate * t[:, None, None] + self._phase), axis=2)
        return result @ se3.exp(sway)
