"""Spanning-tree and chordal starts."""

import numpy as np
import pytest

from hybridtrack.errors import DegenerateDataError
from hybridtrack.posegraph import SE3, SIM3, chordal_poses, solve, spanning_tree_poses
from hybridtrack.posegraph.initialise import spanning_forest

GROUPS = pytest.mark.parametrize("group", [SE3, SIM3], ids=["SE3", "Sim3"])


def scattered(made):
    """The graph with all poses but the first thrown anywhere."""
    rng = np.random.default_rng(8)
    poses = made.graph.world_from_camera()
    d = made.graph.group.dimension
    poses[1:] = made.graph.group.exp(rng.normal(size=(len(poses) - 1, d)))
    poses[0] = made.truth[0]
    return made.graph.with_solution(poses, made.graph.constraints)


@GROUPS
@pytest.mark.parametrize("start", [spanning_tree_poses, chordal_poses])
def test_exact_without_noise_from_any_poses(laps, group, start):
    """Neither uses the present poses but for the held one; without noise both give the truth."""
    made = laps(60, seed=None, group=group)
    graph = scattered(made)
    assert np.abs(start(graph, range(len(graph.constraints))) - made.truth).max() < 1e-9


@GROUPS
def test_chordal_start_is_near_the_minimum(laps, group):
    """With noise it lies many times closer to the least-squares poses than chained odometry does."""
    made = laps(100, lap=20, seed=3, group=group)
    every = range(len(made.graph.constraints))
    best = solve(made.graph).graph.world_from_camera()

    def distance(poses):
        return np.abs(poses[:, :3, 3] - best[:, :3, 3]).max()

    assert distance(chordal_poses(made.graph, every)) < 0.2 * distance(made.graph.world_from_camera())


@GROUPS
def test_a_prior_ties_the_start_to_the_world(laps, group):
    """With a prior both starts are placed by it and not by the present poses."""
    made = laps(30, lap=10, seed=None, group=group)
    graph = scattered(made)
    graph.add_prior(12, made.truth[12], made.covariance)
    for start in (spanning_tree_poses, chordal_poses):
        assert np.abs(start(graph, range(len(graph.constraints))) - made.truth).max() < 1e-9


def test_the_tree_keeps_odometry_and_the_most_certain_of_doubles(laps):
    """Loops enter a tree only where nothing else ties; of two equal links the more certain one is taken."""
    made = laps(30, lap=10)
    graph = made.graph
    better = graph.add_constraint(3, 4, "odometry", made.measured(3, 4, np.zeros(6)), 0.25 * made.covariance)
    forest = spanning_forest(graph, range(len(graph.constraints)))
    indices = {index for *_, index in forest.edges(data="index")}
    assert {graph.constraint(i).kind for i in indices} == {"odometry"}
    assert better in indices
    assert 3 not in indices
    without = [i for i in range(len(graph.constraints)) if i != 15]
    assert sum(graph.constraint(i).kind == "loop" for *_, i in spanning_forest(graph, without).edges(data="index")) == 1


@pytest.mark.parametrize("start", [spanning_tree_poses, chordal_poses])
def test_refuses_a_torn_segment(laps, start):
    """A chain with a link left out is two parts of one segment."""
    graph = laps(10, lap=50).graph
    with pytest.raises(DegenerateDataError, match="tie segment 0 together"):
        start(graph, [i for i in range(9) if i != 4])
