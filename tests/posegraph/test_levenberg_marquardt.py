"""Levenberg-Marquardt: weights by constraint, and the gradient at its end."""

import numpy as np
import pytest

from hybridtrack.posegraph import SE3, SIM3, Huber, Quadratic, SolveOptions
from hybridtrack.posegraph.levenberg_marquardt import WeightedCost, minimise
from hybridtrack.posegraph.normal_equations import NormalEquations
from hybridtrack.posegraph.problem import build_problem, linearise


def minimised(problem, loss, robust, factors):
    weighting = WeightedCost(loss, robust, factors)
    return minimise(problem, problem.start, weighting, SolveOptions(), NormalEquations(problem))


@pytest.mark.parametrize("group", [SE3, SIM3], ids=["SE3", "Sim3"])
@pytest.mark.parametrize("loss", [Quadratic(), Huber(1.0)])
def test_ends_where_the_weighted_gradient_vanishes(laps, group, loss):
    """The gradient J'Wr at the minimum is at rounding level of its terms, with factors and a loss at work."""
    made = laps(40, lap=12, group=group)
    problem = build_problem(made.graph, range(len(made.graph.constraints)))
    count = len(problem.used)
    minimum = minimised(problem, loss, np.ones(count, bool), np.random.default_rng(0).uniform(0.2, 2.0, count))
    assert minimum.status == "converged"
    line, equations = linearise(problem, minimum.poses), NormalEquations(problem)
    gradient = equations.gradient(line, minimum.weights)
    curvature = np.sqrt(equations.diagonal(equations.hessian_blocks(line, minimum.weights)))
    # In units of each number's own deviation.
    assert np.abs(gradient / curvature).max() < 1e-4


def test_a_factor_of_zero_leaves_a_constraint_out(laps):
    """A wrong loop with factor zero changes nothing."""
    made = laps(40, lap=12, seed=None)
    wrong = made.graph.add_constraint(2, 30, "loop", np.eye(4), made.covariance)
    problem = build_problem(made.graph, range(len(made.graph.constraints)))
    factors = np.ones(len(problem.used))
    factors[wrong] = 0.0
    minimum = minimised(problem, Quadratic(), np.zeros(len(factors), bool), factors)
    assert np.abs(minimum.poses[:-1] - made.truth).max() < 1e-9
    assert minimum.weights[wrong] == 0.0


def test_recovers_from_a_start_far_away(laps):
    """Poses turned by up to 1 rad at random still lead to the truth: damping helps where Gauss-Newton overshoots."""
    made = laps(20, lap=8, seed=None)
    problem = build_problem(made.graph, range(len(made.graph.constraints)))
    rng = np.random.default_rng(4)
    start = problem.start.copy()
    start[1:-1] = start[1:-1] @ SE3.exp(rng.uniform(-1.0, 1.0, size=(19, 6)))
    weighting = WeightedCost(Quadratic(), np.zeros(len(problem.used), bool), np.ones(len(problem.used)))
    minimum = minimise(problem, start, weighting, SolveOptions(), NormalEquations(problem))
    assert minimum.status == "converged"
    assert np.abs(minimum.poses[:-1] - made.truth).max() < 1e-8
