"""Loops: found and placed right, refused where they are not, and brought into the map."""

from collections.abc import Callable
from dataclasses import replace

import numpy as np
import pytest

from hybridtrack.benchmark.metrics import absolute_trajectory_error
from hybridtrack.geometry import se3, sim3
from hybridtrack.odometry.closing import close_loops, keyframe_graph, tie_segments
from hybridtrack.odometry.finishing import finish
from hybridtrack.odometry.global_bundle import adjust_whole, fit_of
from hybridtrack.odometry.loops import Loop, find_loop, locate, old_keyframes
from hybridtrack.odometry.odometer import Odometer
from hybridtrack.odometry.options import OdometryOptions
from hybridtrack.odometry.places import Place, PlaceBook
from hybridtrack.odometry.result import result_of
from hybridtrack.odometry.sparse_map import SparseMap

Array = np.ndarray
OPTIONS = OdometryOptions()
LAP = {"radius_m": 1.2, "frames": 240, "points": 1400, "noise_px": 0.3}
OVERLAPPING = {**LAP, "laps": 1.1}


def true_map(lap: object, frames: list[int], scales: Array | None = None) -> tuple[SparseMap, PlaceBook]:
    """Keyframes at true poses, their positions scaled about the origin by `scales` (K,)."""
    world, views = SparseMap(), lap.views(0.3)  # type: ignore[attr-defined]
    poses = lap.world_from_camera  # type: ignore[attr-defined]
    for number, frame in enumerate(frames):
        scale = 1.0 if scales is None else scales[number]
        before, after = max(frame - 1, 0), min(frame + 1, len(views) - 1)
        twist = se3.log(se3.inverse(poses[before]) @ poses[after]) * 60.0 / (after - before)
        pose = poses[frame].copy()
        pose[:3, 3] *= scale
        twist[:3] *= scale
        world.add_keyframe(views[frame], pose, twist, 0)
    return world, PlaceBook(world, lap.look)  # type: ignore[attr-defined]


def test_a_closed_lap_is_seen_and_placed(make_lap: Callable) -> None:
    """The end of the lap sees its start: the relative pose is right within four stated deviations, the scale one."""
    lap = make_lap(**LAP)
    world, book = true_map(lap, [0, 3, 6, 9, 12, 225, 228, 231, 234, 237, 239][:11])
    newest = world.keyframes[10]
    loop = find_loop(book, world, newest, OPTIONS)
    assert loop is not None
    truth = se3.inverse(world.keyframes[loop.from_id].world_from_camera) @ newest.world_from_camera
    error = sim3.log(sim3.inverse(loop.from_from_to) @ truth)
    assert np.abs(error / np.sqrt(np.diag(loop.covariance))).max() < 4.0


def test_the_scale_between_both_sides_is_measured(make_lap: Callable) -> None:
    """Where the end of the lap has grown by 20 %, the loop says so to 2 %."""
    lap = make_lap(**LAP)
    frames = [0, 3, 6, 9, 12, 225, 228, 231, 234, 237, 239]
    world, book = true_map(lap, frames, np.where(np.array(frames) > 100, 1.2, 1.0))
    loop = find_loop(book, world, world.keyframes[10], OPTIONS)
    assert loop is not None
    np.testing.assert_allclose(sim3.decompose(loop.from_from_to)[0], 1.0 / 1.2, rtol=0.02)


def test_places_far_apart_make_no_loop(make_lap: Callable) -> None:
    """Half a lap on nothing looks like the beginning."""
    lap = make_lap(**LAP)
    world, book = true_map(lap, [0, 3, 6, 9, 12, 105, 108, 111, 114, 117, 120])
    assert old_keyframes(world, world.keyframes[10], OPTIONS)
    assert find_loop(book, world, world.keyframes[10], OPTIONS) is None


def test_the_near_past_is_no_candidate(make_lap: Callable) -> None:
    """Keyframes of less than the gap ago are not asked."""
    lap = make_lap(**LAP)
    world, book = true_map(lap, [0, 6, 12, 18, 24])
    assert find_loop(book, world, world.keyframes[4], OPTIONS) is None


def test_a_patch_that_agrees_is_not_enough(make_lap: Callable) -> None:
    """Features of one corner of the picture alone, say a sticker that is everywhere, do not place a camera."""
    lap = make_lap(**LAP)
    world, book = true_map(lap, [0, 3, 6, 9, 12])
    whole = lap.look(6)
    assert whole is not None
    assert locate(book, whole, None, world.keyframes[:3], OPTIONS) is not None
    rng = np.random.default_rng(0)
    corner = (np.abs(whole.view.uv - np.median(whole.view.uv, axis=0)) < [130.0, 110.0]).all(axis=1)
    shuffled = whole.descriptors.copy()
    shuffled[~corner] = rng.permutation(whole.descriptors[~corner])
    relaxed = replace(OPTIONS, loop_min_inliers=8)
    assert locate(book, Place(whole.view, shuffled), None, world.keyframes[:3], relaxed) is None


def run(lap: object) -> Odometer:
    odometer = Odometer(1280, OPTIONS, lap.look)  # type: ignore[attr-defined]
    for view in lap.views(0.3):  # type: ignore[attr-defined]
        odometer.push(view)
    return odometer


@pytest.fixture(scope="module")
def lapped(make_lap: Callable) -> tuple[object, Odometer]:
    """A lap and the odometer after it, before it is finished."""
    lap = make_lap(**OVERLAPPING)
    return lap, run(lap)


def error_percent(odometer: Odometer, lap: object) -> float:
    poses = np.array([k.world_from_camera for k in odometer.world.keyframes])
    truth = lap.world_from_camera[[k.view.index for k in odometer.world.keyframes]]  # type: ignore[attr-defined]
    return absolute_trajectory_error(poses, truth).percent


def false_loop(world: SparseMap, a: int, b: int, size: float) -> Loop:
    """A loop that claims b is elsewhere, seen from a, with the covariance of a good one."""
    relative = se3.inverse(world.keyframes[a].world_from_camera) @ world.keyframes[b].world_from_camera
    wrong = relative @ se3.exp([size, -size, 0.0, 0.0, 0.0, 0.0])
    return Loop(a, b, wrong, np.diag([0.01] * 3 + [0.003] * 3 + [0.01]) ** 2, np.arange(30), np.arange(30))


def test_drift_is_taken_back_and_false_loops_are_refused(lapped: tuple) -> None:
    """With 3 % of scale drift put into the map, true loops close it; two false ones, large and small, are refused."""
    lap, odometer = lapped
    world = odometer.world
    count = len(world.keyframes)
    assert len(odometer.loops) >= 2
    adjust_whole(world, OPTIONS)
    before = error_percent(odometer, lap)
    for number in range(1, count):  # every keyframe further on is a little larger
        step = sim3.compose(1.03 ** (1 / count), np.eye(3), np.zeros(3))
        anchor = world.keyframes[number].world_from_camera[:3, 3].copy()
        for later in world.keyframes[number:]:
            pose = later.world_from_camera
            pose[:3, 3] = sim3.transform(step, pose[:3, 3] - anchor) + anchor
    drifted = error_percent(odometer, lap)
    assert drifted > 3.0 * before
    fits = [fit_of(world, ids, OPTIONS) for ids in world.groups()]
    assert odometer.book is not None
    large, small = false_loop(world, 2, count // 2, 5.0), false_loop(world, 1, count // 2, 0.25)
    closing = close_loops(world, odometer.book, [*odometer.loops, large, small], [f for f in fits if f], OPTIONS)
    verdicts = {(v.loop.from_id, v.loop.to_id): v for v in closing.verdicts}
    assert not verdicts[2, count // 2].used
    assert "more than drift explains" in verdicts[2, count // 2].reason
    assert not verdicts[1, count // 2].used
    assert verdicts[1, count // 2].reason
    used = [v for v in closing.verdicts[:-2] if v.used]
    assert len(used) >= 2
    adjust_whole(world, OPTIONS)
    assert error_percent(odometer, lap) < 1.5 * before + 0.01


def test_loop_rays_hold_both_ends_together(make_lap: Callable) -> None:
    """A finished lap with places is at least as good as one without, and its loops are in the summary."""
    lap = make_lap(**OVERLAPPING)
    odometer = run(lap)
    result = result_of(odometer, finish(odometer))
    assert result.summary["loops_used"] >= 2
    assert any((k.view.ids < 0).any() for k in odometer.world.keyframes)
    error = absolute_trajectory_error(result.trajectory.world_from_camera, lap.world_from_camera)
    assert error.percent < 0.02
    kinds = {c.kind for c in result.graph.constraints}
    assert kinds == {"odometry", "loop"}


def test_a_world_of_twins_closes_no_false_loop(make_lap: Callable) -> None:
    """Where every place has a double half a lap on, turned by half a turn, loops between doubles are refused."""
    lap = make_lap(**{**LAP, "twins": True})
    odometer = run(lap)
    result = result_of(odometer, finish(odometer))
    for verdict in result.loops:
        ends = [odometer.world.keyframes[i].view.index for i in (verdict.loop.from_id, verdict.loop.to_id)]
        apart = np.linalg.norm(np.diff(lap.world_from_camera[ends, :3, 3], axis=0))
        assert not (verdict.used and apart > 1.0), verdict
    error = absolute_trajectory_error(result.trajectory.world_from_camera, lap.world_from_camera)
    assert error.percent < 0.1


def test_segments_are_tied_by_two_loops_that_agree(make_lap: Callable) -> None:
    """One loop between segments ties nothing; two that agree do, and move the segment where it belongs."""
    lap = make_lap(**LAP)
    world, book = true_map(lap, [0, 3, 6, 9, 12])
    views = lap.views(0.3)
    away = sim3.compose(0.5, se3.exp([0, 0, 0, 0.3, 0.1, 1.0])[:3, :3], [4.0, 5.0, 6.0])
    for frame in (225, 228, 231, 234, 237):
        twist = se3.log(se3.inverse(lap.world_from_camera[frame - 1]) @ lap.world_from_camera[frame + 1]) * 30.0
        world.add_keyframe(views[frame], lap.world_from_camera[frame], twist, 1)
    world.transform([5, 6, 7, 8, 9], away)
    loops = []
    for number in (6, 8):
        loop = find_loop(book, world, world.keyframes[number], OPTIONS)
        assert loop is not None
        loops.append(loop)
    assert tie_segments(world, loops[:1]) == []
    assert len(world.groups()) == 2
    assert tie_segments(world, loops) == ["segment 1 was tied to segment 0 by 2 loops"]
    assert len(world.groups()) == 1
    truth = lap.world_from_camera[[225, 228, 231, 234, 237], :3, 3]
    moved = np.array([k.world_from_camera[:3, 3] for k in world.keyframes[5:]])
    assert np.linalg.norm(moved - truth, axis=1).max() < 0.05
    assert len(keyframe_graph(world, [])) == 10
