"""A pose graph as arrays: whitened residuals and their analytic Jacobians.

Residual of a constraint Z from a to b:  r = log(Z^-1 D),  D = T_a^-1 T_b.                                    (1)
Under T_a exp(x_a), T_b exp(x_b):  D becomes exp(-x_a) D exp(x_b) = D exp(-Ad(D^-1) x_a) exp(x_b), so that
dr/dx_b = J_r(r)^-1,  dr/dx_a = -J_r(r)^-1 Ad(D^-1).                                                         (2)
A measurement Z = Z_true exp(n) gives r = -n to first order, so the covariance of n whitens r directly.
"""

from collections.abc import Iterable
from dataclasses import dataclass

import numpy as np

from hybridtrack.errors import DegenerateDataError
from hybridtrack.posegraph.graph import WORLD, Constraint, PoseGraph
from hybridtrack.posegraph.group import Group

Array = np.ndarray


@dataclass(frozen=True, eq=False)
class PoseProblem:
    """N poses (row N - 1 is the world where there are priors) and M constraints.

    `start` (N, 4, 4), `fixed` (N,) bool, `a` and `b` (M,) rows, `measured_inverse` (M, 4, 4), `whitening` (M, d, d):
    the inverse of the lower Cholesky factor of each covariance; `used` (M,): constraint indices in the graph.
    """

    group: Group
    start: Array
    fixed: Array
    a: Array
    b: Array
    measured_inverse: Array
    whitening: Array
    used: Array

    @property
    def degrees_of_freedom(self) -> int:
        """Numbers measured less numbers estimated."""
        return self.group.dimension * (len(self.a) - int((~self.fixed).sum()))


@dataclass(frozen=True, eq=False)
class Linearisation:
    """Whitened residuals (M, d) and their Jacobians (M, d, d) by the perturbations of both ends."""

    residual: Array
    by_a: Array
    by_b: Array


def whitening_of(constraints: Iterable[Constraint], dimension: int) -> Array:
    """Matrices L^-1 (M, d, d) with covariance = L L'."""
    covariances = np.array([c.covariance for c in constraints]).reshape(-1, dimension, dimension)
    return np.linalg.inv(np.linalg.cholesky(covariances))


def gauge(graph: PoseGraph, indices: Iterable[int]) -> set[int]:
    """Ids held fixed: the earliest pose of every component that no prior ties to the world.

    Raises DegenerateDataError where a segment falls apart: its poses claim one frame that no constraint gives them.
    """
    held = {WORLD}
    component_of_segment: dict[int, int] = {}
    for number, component in enumerate(graph.components(indices)):
        members = [graph.pose(i) for i in component if i != WORLD]
        for pose in members:
            if component_of_segment.setdefault(pose.segment, number) != number:
                first = min(members, key=lambda p: (p.t_ns, p.id))
                raise DegenerateDataError(
                    f"pose graph: expected constraints that tie segment {pose.segment} together, "
                    f"got {len(members)} of its poses from {first.id} on not connected to the rest"
                )
        if WORLD not in component:
            held.add(min(members, key=lambda p: (p.t_ns, p.id)).id)
    return held


def build_problem(graph: PoseGraph, indices: Iterable[int]) -> PoseProblem:
    """Stack the graph and the chosen constraints into arrays. Raises DegenerateDataError (empty, disconnected)."""
    used = np.array(sorted(indices), dtype=np.int64)
    if len(graph) == 0:
        raise DegenerateDataError("pose graph: expected at least one pose, got none")
    held = gauge(graph, used.tolist())
    row = {pose_id: number for number, pose_id in enumerate((*graph.ids, WORLD))}
    constraints = [graph.constraint(i) for i in used]
    group = graph.group
    return PoseProblem(
        group=group,
        start=np.concatenate([graph.world_from_camera(), np.eye(4)[None]]),
        fixed=np.array([pose_id in held for pose_id in row]),
        a=np.array([row[c.from_id] for c in constraints], dtype=np.int64),
        b=np.array([row[c.to_id] for c in constraints], dtype=np.int64),
        measured_inverse=group.inverse(np.array([c.from_from_to for c in constraints]).reshape(-1, 4, 4)),
        whitening=whitening_of(constraints, group.dimension),
        used=used,
    )


def residuals(problem: PoseProblem, poses: Array) -> Array:
    """Whitened residuals (M, d) of equation (1) at `poses` (N, 4, 4)."""
    a_from_b = problem.group.inverse(poses[problem.a]) @ poses[problem.b]
    raw = problem.group.log(problem.measured_inverse @ a_from_b)
    return (problem.whitening @ raw[..., None])[..., 0]


def linearise(problem: PoseProblem, poses: Array) -> Linearisation:
    """Residuals and Jacobians, equations (1) and (2), at `poses` (N, 4, 4)."""
    group = problem.group
    a_from_b = group.inverse(poses[problem.a]) @ poses[problem.b]
    raw = group.log(problem.measured_inverse @ a_from_b)
    by_b = problem.whitening @ group.right_jacobian_inverse(raw)
    by_a = -by_b @ group.adjoint(group.inverse(a_from_b))
    return Linearisation((problem.whitening @ raw[..., None])[..., 0], by_a, by_b)


def moved(problem: PoseProblem, poses: Array, step: Array) -> Array:
    """Poses after the right perturbation `step` (free poses, d); fixed poses stay."""
    result = poses.copy()
    free = ~problem.fixed
    result[free] = poses[free] @ problem.group.exp(step)
    return result
