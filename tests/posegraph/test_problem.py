"""A graph as arrays: residuals and Jacobians are right, gauges are held, torn segments are refused."""

import numpy as np
import pytest

from hybridtrack.errors import DegenerateDataError
from hybridtrack.posegraph import SE3, SIM3, PoseGraph
from hybridtrack.posegraph.problem import build_problem, gauge, linearise, moved, residuals


@pytest.mark.parametrize("group", [SE3, SIM3], ids=["SE3", "Sim3"])
def test_jacobians_agree_with_differences(laps, group):
    """Both analytic Jacobians, at residuals of several radians and metres, priors included."""
    made = laps(12, lap=5, group=group, every=2)
    graph, d = made.graph, group.dimension
    graph.add_prior(3, graph.pose(3).world_from_camera, made.covariance)
    problem = build_problem(graph, range(len(graph.constraints)))
    rng = np.random.default_rng(5)
    free = int((~problem.fixed).sum())
    poses = moved(problem, problem.start, 0.5 * rng.normal(size=(free, d)))
    line = linearise(problem, poses)
    assert np.allclose(line.residual, residuals(problem, poses), atol=1e-9)
    rows = np.flatnonzero(~problem.fixed)
    step = 1e-6
    for number, row in enumerate(rows):
        for axis in range(d):
            shift = np.zeros((free, d))
            shift[number, axis] = step
            change = (
                residuals(problem, moved(problem, poses, shift)) - residuals(problem, moved(problem, poses, -shift))
            ) / (2.0 * step)
            expected = np.zeros_like(change)
            expected[problem.a == row] += line.by_a[problem.a == row, :, axis]
            expected[problem.b == row] += line.by_b[problem.b == row, :, axis]
            assert np.abs(change - expected).max() < 1e-6 * max(1.0, np.abs(change).max())


def test_the_earliest_pose_of_each_component_is_held(laps):
    """By stamp, not by order of adding; a prior takes its place."""
    covariance = np.diag([1e-4] * 3 + [1e-6] * 3)
    graph = PoseGraph()
    for i, t in enumerate([50, 10, 30, 40]):
        graph.add_pose(i, t, np.eye(4), segment=i // 2)
    graph.add_constraint(0, 1, "odometry", np.eye(4), covariance)
    graph.add_constraint(2, 3, "odometry", np.eye(4), covariance)
    assert gauge(graph, [0, 1]) - {-1} == {1, 2}
    graph.add_prior(0, np.eye(4), covariance)
    assert gauge(graph, [0, 1, 2]) - {-1} == {2}
    problem = build_problem(graph, [0, 1, 2])
    assert problem.fixed.tolist() == [False, False, True, False, True]
    assert problem.degrees_of_freedom == 6 * (3 - 3)


def test_refuses_a_pose_that_nothing_ties_to_its_segment(laps):
    """A disconnected node of the same segment claims a frame that no constraint gives it."""
    graph = laps(21).graph
    graph.add_pose(77, 10**9, np.eye(4))
    with pytest.raises(
        DegenerateDataError, match=r"tie segment 0 together, got 1 of its poses from 77 on not connected"
    ):
        build_problem(graph, range(len(graph.constraints)))


def test_a_pose_alone_in_its_segment_is_held(laps):
    """A new segment of one pose is no contradiction: it stays where it is."""
    graph = laps(21).graph
    graph.add_pose(77, 10**9, np.eye(4), segment=1)
    problem = build_problem(graph, range(len(graph.constraints)))
    assert problem.fixed[graph.ids.index(77)]


def test_refuses_an_empty_graph():
    """Nothing to solve is said, not solved."""
    with pytest.raises(DegenerateDataError, match="expected at least one pose, got none"):
        build_problem(PoseGraph(), [])
