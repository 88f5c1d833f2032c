"""How a keyframe's picture looks: scale-invariant descriptors (Lowe 2004; square-rooted, Arandjelovic and Zisserman
2012), by which a place is known again when its tracks are long gone.
"""

from collections.abc import Callable
from dataclasses import dataclass

import cv2
import numpy as np

from hybridtrack.geometry import Lens
from hybridtrack.module import HybridModule
from hybridtrack.odometry.observations import FrameTimes, View, view_of
from hybridtrack.odometry.pictures import grey_picture
from hybridtrack.odometry.sparse_map import Keyframe, SparseMap
from hybridtrack.odometry.triangulation import Sightings, triangulate

Array = np.ndarray

RATIO = 0.85
SIGMA_PER_SIZE = 0.15  # localisation error of a blob in its own diameter; common practice, no source
LANDMARK_PARALLAX_DEG = 1.5
FLOW_FROM_S = 5e-4  # shorter times tell noise from motion badly
FLOW_TRACKS = 5
EVERY = 2  # keyframes of even number are places: half of them show all there is to see
NEIGHBOURS = (2, -2, 4, -4)


@dataclass(frozen=True, eq=False)
class Place:
    """Features of one picture, the strongest first: `view` with rays as of tracks (ids are row numbers), `descriptors`
    float32 (N, D) of unit length."""

    view: View
    descriptors: Array


Look = Callable[[int], Place | None]


def unit_roots(descriptors: Array) -> Array:
    """Square roots of descriptors (N, D) normed to sum one, so that their dot product is a similarity of at most
    one."""
    total = np.maximum(descriptors.sum(axis=1, keepdims=True), 1e-12)
    return np.sqrt(np.maximum(descriptors, 0.0) / total).astype(np.float32)


def picture_flow(view: View, lens: Lens) -> Array:
    """Median motion (2,) of a view's tracks in px/s, from where they were at their own times and at the frame's."""
    moving = np.abs(view.dt_s) > FLOW_FROM_S
    if np.count_nonzero(moving) < FLOW_TRACKS:
        return np.zeros(2)
    flow = (view.uv[moving] - lens.project(view.rays_at_frame[moving])) / view.dt_s[moving, None]
    return np.asarray(np.nanmedian(flow, axis=0))


def describe(image: Array, view: View, times: FrameTimes, module: HybridModule, count: int) -> Place | None:
    """Features of a frame's picture at the time of its `view`; None where the picture shows none."""
    mode, lens = module.frame_mode, module.lens_model()
    detector = cv2.SIFT.create(nfeatures=count, contrastThreshold=0.02)
    points, descriptors = detector.detectAndCompute(grey_picture(image, mode), None)
    if descriptors is None or not len(points):
        return None
    strongest = np.argsort([-point.response for point in points], kind="stable")
    points, descriptors = [points[i] for i in strongest], descriptors[strongest]
    position = np.array([point.pt for point in points], dtype=float)
    # A feature spans many pixels: where clear sites are left out, the mean shift of the light applies.
    grid = np.stack(np.meshgrid(np.arange(mode.width), np.arange(mode.height)), axis=-1)
    shift = (module.frame_pixel_centres() - mode.colour_from_frame(grid)).mean(axis=(0, 1))
    uv = mode.colour_from_frame(position) + shift
    dt_s = times.row_dt_s(uv[:, 1])
    sigma = np.maximum(SIGMA_PER_SIZE * np.array([point.size for point in points]), 0.4) * mode.binning
    samples = {
        "ids": np.arange(len(uv)),
        "uv": uv,
        "uv_at_frame": uv - dt_s[:, None] * picture_flow(view, lens),
        "dt_s": dt_s,
        "covariance": np.stack([sigma**2, np.zeros(len(uv)), sigma**2], axis=1),
    }
    seen = view_of(view.index, view.t_ns, samples, lens, 0.1)
    return Place(seen, unit_roots(descriptors[seen.ids]))


def matches(a: Place, b: Place, strongest: int | None = None) -> tuple[Array, Array]:
    """Rows (M,) of a and b that are each other's best match, and clearly better than the second best (Lowe 2004).

    `strongest`: compare only so many of each, for a quick look.
    """
    if len(a.descriptors) < 2 or len(b.descriptors) < 2:
        return np.empty(0, np.int64), np.empty(0, np.int64)
    similarity = a.descriptors[:strongest] @ b.descriptors[:strongest].T
    best_b = np.argmax(similarity, axis=1)
    rows = np.arange(len(similarity))
    mutual = np.argmax(similarity, axis=0)[best_b] == rows
    best = similarity[rows, best_b]
    similarity[rows, best_b] = -1.0
    second = similarity.max(axis=1)
    # Distance of unit vectors: d^2 = 2 (1 - similarity).
    clear = 1.0 - best < RATIO**2 * (1.0 - second)
    chosen = np.flatnonzero(mutual & clear)
    return chosen, best_b[chosen]


class PlaceBook:
    """Places of keyframes, looked at once each."""

    def __init__(self, world: SparseMap, look: Look) -> None:
        self._world, self._look = world, look
        self._places: dict[int, Place | None] = {}
        self._matches: dict[tuple[int, int], tuple[Array, Array]] = {}

    def of(self, keyframe: Keyframe) -> Place | None:
        """Features of a keyframe, None where its picture shows none."""
        if keyframe.id not in self._places:
            self._places[keyframe.id] = self._look(keyframe.view.index)
        return self._places[keyframe.id]

    def matches(self, a: Keyframe, b: Keyframe) -> tuple[Array, Array]:
        """Matching rows (M,) of two keyframes' places, found once a pair; none where one of them shows nothing."""
        if (a.id, b.id) not in self._matches:
            place_a, place_b = self.of(a), self.of(b)
            none = np.empty(0, np.int64)
            found = (none, none) if place_a is None or place_b is None else matches(place_a, place_b)
            self._matches[a.id, b.id] = found
        return self._matches[a.id, b.id]

    def look(self, frame: int) -> Place | None:
        """Features of any frame; not kept."""
        return self._look(frame)

    def neighbours(self, keyframe: Keyframe) -> list[Keyframe]:
        """Places beside this one in the same segment."""
        numbers = [keyframe.id + step for step in NEIGHBOURS]
        found = [self._world.keyframes[i] for i in numbers if 0 <= i < len(self._world.keyframes)]
        return [other for other in found if other.segment == keyframe.segment]

    def landmarks(self, keyframe: Keyframe) -> Array:
        """World positions (N, 3) of a keyframe's features, by matching with its neighbours; NaN where there is none."""
        place = self.of(keyframe)
        if place is None:
            return np.empty((0, 3))
        found = np.full((len(place.view), 3), np.nan)
        for other in self.neighbours(keyframe):
            rows, rows_beside = self.matches(keyframe, other)
            beside = self.of(other)
            if beside is None:
                continue
            new = np.isnan(found[rows, 0])
            rows, rows_beside = rows[new], rows_beside[new]
            if len(rows):
                found[rows] = _met(keyframe, place.view.select(rows), other, beside.view.select(rows_beside))
        return found


def _met(a: Keyframe, view_a: View, b: Keyframe, view_b: View) -> Array:
    """Positions (M, 3) where the rays of two keyframes' features meet, NaN where they do not."""
    count = len(view_a)
    poses = np.stack([a.poses_at(view_a.dt_s), b.poses_at(view_b.dt_s)], axis=1).reshape(-1, 4, 4)
    sightings = Sightings(
        np.repeat(np.arange(count), 2),
        poses[:, :3, 3],
        poses[:, :3, :3],
        np.stack([view_a.rays, view_b.rays], axis=1).reshape(-1, 3),
        np.stack([view_a.whitening, view_b.whitening], axis=1).reshape(-1, 2, 3),
    )
    result = triangulate(sightings, np.deg2rad(LANDMARK_PARALLAX_DEG), 4.0)
    return np.where(result.accepted[:, None], result.positions, np.nan)
