"""Graduated non-convexity with truncated least squares (Yang et al. 2020) over the loops of a pose graph.

Each loop costs min(s, c^2), s its chi-square. A surrogate of control parameter mu starts convex and is sharpened step
by step; at each step the weights have the closed form (14) of the paper and the poses are solved anew.
"""

from collections.abc import Sequence

import numpy as np

from hybridtrack.posegraph.graph import PoseGraph
from hybridtrack.posegraph.levenberg_marquardt import SolveOptions, WeightedCost, minimise
from hybridtrack.posegraph.loss import Quadratic
from hybridtrack.posegraph.normal_equations import NormalEquations
from hybridtrack.posegraph.problem import build_problem

Array = np.ndarray

SHARPENING = 1.4
MOST_STEPS = 100
# A loop of weight zero may be all that ties two parts together: it keeps a trace, so that the equations stay regular.
SMALLEST_WEIGHT = 1e-8


def truncated_weights(chi_squares: Array, limit: float, mu: float) -> Array:
    """Weights of truncated least squares for chi-squares (L,), `limit` = c^2 and control parameter `mu`."""
    upper, lower = (mu + 1.0) / mu * limit, mu / (mu + 1.0) * limit
    safe = np.clip(chi_squares, lower, upper)
    between = np.sqrt(limit / np.maximum(safe, 1e-300) * mu * (mu + 1.0)) - mu
    return np.where(chi_squares >= upper, 0.0, np.where(chi_squares <= lower, 1.0, np.clip(between, 0.0, 1.0)))


def graduated_weights(
    graph: PoseGraph, trusted: Sequence[int], loops: Sequence[int], limit: float, options: SolveOptions
) -> tuple[Array, Array]:
    """Weights (L,) in [0, 1] of the loops, and the poses (N, 4, 4) they lead to, in the order of `graph.ids`.

    `limit` is the chi-square c^2 above which a loop is taken for wrong.
    """
    problem = build_problem(graph, [*trusted, *loops])
    equations = NormalEquations(problem)
    at = np.searchsorted(problem.used, np.array(loops, dtype=np.int64))
    factors = np.ones(len(problem.used))
    nothing_robust = np.zeros(len(factors), dtype=bool)
    step = SolveOptions(max_iterations=min(20, options.max_iterations), relative_decrease=1e-6)
    poses, mu = problem.start, 0.0
    for _ in range(MOST_STEPS):
        minimum = minimise(problem, poses, WeightedCost(Quadratic(), nothing_robust, factors), step, equations)
        poses, chi_squares = minimum.poses, minimum.chi_squares[at]
        if mu == 0.0:
            worst = float(chi_squares.max(initial=0.0))
            if worst <= limit:
                break
            mu = limit / (2.0 * worst - limit)
        else:
            mu *= SHARPENING
        weights = truncated_weights(chi_squares, limit, mu)
        factors[at] = np.maximum(weights, SMALLEST_WEIGHT)
        if mu > 1.0 and ((weights == 0.0) | (weights == 1.0)).all():
            break
    return np.where(factors[at] <= SMALLEST_WEIGHT, 0.0, factors[at]), poses[:-1]
