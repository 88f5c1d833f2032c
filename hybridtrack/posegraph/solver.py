"""Solve a pose graph with every constraint that is not rejected, and say how far the result can be trusted.

>>> import numpy as np
>>> graph = PoseGraph()
>>> for i in range(3):
...     graph.add_pose(i, 1000 * i, np.eye(4))
>>> step = np.eye(4)
>>> step[0, 3] = 1.0
>>> index = graph.add_constraint(0, 1, "odometry", step, np.eye(6))
>>> solve(graph)
Traceback (most recent call last):
hybridtrack.errors.DegenerateDataError: pose graph: expected constraints that tie segment 0 together, \
got 1 of its poses from 2 on not connected to the rest
>>> index = graph.add_constraint(1, 2, "odometry", step, np.eye(6))
>>> result = solve(graph)
>>> result.status, result.graph.pose(2).world_from_camera[:3, 3].round(9).tolist()
('converged', [2.0, 0.0, 0.0])
"""

from collections.abc import Iterable
from dataclasses import dataclass, replace

import numpy as np
from scipy.stats import chi2

from hybridtrack.posegraph.graph import Constraint, PoseGraph
from hybridtrack.posegraph.levenberg_marquardt import Minimum, SolveOptions, WeightedCost, minimise
from hybridtrack.posegraph.normal_equations import NormalEquations
from hybridtrack.posegraph.problem import PoseProblem, build_problem, whitening_of

Array = np.ndarray

KEPT_WEIGHT = 0.5


@dataclass(frozen=True, eq=False)
class SolveResult:
    """A solved graph.

    status: "converged" (no step lowers the cost any more), "stalled" (ran out of iterations or of damping) or
    "diverged" (the start already overflows). `chi_square` sums weight times r' C^-1 r over the constraints that were
    used; under true covariances and no loss it averages `dof`. `weights` has one entry a constraint of the graph, 0
    where it was not used.
    """

    graph: PoseGraph
    status: str
    iterations: int
    chi_square: float
    dof: int
    weights: Array

    @property
    def p_value(self) -> float | None:
        """Chance of a larger chi-square under the stated covariances; None without redundancy."""
        return float(chi2.sf(self.chi_square, self.dof)) if self.dof > 0 else None


def active_indices(graph: PoseGraph) -> list[int]:
    """Indices of the constraints whose verdict is not "rejected"."""
    return [i for i, constraint in enumerate(graph.constraints) if constraint.verdict != "rejected"]


def chi_squares_of(graph: PoseGraph, constraints: Iterable[Constraint], world_from: dict[int, Array]) -> Array:
    """r' C^-1 r (M,) of constraints at the given poses by id (the world included)."""
    chosen = list(constraints)
    group = graph.group
    world_from_a = np.array([world_from[c.from_id] for c in chosen]).reshape(-1, 4, 4)
    world_from_b = np.array([world_from[c.to_id] for c in chosen]).reshape(-1, 4, 4)
    measured = np.array([c.from_from_to for c in chosen]).reshape(-1, 4, 4)
    raw = group.log(group.inverse(measured) @ group.inverse(world_from_a) @ world_from_b)
    with np.errstate(over="ignore", invalid="ignore"):
        return np.sum((whitening_of(chosen, group.dimension) @ raw[..., None])[..., 0] ** 2, axis=1)


def _verdict(weight: float, untestable: bool) -> str:
    if untestable:
        return "untested"
    return "kept" if weight >= KEPT_WEIGHT else "down-weighted"


def judged(graph: PoseGraph, problem: PoseProblem, minimum: Minimum) -> SolveResult:
    """Put a minimum back into a copy of the graph: poses, chi-squares, and a verdict on every constraint used.

    A constraint in no cycle stays "untested". Constraints not used are "rejected"; their chi-square is given where both
    ends share one component.
    """
    poses = minimum.poses[:-1]
    world_from = dict(zip(graph.ids, poses, strict=True)) | {-1: np.eye(4)}
    used = problem.used.tolist()
    taken = set(used)
    weights = np.zeros(len(graph.constraints))
    weights[problem.used] = minimum.weights
    untestable = graph.untestable(used)
    component = {i: number for number, members in enumerate(graph.components(used)) for i in members}
    values = chi_squares_of(graph, graph.constraints, world_from)
    constraints = []
    for index, constraint in enumerate(graph.constraints):
        if index in taken:
            verdict = _verdict(weights[index], index in untestable)
        else:
            verdict = "rejected"
        comparable = component[constraint.from_id] == component[constraint.to_id]
        chi_square = float(values[index]) if comparable and np.isfinite(values[index]) else None
        constraints.append(replace(constraint, chi_square=chi_square, verdict=verdict))
    return SolveResult(
        graph=graph.with_solution(poses, constraints),
        status=minimum.status,
        iterations=minimum.iterations,
        chi_square=float(minimum.weights @ minimum.chi_squares),
        dof=problem.degrees_of_freedom,
        weights=weights,
    )


def solve(graph: PoseGraph, options: SolveOptions | None = None) -> SolveResult:
    """Minimise the graph's cost from its present poses over all constraints not rejected; the graph is not changed.

    One pose is held in every component that no prior ties to the world. Raises DegenerateDataError where the graph is
    empty or a segment falls apart.
    """
    chosen = options or SolveOptions()
    problem = build_problem(graph, active_indices(graph))
    robust = np.array([graph.constraint(i).kind in chosen.robust_kinds for i in problem.used], dtype=bool)
    weighting = WeightedCost(chosen.loss, robust, np.ones(len(problem.used)))
    minimum = minimise(problem, problem.start, weighting, chosen, NormalEquations(problem))
    return judged(graph, problem, minimum)
