"""Loops brought into the map: segments tied, the pose graph solved on Sim(3), points moved with it, rays added.

The graph holds every keyframe; consecutive ones are constrained by what the bundle says of their relative pose, and the
scale may creep from one to the next. `posegraph.solve_robust` judges the loops. What it keeps becomes rays: features
that agree across a loop are new points, seen from both sides, so that the bundle adjustment afterwards is one whole.
"""

from dataclasses import dataclass

import numpy as np

from hybridtrack.geometry import se3, sim3
from hybridtrack.odometry.global_bundle import Fit
from hybridtrack.odometry.loops import Loop
from hybridtrack.odometry.observations import View
from hybridtrack.odometry.options import OdometryOptions
from hybridtrack.odometry.places import PlaceBook
from hybridtrack.odometry.sparse_map import Keyframe, SparseMap
from hybridtrack.posegraph import Constraint, PoseGraph, RobustOptions, rigid_graph, similarity_graph, solve_robust

Array = np.ndarray

# Errors of one track repeat from keyframe to keyframe, which a bundle that takes them as independent does not see.
ODOMETRY_GROWTH = 9.0
SCALE_CREEP = 0.01  # deviation of the log scale from one keyframe to the next
FLOOR_SHIFT_SHARE = 1e-3  # of the median step
FLOOR_TURN_RAD = 3e-4
TIES_AGREE = 0.15
RAYS_A_LOOP = 100  # of the strongest features: a loop of hundreds would outweigh the tracks
KEPT = ("kept", "down-weighted", "untested")


@dataclass(frozen=True, eq=False)
class LoopVerdict:
    """A loop, whether it was used, why not, and the gap it closed: shift over the path between, turn, scale ratio."""

    loop: Loop
    used: bool
    reason: str
    shift_share: float
    turn_deg: float
    scale: float
    chi_square: float | None = None


@dataclass(frozen=True, eq=False)
class Closing:
    """The graph over all keyframes as solved, on SE(3), and a verdict on every loop."""

    graph: PoseGraph
    verdicts: list[LoopVerdict]


def _relative_covariance(fit: Fit | None, world: SparseMap, a: Keyframe, b: Keyframe) -> Array:
    """Covariance (6, 6) of the relative pose of two keyframes, grown and with a floor."""
    pose_a, pose_b = a.world_from_camera, b.world_from_camera
    step = max(float(np.linalg.norm(pose_b[:3, 3] - pose_a[:3, 3])), 1e-6)
    floor = np.diag(np.r_[np.full(3, FLOOR_SHIFT_SHARE * step), np.full(3, FLOOR_TURN_RAD)] ** 2)
    if fit is None or fit.joint is None:
        return 100.0 * floor
    # a_from_b exp(d) with d = x_b - Ad(b_from_a) x_a
    by_a = -se3.adjoint(se3.inverse(pose_b) @ pose_a)
    blocks = [slice(6 * i, 6 * i + 6) for i in (fit.ids.index(a.id), fit.ids.index(b.id))]
    aa, ab, bb = (fit.joint[blocks[i], blocks[j]] for i, j in ((0, 0), (0, 1), (1, 1)))
    spread = by_a @ aa @ by_a.T + by_a @ ab + (by_a @ ab).T + bb
    return ODOMETRY_GROWTH * 0.5 * (spread + spread.T) + floor


def keyframe_graph(world: SparseMap, fits: list[Fit]) -> PoseGraph:
    """SE(3) graph of all keyframes, consecutive ones of a segment constrained by the map as it stands."""
    graph = PoseGraph()
    for keyframe in world.keyframes:
        frame = world.frame_of(keyframe.segment)
        graph.add_pose(keyframe.id, keyframe.view.t_ns, keyframe.world_from_camera, keyframe.segment, frame=frame)
    fit_of_keyframe = {i: fit for fit in fits for i in fit.ids}
    for a, b in zip(world.keyframes, world.keyframes[1:], strict=False):
        if a.segment == b.segment:
            relative = se3.inverse(a.world_from_camera) @ b.world_from_camera
            covariance = _relative_covariance(fit_of_keyframe.get(a.id), world, a, b)
            graph.add_constraint(a.id, b.id, "odometry", relative, covariance)
    return graph


def _gap(world: SparseMap, loop: Loop) -> tuple[float, float, float]:
    """What a loop would move: shift over the length of path between its ends, turn in degrees, scale ratio."""
    a, b = (world.keyframes[i].world_from_camera for i in (loop.from_id, loop.to_id))
    positions = np.array([k.world_from_camera[:3, 3] for k in world.keyframes[loop.from_id : loop.to_id + 1]])
    path = max(float(np.linalg.norm(np.diff(positions, axis=0), axis=1).sum()), 1e-9)
    scale, turn, shift = sim3.decompose(loop.from_from_to)
    error = se3.inverse(se3.compose(turn, shift)) @ se3.inverse(a) @ b
    angle = float(np.linalg.norm(se3.log(error)[3:]))
    return float(np.linalg.norm(error[:3, 3])) / path, float(np.rad2deg(angle)), float(scale)


def tie_segments(world: SparseMap, loops: list[Loop]) -> list[str]:
    """Tie segments where at least two loops between them agree; return sentences on what was done."""
    findings = []
    for segment in sorted({k.segment for k in world.keyframes})[1:]:
        across = [
            loop
            for loop in loops
            if world.keyframes[loop.to_id].segment == segment
            and world.frame_of(world.keyframes[loop.from_id].segment) != world.frame_of(segment)
        ]
        ends = [[world.keyframes[i].world_from_camera for i in (loop.from_id, loop.to_id)] for loop in across]
        moves = [a @ loop.from_from_to @ se3.inverse(b) for (a, b), loop in zip(ends, across, strict=True)]
        gaps = np.array([[np.abs(sim3.log(sim3.inverse(m) @ n)).max() for n in moves] for m in moves])
        agreeing = (gaps < TIES_AGREE).sum(axis=1) if len(moves) else np.zeros(0)
        if len(moves) and agreeing.max() >= 2:
            best = int(np.argmax(agreeing))
            to_segment = world.keyframes[across[best].from_id].segment
            world.tie(segment, to_segment, moves[best])
            findings.append(f"segment {segment} was tied to segment {to_segment} by {agreeing.max()} loops")
    return findings


def _plausible(world: SparseMap, loop: Loop, options: OdometryOptions) -> str:
    """Why a loop is refused before the graph is asked, or an empty string."""
    a, b = (world.keyframes[i].segment for i in (loop.from_id, loop.to_id))
    if world.frame_of(a) != world.frame_of(b):
        return "its ends lie in segments that are not tied"
    shift, turn, scale = _gap(world, loop)
    drift = options.loop_max_drift
    if a == b and (shift > drift or abs(np.log(scale)) > np.log(1.0 + 2.0 * drift) or turn > 90.0 * drift):
        return (
            f"it would move the camera by {100 * shift:.0f} % of the path between, turn it by {turn:.0f} degrees and "
            f"rescale by {scale:.2f}: more than drift explains"
        )
    return ""


def _apply(world: SparseMap, solved: PoseGraph) -> None:
    """Move keyframes to the solution on Sim(3), every point with the first keyframe that sees it."""
    first_seen = np.full(len(world.positions), -1)
    for keyframe in reversed(world.keyframes):
        first_seen[keyframe.points[keyframe.points >= 0]] = keyframe.id
    for keyframe in world.keyframes:
        similarity = solved.pose(keyframe.id).world_from_camera
        points = np.flatnonzero(first_seen == keyframe.id)
        move = similarity @ se3.inverse(keyframe.world_from_camera)
        world.positions[points] = sim3.transform(move, world.positions[points])
        scale, turn, shift = sim3.decompose(similarity)
        keyframe.world_from_camera = se3.compose(turn, shift)
        keyframe.twist = np.concatenate([float(scale) * keyframe.twist[:3], keyframe.twist[3:]])


def _extended(view: View, more: View, ids: Array) -> View:
    """A view with the rays of another picture feature set under given ids."""
    pairs = zip(view.columns, (ids, *more.columns[1:]), strict=True)
    return View(view.index, view.t_ns, *(np.concatenate(pair) for pair in pairs))


def _see(keyframe: Keyframe, more: View, ids: Array, points: Array) -> None:
    keyframe.view = _extended(keyframe.view, more, ids)
    keyframe.points = np.concatenate([keyframe.points, points])


def add_loop_rays(world: SparseMap, book: PlaceBook, loop: Loop, first_id: int) -> int:
    """Make points of the features that agree across a loop, seen from both ends and from the keyframes beside them.

    `first_id` is the first of the ids (negative, falling) that these rays take as tracks; returns the next free one.
    """
    a, b = world.keyframes[loop.from_id], world.keyframes[loop.to_id]
    place_a, place_b = book.of(a), book.of(b)
    landmarks = book.landmarks(a)[loop.from_rows]
    known = np.isfinite(landmarks[:, 0])
    landmarks, rows_a, rows_b = landmarks[known], loop.from_rows[known], loop.to_rows[known]
    strongest = np.argsort(rows_a, kind="stable")[:RAYS_A_LOOP]
    landmarks, rows_a, rows_b = landmarks[strongest], rows_a[strongest], rows_b[strongest]
    if place_a is None or place_b is None or not len(rows_a):
        return first_id
    ids = first_id - np.arange(len(rows_a))
    points = world.add_points(landmarks, ids, a.segment)
    _see(a, place_a.view.select(rows_a), ids, points)
    _see(b, place_b.view.select(rows_b), ids, points)
    for end, rows in ((a, rows_a), (b, rows_b)):
        for other in book.neighbours(end):
            beside = book.of(other)
            if beside is None or other.id in (a.id, b.id):
                continue
            mine, theirs = book.matches(end, other)
            _, at, found = np.intersect1d(rows, mine, assume_unique=True, return_indices=True)
            _see(other, beside.view.select(theirs[found]), ids[at], points[at])
    return int(first_id - len(ids))


def close_loops(
    world: SparseMap, book: PlaceBook, loops: list[Loop], fits: list[Fit], options: OdometryOptions
) -> Closing:
    """Judge all loops, solve the graph, and bring poses, points and loop rays into the map."""
    graph = keyframe_graph(world, fits)
    lifted = similarity_graph(graph, SCALE_CREEP)
    refusals = {number: _plausible(world, loop, options) for number, loop in enumerate(loops)}
    gaps = {number: _gap(world, loop) for number, loop in enumerate(loops)}
    index_of = {}
    for number, loop in enumerate(loops):
        if not refusals[number]:
            constraint = Constraint(loop.from_id, loop.to_id, "loop", loop.from_from_to, loop.covariance)
            index_of[number] = lifted.add(constraint)
    if not index_of:
        verdicts = [LoopVerdict(loop, False, refusals[n], *gaps[n]) for n, loop in enumerate(loops)]
        return Closing(graph, verdicts)
    result = solve_robust(lifted, RobustOptions())
    verdicts = []
    for number, loop in enumerate(loops):
        reason = refusals[number] or result.reasons.get(index_of[number], "")
        solved = result.graph.constraints[index_of[number]] if number in index_of else None
        used = solved is not None and solved.verdict in KEPT and not reason
        verdicts.append(LoopVerdict(loop, used, reason, *gaps[number], None if solved is None else solved.chi_square))
    if any(verdict.used for verdict in verdicts):
        _apply(world, result.graph)
        next_id = -1
        for verdict in verdicts:
            if verdict.used:
                next_id = add_loop_rays(world, book, verdict.loop, next_id)
    return Closing(rigid_graph(result.graph), verdicts)
