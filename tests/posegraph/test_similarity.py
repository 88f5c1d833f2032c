"""Scale drift of a single camera is undone by a Sim(3) graph, and given back as a rigid one."""

import numpy as np
import pytest

from hybridtrack.errors import OptionError
from hybridtrack.geometry import sim3
from hybridtrack.posegraph import SE3, SIM3, Constraint, PoseGraph, rigid_graph, similarity_graph, solve


def drifting(made, rate: float):
    """An SE(3) graph of odometry alone whose unit of length shrinks by `rate` a step, and the scale (N,) of each pose:
    how much of its own units one true metre is."""
    count = len(made.graph)
    scale = np.exp(-rate * np.arange(count))
    graph = PoseGraph(SE3)
    estimate = made.truth[0]
    graph.add_pose(0, 0, estimate)
    for i in range(count - 1):
        step = made.measured(i, i + 1, np.zeros(6))
        step[:3, 3] *= scale[i]
        estimate = estimate @ step
        graph.add_pose(i + 1, i + 1, estimate)
        graph.add_constraint(i, i + 1, "odometry", step, made.covariance)
    return graph, scale


def test_scale_drift_is_undone_by_loops_with_scale(laps):
    """2 % a step over 40 poses puts the path metres off; loops with their scale take most of that back."""
    made = laps(41, lap=20, seed=None)
    graph, scale = drifting(made, 0.02)
    lifted = similarity_graph(graph, 0.02)
    for a, b in [(0, 20), (20, 40), (0, 40)]:
        motion = np.linalg.inv(made.truth[a]) @ made.truth[b]
        measured = sim3.compose(scale[a] / scale[b], motion[:3, :3], scale[a] * motion[:3, 3])
        lifted.add(Constraint(a, b, "loop", measured, np.diag([1e-6] * 3 + [1e-8] * 3 + [1e-6])))
    result = solve(lifted)
    assert result.status == "converged"
    solved = rigid_graph(result.graph).world_from_camera()

    def worst(poses):
        return np.linalg.norm(poses[:, :3, 3] - made.truth[:, :3, 3], axis=1).max()

    assert worst(graph.world_from_camera()) > 2.5
    assert worst(solved) < 0.15 * worst(graph.world_from_camera())
    scales = sim3.decompose(result.graph.world_from_camera())[0]
    assert np.abs(np.log(scales * scale)).max() < 0.1


def test_rigid_graph_is_in_world_units(laps):
    """Motions measured in drifting units, and their covariances, come out in those of the world: residuals vanish."""
    made = laps(15, lap=6, seed=None)
    graph, scale = drifting(made, 0.05)
    lifted = similarity_graph(graph, 0.05)
    exact = lifted.with_solution(
        sim3.compose(1.0 / scale, made.truth[:, :3, :3], made.truth[:, :3, 3]), lifted.constraints
    )
    rigid = rigid_graph(exact)
    assert np.abs(rigid.world_from_camera() - made.truth).max() < 1e-12
    assert solve(rigid).chi_square < 1e-12
    ratio = rigid.constraint(10).covariance[0, 0] / made.covariance[0, 0]
    assert ratio == pytest.approx(1.0 / scale[10] ** 2)
    assert rigid.constraint(10).covariance[4, 4] == pytest.approx(made.covariance[4, 4])


def test_refuses_the_wrong_group_and_deviation(laps):
    """Each direction takes its own group; a scale known perfectly is refused."""
    graph = laps(5, lap=3).graph
    with pytest.raises(OptionError, match=r"expected a graph on Sim\(3\), got one on SE\(3\)"):
        rigid_graph(graph)
    with pytest.raises(OptionError, match=r"expected a graph on SE\(3\), got one on Sim\(3\)"):
        similarity_graph(laps(5, lap=3, group=SIM3).graph, 0.1)
    with pytest.raises(OptionError, match="log_scale_sigma: expected a positive number, got 0"):
        similarity_graph(graph, 0.0)
