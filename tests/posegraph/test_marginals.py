"""Marginal covariances against dense inverses and closed forms."""

import numpy as np
import pytest

from hybridtrack.errors import DegenerateDataError, OptionError
from hybridtrack.posegraph import SE3, SIM3, Marginals, PoseGraph, marginal_covariances, solve
from hybridtrack.posegraph.marginals import COLUMNS_AT_ONCE


def test_chain_covariance_has_a_closed_form(laps):
    """Along a chain the covariance of pose k is Ad C Ad' of the one before plus C."""
    made = laps(6, lap=50)
    result = solve(made.graph)
    expected = np.zeros((6, 6))
    for i in range(1, 6):
        step = made.graph.constraint(i - 1).from_from_to
        adjoint = SE3.adjoint(np.linalg.inv(step))
        expected = adjoint @ expected @ adjoint.T + made.covariance
        assert np.abs(marginal_covariances(result, [i])[0] - expected).max() < 1e-10 * np.abs(expected).max()


@pytest.mark.parametrize("group", [SE3, SIM3], ids=["SE3", "Sim3"])
def test_joint_and_single_covariances_agree(laps, group):
    """Blocks on the diagonal of a joint covariance are the single ones, in several batches; the held pose has none."""
    made = laps(60, lap=20, group=group)
    marginals = Marginals(solve(made.graph))
    every = marginals.covariances(made.graph.ids)
    assert 60 * group.dimension > COLUMNS_AT_ONCE
    d = group.dimension
    joint = marginals.joint([0, 50, 3])
    for number, pose_id in enumerate((0, 50, 3)):
        block = joint[number * d : (number + 1) * d, number * d : (number + 1) * d]
        assert np.abs(block - every[pose_id]).max() < 1e-12
    assert np.array_equal(every[0], np.zeros((d, d)))
    assert np.linalg.eigvalsh(joint[d:, d:])[0] > 0.0


def test_a_loop_makes_the_far_end_certain(laps):
    """The pose half a lap out is less certain than the one where the loop closes."""
    made = laps(21, lap=20)
    covariance = marginal_covariances(solve(made.graph), [10, 20])
    assert np.trace(covariance[1]) < 0.5 * np.trace(covariance[0])


def test_refuses_an_unknown_id(laps):
    """Asked for a pose that is not there, it says so."""
    with pytest.raises(OptionError, match="expected the id of a pose of the graph, got 99"):
        marginal_covariances(solve(laps(10, lap=5).graph), [99])


def test_refuses_constraints_left_without_weight(laps):
    """A pose whose only constraint lost all weight has no covariance: refused, not invented."""
    result = solve(laps(5, lap=50).graph)
    weights = result.weights.copy()
    weights[2] = 0.0
    broken = type(result)(result.graph, result.status, 1, 0.0, 0, weights)
    with pytest.raises(DegenerateDataError, match="tie segment 0 together"):
        Marginals(broken)


def test_a_graph_of_one_pose():
    """Nothing is free: a covariance of zero relative to itself."""
    graph = PoseGraph()
    graph.add_pose(4, 0, np.eye(4))
    assert np.array_equal(marginal_covariances(solve(graph), [4]), np.zeros((1, 6, 6)))
