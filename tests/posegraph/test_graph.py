"""The pose graph holds what it is given and refuses nonsense."""

import networkx as nx
import numpy as np
import pytest

from hybridtrack.errors import DegenerateDataError, OptionError, ShapeError
from hybridtrack.posegraph import WORLD, Constraint, PoseGraph

COVARIANCE = np.diag([1e-4] * 3 + [1e-6] * 3)


def chain(count: int) -> PoseGraph:
    graph = PoseGraph()
    for i in range(count):
        graph.add_pose(i, i * 10, np.eye(4))
    for i in range(count - 1):
        graph.add_constraint(i, i + 1, "odometry", np.eye(4), COVARIANCE)
    return graph


def test_poses_and_constraints_come_back_in_order():
    """Ids keep the order of adding, constraint indices count from zero, networkx sees the same."""
    graph = PoseGraph()
    graph.add_pose(5, 50, np.eye(4), segment=1)
    graph.add_pose(2, 20, np.eye(4))
    assert graph.add_constraint(5, 2, "loop", np.eye(4), COVARIANCE) == 0
    assert graph.add_prior(2, np.eye(4), COVARIANCE) == 1
    assert graph.ids == (5, 2)
    assert (graph.pose(5).t_ns, graph.pose(5).segment) == (50, 1)
    assert graph.constraint(1).from_id == WORLD
    assert isinstance(graph.network, nx.MultiDiGraph)
    assert set(graph.network.edges(keys=True)) == {(5, 2, 0), (WORLD, 2, 1)}


def test_components_count_only_the_chosen_constraints():
    """Leaving one link of a chain out makes two parts."""
    graph = chain(5)
    assert graph.components() == [{0, 1, 2, 3, 4}]
    assert graph.components([0, 1, 3]) == [{0, 1, 2}, {3, 4}]


def test_untestable_constraints_are_those_in_no_cycle():
    """A tail hangs on by itself; a cycle and a doubled link can be contradicted."""
    graph = chain(5)
    assert graph.untestable() == {0, 1, 2, 3}
    graph.add_constraint(0, 2, "loop", np.eye(4), COVARIANCE)
    assert graph.untestable() == {2, 3}
    graph.add_constraint(4, 3, "loop", np.eye(4), COVARIANCE)
    assert graph.untestable() == {2}
    assert graph.untestable([0, 1, 2, 3]) == {0, 1, 2, 3}


def test_cycles_form_a_basis():
    """One loop over a chain is one cycle through its nodes."""
    graph = chain(4)
    assert graph.cycles() == []
    graph.add_constraint(0, 2, "loop", np.eye(4), COVARIANCE)
    assert [set(cycle) for cycle in graph.cycles()] == [{0, 1, 2}]


def test_scaled_covariances_touch_only_the_chosen_kinds():
    """Odometry may be inflated without touching loops, on a copy."""
    graph = chain(3)
    graph.add_constraint(0, 2, "loop", np.eye(4), COVARIANCE)
    scaled = graph.with_scaled_covariances(["odometry"], 4.0)
    assert np.allclose(scaled.constraint(0).covariance, 4.0 * COVARIANCE)
    assert np.allclose(scaled.constraint(2).covariance, COVARIANCE)
    assert np.allclose(graph.constraint(0).covariance, COVARIANCE)
    with pytest.raises(OptionError, match="factor: expected a positive number, got 0"):
        graph.with_scaled_covariances(["odometry"], 0.0)


def test_refuses_bad_ids():
    """Negative, doubled and unknown ids are named."""
    graph = chain(2)
    with pytest.raises(OptionError, match="pose id: expected a whole number from 0, got -1"):
        graph.add_pose(-1, 0, np.eye(4))
    with pytest.raises(OptionError, match="got 1 a second time"):
        graph.add_pose(1, 0, np.eye(4))
    with pytest.raises(OptionError, match="got the unknown id 9"):
        graph.add_constraint(0, 9, "loop", np.eye(4), COVARIANCE)
    with pytest.raises(OptionError, match="expected two different poses"):
        graph.add_constraint(1, 1, "loop", np.eye(4), COVARIANCE)
    with pytest.raises(OptionError, match="expected the id of one of its 2 poses, got 7"):
        graph.pose(7)
    with pytest.raises(OptionError, match="expected a verdict of"):
        graph.add(Constraint(0, 1, "loop", np.eye(4), COVARIANCE, verdict="maybe"))


def test_refuses_covariances_that_claim_perfect_knowledge():
    """A zero variance and a perfect correlation are singular; both name the constraint."""
    graph = chain(2)
    zero = np.diag([1e-4, 1e-4, 0.0, 1e-6, 1e-6, 1e-6])
    with pytest.raises(
        DegenerateDataError, match="loop constraint from pose 0 to pose 1: expected a positive definite"
    ):
        graph.add_constraint(0, 1, "loop", np.eye(4), zero)
    tied = COVARIANCE.copy()
    tied[0, 1] = tied[1, 0] = 1e-4
    with pytest.raises(DegenerateDataError, match="got one that is singular"):
        graph.add_constraint(0, 1, "loop", np.eye(4), tied)
    indefinite = COVARIANCE.copy()
    indefinite[0, 1] = indefinite[1, 0] = 2e-4
    with pytest.raises(DegenerateDataError, match="smallest eigenvalue of its correlation -"):
        graph.add_constraint(0, 1, "loop", np.eye(4), indefinite)


def test_refuses_covariances_of_the_wrong_make():
    """Shape and symmetry are checked."""
    graph = chain(2)
    with pytest.raises(ShapeError, match=r"expected a finite covariance \(6, 6\), got \(3, 3\)"):
        graph.add_constraint(0, 1, "loop", np.eye(4), np.eye(3))
    skewed = COVARIANCE.copy()
    skewed[0, 1] = 1e-5
    with pytest.raises(ShapeError, match="expected a symmetric covariance"):
        graph.add_constraint(0, 1, "loop", np.eye(4), skewed)
