"""Chained motion and its covariance between any two poses."""

from itertools import pairwise

import numpy as np
import pytest

from hybridtrack.posegraph import SE3, SIM3, PoseGraph
from hybridtrack.posegraph.odometry_tree import odometry_tree


def branching(group) -> PoseGraph:
    """Poses 0-1-2-3-4 and a branch 2-5-6-7, with links in both directions."""
    rng = np.random.default_rng(1)
    graph = PoseGraph(group)
    d = group.dimension
    for i in range(8):
        graph.add_pose(i, i, np.eye(4))
    for start, end in [(0, 1), (2, 1), (2, 3), (3, 4), (5, 2), (5, 6), (7, 6)]:
        spread = rng.normal(size=(d, d)) * 0.01
        graph.add_constraint(start, end, "odometry", group.exp(0.5 * rng.normal(size=d)), spread @ spread.T)
    return graph


def chained(graph, path):
    """Motion along the path and its covariance on the right, one link after the other."""
    group, d = graph.group, graph.group.dimension
    motion, covariance = np.eye(4), np.zeros((d, d))
    for here, there in pairwise(path):
        constraint = next(c for c in graph.constraints if {c.from_id, c.to_id} == {here, there})
        step, spread = constraint.from_from_to, constraint.covariance
        if constraint.from_id == there:
            turn = group.adjoint(step)
            step, spread = np.linalg.inv(step), turn @ spread @ turn.T
        back = group.adjoint(np.linalg.inv(step))
        motion, covariance = motion @ step, back @ covariance @ back.T + spread
    return motion, covariance


@pytest.mark.parametrize("group", [SE3, SIM3], ids=["SE3", "Sim3"])
@pytest.mark.parametrize("path", [[0, 1, 2], [4, 3, 2, 1], [4, 3, 2, 5, 6, 7], [1, 2, 5], [6, 7], [3]])
def test_paths_agree_with_chaining_link_by_link(group, path):
    """Down, up, over a branching point, in both directions of the links."""
    graph = branching(group)
    tree = odometry_tree(graph, range(7))
    k, m = np.array([path[0]]), np.array([path[-1]])
    motion, covariance = chained(graph, path)
    assert np.abs(np.linalg.inv(tree.root_from[k]) @ tree.root_from[m] - motion).max() < 1e-10
    at_end = group.adjoint(np.linalg.inv(tree.root_from[m]))
    assert np.abs(at_end @ tree.path_spread(k, m) @ at_end.swapaxes(1, 2) - covariance).max() < 1e-10
    assert tree.hops(k, m)[0] == len(path) - 1


def test_meeting_point_of_every_pair_of_a_long_chain(laps):
    """On a chain rooted at its start the meeting point is the earlier pose."""
    graph = laps(40, lap=100, seed=None).graph
    tree = odometry_tree(graph, range(39))
    k, m = (part.ravel() for part in np.meshgrid(np.arange(40), np.arange(40)))
    assert np.array_equal(tree.meeting(k, m), np.minimum(k, m))


def test_trees_are_numbered_apart():
    """Leaving a link out makes two trees, each with its own root at the identity."""
    tree = odometry_tree(branching(SE3), [0, 1, 2, 3, 5, 6])
    assert len({int(tree.component[i]) for i in (0, 1, 2, 3, 4)}) == 1
    assert tree.component[5] == tree.component[7] != tree.component[0]
    assert np.array_equal(tree.root_from[5], np.eye(4))
