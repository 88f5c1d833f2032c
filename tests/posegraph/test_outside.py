"""The solver against programs from outside the project, on the same graphs.

- scipy's `expm`, `logm` and `least_squares` (scipy 1.17): a general nonlinear solver on residuals written out with
  matrix functions, no code of this package.
- Open3D's `pipelines.registration.global_optimization` (Open3D 0.19): a dense pose-graph optimiser. Its edge from
source to target   holds inv(inv(T_source) T_target); its information matrix is ordered rotation, translation and acts
on a first-order error of   Z inv(T_source^-1 T_target), so that minima agree to first order in the noise only.
"""

import warnings

import numpy as np
import pytest
from scipy.linalg import expm, logm
from scipy.optimize import least_squares

from hybridtrack.geometry import se3
from hybridtrack.posegraph import SE3, SIM3, solve

pytestmark = pytest.mark.outside


def algebra(xi):
    """Matrix (4, 4) of a tangent vector of six or seven numbers."""
    v, w = xi[:3], xi[3:6]
    s = xi[6] if len(xi) == 7 else 0.0
    return np.array([[s, -w[2], w[1], v[0]], [w[2], s, -w[0], v[1]], [-w[1], w[0], s, v[2]], [0.0, 0.0, 0.0, 0.0]])


def tangent(matrix, dimension):
    """Tangent vector of a group element by scipy's matrix logarithm."""
    m = np.real(logm(matrix))
    turn = [0.5 * (m[2, 1] - m[1, 2]), 0.5 * (m[0, 2] - m[2, 0]), 0.5 * (m[1, 0] - m[0, 1])]
    return np.array([*m[:3, 3], *turn, np.trace(m[:3, :3]) / 3.0])[:dimension]


@pytest.mark.parametrize("group", [SE3, SIM3], ids=["SE3", "Sim3"])
def test_agrees_with_a_general_least_squares_solver(laps, group):
    """Same poses to 1e-6 and same chi-square on a noisy graph with correlated covariances, started at the truth."""
    d = group.dimension
    made = laps(5, lap=3, seed=11, group=group, every=1, size=3.0)
    mixing = np.random.default_rng(7).normal(size=(d, d))
    covariance = made.covariance + 0.2 * np.diag(np.sqrt(np.diag(made.covariance))) @ mixing @ mixing.T @ np.diag(
        np.sqrt(np.diag(made.covariance))
    )
    graph = made.graph
    for c in [c for c in graph.constraints if c.kind == "loop"]:
        graph.add_constraint(c.to_id, c.from_id, "loop", np.linalg.inv(c.from_from_to), covariance)
    whitening = [np.linalg.inv(np.linalg.cholesky(c.covariance)) for c in graph.constraints]

    def poses_of(numbers):
        moved = [made.truth[i + 1] @ expm(algebra(xi)) for i, xi in enumerate(numbers.reshape(4, d))]
        return [made.truth[0], *moved]

    def residual(numbers):
        poses = poses_of(numbers)
        parts = []
        for c, white in zip(graph.constraints, whitening, strict=True):
            relative = np.linalg.inv(poses[c.from_id]) @ poses[c.to_id]
            parts.append(white @ tangent(np.linalg.inv(c.from_from_to) @ relative, d))
        return np.concatenate(parts)

    fit = least_squares(residual, np.zeros(4 * d), method="lm", xtol=1e-12, ftol=1e-12)
    result = solve(graph)
    assert result.status == "converged"
    assert np.abs(result.graph.world_from_camera() - np.array(poses_of(fit.x))).max() < 1e-6
    assert result.chi_square == pytest.approx(2.0 * fit.cost, rel=1e-8)


def open3d_poses(graph):
    """Poses (N, 4, 4) by Open3D, the first one held."""
    with warnings.catch_warnings():
        # Open3D and what it imports warn about missing GPUs and deprecated calls of their own.
        warnings.simplefilter("ignore")
        o3d = pytest.importorskip("open3d")
    registration = o3d.pipelines.registration
    theirs = registration.PoseGraph()
    for pose in graph.poses:
        theirs.nodes.append(registration.PoseGraphNode(pose.world_from_camera))
    swap = [3, 4, 5, 0, 1, 2]
    for c in graph.constraints:
        back = se3.adjoint(np.linalg.inv(c.from_from_to))
        information = (back.T @ np.linalg.inv(c.covariance) @ back)[np.ix_(swap, swap)]
        theirs.edges.append(
            registration.PoseGraphEdge(c.from_id, c.to_id, np.linalg.inv(c.from_from_to), information, uncertain=False)
        )
    criteria = registration.GlobalOptimizationConvergenceCriteria()
    criteria.max_iteration = 200
    criteria.min_relative_increment = criteria.min_relative_residual_increment = 1e-14
    registration.global_optimization(
        theirs,
        registration.GlobalOptimizationLevenbergMarquardt(),
        criteria,
        registration.GlobalOptimizationOption(
            max_correspondence_distance=1.0, edge_prune_threshold=0.0, reference_node=0
        ),
    )
    return np.array([node.pose for node in theirs.nodes])


def test_agrees_with_open3d(laps):
    """Poses agree to a small share of the correction, and the better for less noise: second order in it."""
    shares = []
    for size in (1.0, 0.1):
        made = laps(60, lap=20, seed=5, size=size)
        ours = solve(made.graph).graph.world_from_camera()
        correction = np.abs(ours - made.graph.world_from_camera()).max()
        shares.append(np.abs(ours - open3d_poses(made.graph)).max() / correction)
    assert shares[0] < 0.02
    assert shares[1] < 0.002
