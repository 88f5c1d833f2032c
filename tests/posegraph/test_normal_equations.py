"""Sparse normal equations against dense ones."""

import numpy as np
import pytest

from hybridtrack.posegraph import SE3, SIM3
from hybridtrack.posegraph.normal_equations import NormalEquations
from hybridtrack.posegraph.problem import build_problem, linearise


def dense_jacobian(problem, line):
    """(M d, free d) in the order of the problem's free poses."""
    d, free = problem.group.dimension, np.flatnonzero(~problem.fixed)
    column = {row: number for number, row in enumerate(free)}
    result = np.zeros((len(problem.a), d, len(free), d))
    for m, (a, b) in enumerate(zip(problem.a, problem.b, strict=True)):
        if a in column:
            result[m, :, column[a], :] += line.by_a[m]
        if b in column:
            result[m, :, column[b], :] += line.by_b[m]
    return result.reshape(len(problem.a) * d, len(free) * d)


@pytest.mark.parametrize("group", [SE3, SIM3], ids=["SE3", "Sim3"])
@pytest.mark.parametrize("prior", [False, True])
def test_solution_equals_dense_weighted_least_squares(laps, group, prior):
    """The sparse step, with weights, doubled constraints and damping, is the dense step."""
    made = laps(15, lap=6, group=group, every=2)
    graph = made.graph
    graph.add_constraint(0, 6, "loop", made.measured(0, 6, np.zeros(group.dimension)), made.covariance)
    if prior:
        graph.add_prior(4, graph.pose(4).world_from_camera, made.covariance)
    problem = build_problem(graph, range(len(graph.constraints)))
    line = linearise(problem, problem.start)
    weights = np.random.default_rng(2).uniform(0.1, 1.0, len(problem.a))
    equations = NormalEquations(problem)
    blocks, gradient = equations.hessian_blocks(line, weights), equations.gradient(line, weights)
    damping = 0.1 * equations.diagonal(blocks)
    step = equations.in_pose_order(-equations.factorised(blocks, damping).solve(gradient)).ravel()
    jacobian = dense_jacobian(problem, line)
    by_row = np.repeat(weights, group.dimension)[:, None]
    hessian = jacobian.T @ (by_row * jacobian)
    expected = np.linalg.solve(
        hessian + 0.1 * np.diag(np.diag(hessian)), -jacobian.T @ (by_row[:, 0] * line.residual.ravel())
    )
    assert np.abs(step - expected).max() < 1e-9 * np.abs(expected).max()


def test_order_is_a_permutation_that_keeps_fill_low(laps):
    """On a chain with loops the ordering fills in far less than the order of time does."""
    problem = build_problem(laps(400, lap=40, seed=None).graph, range(399 + 72))
    equations = NormalEquations(problem)
    assert sorted(equations.position[equations.position >= 0].tolist()) == list(range(399))
    line = linearise(problem, problem.start)
    ordered = equations.factorised(equations.hessian_blocks(line, np.ones(len(problem.a)))).L.nnz
    dense_band = 399 * 6 * 40 * 6
    assert ordered < 0.5 * dense_band


def test_singular_equations_give_none(laps):
    """Weights of zero leave nothing to solve for; the caller is told."""
    problem = build_problem(laps(6, lap=3).graph, range(5))
    equations = NormalEquations(problem)
    line = linearise(problem, problem.start)
    assert equations.factorised(equations.hessian_blocks(line, np.zeros(5))) is None
