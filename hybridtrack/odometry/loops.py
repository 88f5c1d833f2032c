"""Places seen again: candidates by matching descriptors, a similarity by geometry, and reasons to refuse.

Candidates are earlier keyframes that share hardly a track with the newest: every one is compared by its strongest
features, the best few by all. The older keyframe's features have positions by its neighbours; the newest is
localised against them (random samples, then Gauss-Newton), and the ratio of distances on both sides gives the scale
between them (the similarity of Strasdat et al. 2010). A look-alike is refused when too few features agree, too small
a share of them, or a patch only.
"""

from dataclasses import dataclass

import cv2
import numpy as np

from hybridtrack.geometry import se3, sim3
from hybridtrack.odometry.localisation import PoseEstimate, refine_pose, search_pose
from hybridtrack.odometry.observations import NS, View
from hybridtrack.odometry.options import OdometryOptions
from hybridtrack.odometry.places import EVERY, Place, PlaceBook, matches
from hybridtrack.odometry.sparse_map import Keyframe, SparseMap

Array = np.ndarray

CANDIDATES = 4
STRONGEST = 200  # features of each keyframe that a first look compares
FIRST_LOOK_MATCHES = 6
SMALLEST_SHARE = 0.3
SMALLEST_COVER = 0.05  # of the area that the newest picture's features cover
COVARIANCE_GROWTH = 4.0  # for positions of the older features, which are taken as known
SCALE_SIGMA_UNKNOWN = 0.5
SMALLEST_SCALE_SIGMA = 0.005
SMALLEST_TURN_SIGMA_RAD = 1e-3
SMALLEST_SHIFT_SHARE = 2e-3  # of the median distance


@dataclass(frozen=True, eq=False)
class Loop:
    """Keyframe `to_id` saw the place of `from_id`: `from_from_to` (4, 4) on Sim(3) with covariance (7, 7), and the rows
    of both places that agree (I,)."""

    from_id: int
    to_id: int
    from_from_to: Array
    covariance: Array
    from_rows: Array
    to_rows: Array


@dataclass(frozen=True, eq=False)
class Sighting:
    """A view localised in the map by descriptors: the keyframe it looks like, its pose, and the rows that agree."""

    keyframe: Keyframe
    estimate: PoseEstimate
    keyframe_rows: Array
    rows: Array


def _cover(points: Array) -> float:
    """Area (px^2) of the convex hull of positions (N, 2)."""
    return float(cv2.contourArea(cv2.convexHull(points.astype(np.float32)))) if len(points) >= 3 else 0.0


def candidates(
    book: PlaceBook, place: Place, among: list[Keyframe], at_least: int
) -> list[tuple[Keyframe, Array, Array]]:
    """The keyframes that a place looks most like, with matching rows of both, the best first."""
    looked = []
    for keyframe in among:
        known = book.of(keyframe)
        if known is not None:
            count = len(matches(known, place, STRONGEST)[0])
            if count >= FIRST_LOOK_MATCHES:
                looked.append((count, keyframe, known))
    looked.sort(key=lambda entry: (-entry[0], entry[1].id))
    found = [(keyframe, *matches(known, place)) for _, keyframe, known in looked[:CANDIDATES]]
    return sorted((entry for entry in found if len(entry[1]) >= at_least), key=lambda entry: -len(entry[1]))


def _localised(view: View, landmarks: Array, twist: Array | None, options: OdometryOptions) -> PoseEstimate | None:
    """Pose of a view without a guess: at first by rays at one time, then, where the twist (6,) is known, at their
    own."""
    found = search_pose(view, landmarks, options)
    if found is None:
        return None
    estimate = refine_pose(view.at_frame_time(), landmarks, found, np.zeros(6), options.inlier_sigma)
    if estimate is None or twist is None:
        return estimate
    return refine_pose(view, landmarks, estimate.world_from_camera, twist, options.inlier_sigma)


def locate(
    book: PlaceBook, place: Place, twist: Array | None, among: list[Keyframe], options: OdometryOptions
) -> Sighting | None:
    """Localise a place, whose twist (6,) may be known, against keyframes; None where none agrees well enough with
    it."""
    wanted = options.loop_min_inliers
    for keyframe, rows, rows_here in candidates(book, place, among, wanted):
        landmarks = book.landmarks(keyframe)[rows]
        known = np.isfinite(landmarks[:, 0])
        rows, rows_here, landmarks = rows[known], rows_here[known], landmarks[known]
        if len(rows) < wanted:
            continue
        view = place.view.select(rows_here)
        estimate = _localised(view, landmarks, twist, options)
        if estimate is None or estimate.inlier_count < max(wanted, SMALLEST_SHARE * len(rows)):
            continue
        good = estimate.inliers
        if _cover(view.uv[good]) < SMALLEST_COVER * _cover(place.view.uv):
            continue
        return Sighting(keyframe, estimate, rows[good], rows_here[good])
    return None


def _scale(book: PlaceBook, newest: Keyframe, seen: Sighting) -> tuple[float, float]:
    """How much larger the older keyframe's unit makes the distances that the newest sees, and the log's deviation."""
    landmarks = book.landmarks(seen.keyframe)[seen.keyframe_rows]
    own = book.landmarks(newest)[seen.rows]
    both = np.isfinite(own[:, 0])
    if np.count_nonzero(both) < 8:
        return 1.0, SCALE_SIGMA_UNKNOWN
    older = np.linalg.norm(landmarks[both] - seen.estimate.world_from_camera[:3, 3], axis=1)
    newer = np.linalg.norm(own[both] - newest.world_from_camera[:3, 3], axis=1)
    ratio = np.log(older / newer)
    middle = float(np.median(ratio))
    spread = 1.4826 * float(np.median(np.abs(ratio - middle)))
    return float(np.exp(middle)), max(1.25 * spread / np.sqrt(np.count_nonzero(both)), SMALLEST_SCALE_SIGMA)


def _covariance(estimate: PoseEstimate, distance: float, scale: float, scale_sigma: float) -> Array:
    """(7, 7) of the right perturbation; its translation is in the newest keyframe's unit."""
    covariance = np.zeros((7, 7))
    covariance[:6, :6] = COVARIANCE_GROWTH * estimate.covariance
    covariance[:3] /= scale
    covariance[:, :3] /= scale
    floor = np.r_[np.full(3, SMALLEST_SHIFT_SHARE * distance / scale), np.full(3, SMALLEST_TURN_SIGMA_RAD), scale_sigma]
    return covariance + np.diag(floor**2)


def old_keyframes(world: SparseMap, newest: Keyframe, options: OdometryOptions) -> list[Keyframe]:
    """Places that could close a loop with the newest: of long ago, and with few tracks in common if any."""
    latest = newest.view.t_ns - options.loop_min_gap_s / NS
    edges = world.covisibility.adj[newest.id]
    near = {other for other in edges if edges[other]["shared"] >= options.loop_min_inliers}
    return [k for k in world.keyframes[: newest.id : EVERY] if k.view.t_ns <= latest and k.id not in near]


def find_loop(book: PlaceBook, world: SparseMap, newest: Keyframe, options: OdometryOptions) -> Loop | None:
    """The loop that the newest keyframe closes, or None."""
    place = book.of(newest)
    among = old_keyframes(world, newest, options)
    if place is None or not among:
        return None
    seen = locate(book, place, newest.twist, among, options)
    if seen is None:
        return None
    scale, scale_sigma = _scale(book, newest, seen)
    rigid = se3.inverse(seen.keyframe.world_from_camera) @ seen.estimate.world_from_camera
    landmarks = book.landmarks(seen.keyframe)[seen.keyframe_rows]
    distance = float(np.median(np.linalg.norm(landmarks - seen.estimate.world_from_camera[:3, 3], axis=1)))
    return Loop(
        seen.keyframe.id,
        newest.id,
        sim3.compose(scale, rigid[:3, :3], rigid[:3, 3]),
        _covariance(seen.estimate, distance, scale, scale_sigma),
        seen.keyframe_rows,
        seen.rows,
    )
