"""Robust solving: wrong loops are rejected with a reason, right ones stay, and the result is the one without them."""

import numpy as np
import pytest

from hybridtrack.errors import DegenerateDataError, OptionError
from hybridtrack.posegraph import SE3, SIM3, PoseGraph, RobustOptions, solve, solve_robust

GROUPS = pytest.mark.parametrize("group", [SE3, SIM3], ids=["SE3", "Sim3"])


def with_wrong_loops(made, count, seed):
    """Add wrong loops, half of them random, half claiming that two far places are the same."""
    rng = np.random.default_rng(seed)
    d, added = made.graph.group.dimension, []
    while len(added) < count:
        a, b = sorted(rng.choice(len(made.graph), 2, replace=False).tolist())
        error = np.concatenate([rng.normal(size=3), 0.3 * rng.normal(size=d - 3)])
        measured = made.measured(a, b, error) if len(added) % 2 else np.eye(4)
        if np.linalg.norm(made.graph.group.log(np.linalg.inv(measured) @ made.measured(a, b, np.zeros(d)))) > 0.5:
            added.append(made.graph.add_constraint(a, b, "loop", measured, made.covariance))
    return added


@GROUPS
@pytest.mark.parametrize("seed", range(5))
def test_wrong_loops_are_rejected_and_right_ones_kept(laps, group, seed):
    """As many wrong loops as right ones: all wrong ones go; the poses are those of the graph without them."""
    made = laps(80, lap=20, seed=seed, group=group)
    clean = solve(made.graph)
    right = made.loops
    wrong = with_wrong_loops(made, len(right), seed)
    result = solve_robust(made.graph)
    assert result.status == "converged"
    assert set(result.reasons) == set(wrong)
    assert all(result.graph.constraint(i).verdict == "rejected" for i in wrong)
    assert all(result.graph.constraint(i).verdict == "kept" for i in right)
    assert np.abs(result.graph.world_from_camera() - clean.graph.world_from_camera()).max() < 1e-6
    assert result.chi_square == pytest.approx(clean.chi_square, rel=1e-6)


def test_right_loops_survive_at_the_stated_rate(laps):
    """Over 40 graphs without wrong loops, at most a few in a thousand are rejected at confidence 0.999."""
    total = rejected = 0
    for seed in range(40):
        made = laps(40, lap=12, seed=seed)
        rejected += len(solve_robust(made.graph).reasons)
        total += len(made.loops)
    assert total == 240
    assert rejected <= 4


def test_a_single_wrong_loop_on_soft_odometry_is_rejected(laps):
    """One loop bends a long chain without leaving a residual of its own; only the odometry can contradict it."""
    made = laps(60, lap=200)
    wrong = made.graph.add_constraint(
        0, 59, "loop", made.measured(0, 59, np.array([4.0, 0, 0, 0, 0, 0.0])), 1e-4 * made.covariance
    )
    assert solve(made.graph).graph.constraint(wrong).chi_square < 1.0
    result = solve_robust(made.graph)
    assert set(result.reasons) == {wrong}
    assert "contradicts odometry (chi-square" in result.reasons[wrong]
    assert result.dof == 0


def test_a_slightly_wrong_loop_is_found_by_deletion(laps):
    """A loop that passes against drifting odometry, but not against the solution of the others, goes in stage four."""
    made = laps(120, lap=20, seed=3, every=2)
    wrong = made.graph.add_constraint(
        2, 118, "loop", made.measured(2, 118, np.array([0.12, 0.0, 0, 0, 0, 0.0])), made.covariance
    )
    result = solve_robust(made.graph)
    assert set(result.reasons) == {wrong}
    assert "times the limit" in result.reasons[wrong] or "largest consistent set" in result.reasons[wrong]


def test_conflicting_loops_between_segments_leave_the_majority(laps):
    """Three loops tie a second segment to the first, one disagrees: it goes, and the segments come together."""
    one, two = laps(20, lap=20, seed=1), laps(20, lap=20, seed=2)
    graph = one.graph
    away = SE3.exp(np.array([3.0, 1.0, -2.0, 0.2, 0.7, -0.4]))
    for pose in two.graph.poses:
        graph.add_pose(100 + pose.id, 10**9 + pose.t_ns, pose.world_from_camera, segment=1)
    for c in two.graph.constraints:
        graph.add_constraint(100 + c.from_id, 100 + c.to_id, c.kind, c.from_from_to, c.covariance)
    loops = []
    for a, b, wrong in [(1, 4, 0.0), (15, 9, 0.0), (7, 18, 0.0), (3, 3, 1.0)]:
        measured = np.linalg.inv(one.truth[a]) @ away @ two.truth[b] @ SE3.exp(np.full(6, wrong))
        loops.append(graph.add_constraint(a, 100 + b, "loop", measured, one.covariance))
    result = solve_robust(graph)
    assert set(result.reasons) == {loops[3]}
    assert np.abs(result.graph.world_from_camera()[20:, :3, 3] - (away @ two.truth)[:, :3, 3]).max() < 0.2


def test_two_loops_between_segments_that_contradict_each_other_are_both_rejected(laps):
    """Nothing tells which is right: neither is used, and both segments stay where they were."""
    made = laps(20, lap=50, seed=1)
    graph = made.graph
    graph.add_pose(100, 10**9, np.eye(4), segment=1)
    graph.add_pose(101, 10**9 + 1, made.measured(0, 1, np.zeros(6)), segment=1)
    graph.add_constraint(100, 101, "odometry", made.measured(0, 1, np.zeros(6)), made.covariance)
    before = graph.world_from_camera()
    first = graph.add_constraint(3, 100, "loop", SE3.exp(np.array([2.0, 0, 0, 0, 0, 0])), made.covariance)
    alone = solve_robust(graph)
    assert alone.reasons == {}
    assert alone.graph.constraint(first).verdict == "untested"
    second = graph.add_constraint(3, 100, "loop", SE3.exp(np.array([0, -2.0, 0, 0, 0.5, 0])), made.covariance)
    result = solve_robust(graph)
    assert set(result.reasons) == {first, second}
    assert "nothing tells which of the two is right" in result.reasons[first] + result.reasons[second]
    assert np.abs(result.graph.world_from_camera() - before).max() < 1e-9
    assert result.graph.constraint(first).chi_square is None


def test_earlier_rejections_of_loops_are_judged_anew(laps):
    """A right loop that carries the verdict "rejected" comes back; rejected odometry stays out."""
    made = laps(40, lap=12, seed=5)
    first = solve_robust(made.graph)
    marked = [*first.graph.constraints]
    loop = made.loops[0]
    marked[loop] = type(marked[loop])(
        marked[loop].from_id, marked[loop].to_id, "loop", marked[loop].from_from_to, made.covariance, verdict="rejected"
    )
    again = solve_robust(first.graph.with_solution(first.graph.world_from_camera(), marked))
    assert again.reasons == {}
    assert again.graph.constraint(loop).verdict == "kept"


def test_odometry_that_claims_too_much_is_seen_in_the_p_value(laps):
    """With covariances a hundred times too small the p-value is nil, and scaling them brings it and the loops back."""
    made = laps(60, lap=12, seed=6)
    bold = made.graph.with_scaled_covariances(["odometry"], 0.01)
    result = solve_robust(bold, RobustOptions(trust_odometry=False))
    assert len(result.reasons) > 0 or result.p_value < 1e-6
    honest = solve_robust(bold.with_scaled_covariances(["odometry"], 100.0))
    assert honest.reasons == {}
    assert honest.p_value > 1e-3


def test_refuses_graphs_and_options_that_make_no_sense(laps):
    """An empty graph, a torn segment and a confidence of one."""
    with pytest.raises(DegenerateDataError, match="expected at least one pose, got none"):
        solve_robust(PoseGraph())
    graph = laps(10, lap=50).graph
    graph.add_pose(50, 10**9, np.eye(4))
    with pytest.raises(DegenerateDataError, match="1 of its poses from 50 on not connected"):
        solve_robust(graph)
    with pytest.raises(OptionError, match=r"confidence: expected a number in \[0.5, 1\), got 1"):
        RobustOptions(confidence=1.0)
