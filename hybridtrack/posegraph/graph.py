"""The pose graph: poses as nodes, relative measurements as edges of a networkx MultiDiGraph.

A constraint from a to b measures `a_from_b` = inv(world_from_a) @ world_from_b. Its covariance belongs to a
perturbation on the right of that measurement, in the tangent order of the group. A prior measures world_from_b: it is
an edge from the node `WORLD`, which is the fixed identity, so that components, trees and gauges need no special case
for priors.
"""

from collections.abc import Iterable
from dataclasses import dataclass, field, replace
from typing import Any, Final

import networkx as nx
import numpy as np

from hybridtrack.errors import DegenerateDataError, OptionError, ShapeError
from hybridtrack.posegraph.group import SE3, Group

Array = np.ndarray

WORLD: Final = -1
VERDICTS: Final = ("kept", "down-weighted", "rejected", "untested")
SMALLEST_CORRELATION_EIGENVALUE = 1e-12


def checked_covariance(covariance: Array, dimension: int, name: str) -> Array:
    """Return a symmetric positive definite (d, d) covariance.

    Raises ShapeError for a wrong shape or asymmetry, DegenerateDataError where it is singular or indefinite: such a
    constraint would claim perfect knowledge in some direction.
    """
    matrix = np.array(covariance, dtype=np.float64)
    if matrix.shape != (dimension, dimension) or not np.isfinite(matrix).all():
        raise ShapeError(f"{name}: expected a finite covariance ({dimension}, {dimension}), got {matrix.shape}")
    deviation = np.sqrt(np.maximum(np.diag(matrix), 0.0))
    if (deviation == 0.0).any():
        raise DegenerateDataError(
            f"{name}: expected a positive definite covariance, got variances {np.diag(matrix).tolist()}"
        )
    correlation = matrix / np.outer(deviation, deviation)
    if np.abs(correlation - correlation.T).max() > 1e-6:
        raise ShapeError(f"{name}: expected a symmetric covariance, got an asymmetric one")
    smallest = float(np.linalg.eigvalsh(correlation)[0])
    if smallest < SMALLEST_CORRELATION_EIGENVALUE:
        raise DegenerateDataError(
            f"{name}: expected a positive definite covariance, got one that is singular "
            f"(smallest eigenvalue of its correlation {smallest:.1e})"
        )
    return 0.5 * (matrix + matrix.T)


@dataclass(frozen=True, eq=False)
class Constraint:
    """One relative measurement; `from_id` is `WORLD` for a prior.

    `chi_square` is r' C^-1 r at the poses it was last solved for, None before; `extra` holds fields of a file that this
    package does not know.
    """

    from_id: int
    to_id: int
    kind: str
    from_from_to: Array
    covariance: Array
    chi_square: float | None = None
    verdict: str = "untested"
    extra: dict[str, Any] = field(default_factory=dict)

    @property
    def name(self) -> str:
        """How messages call this constraint."""
        start = "world" if self.from_id == WORLD else f"pose {self.from_id}"
        return f"{self.kind} constraint from {start} to pose {self.to_id}"


@dataclass(frozen=True, eq=False)
class Pose:
    """One node: a camera pose with its stamp and the segment it belongs to."""

    id: int
    t_ns: int
    world_from_camera: Array
    segment: int = 0
    extra: dict[str, Any] = field(default_factory=dict)


class PoseGraph:
    """Poses and constraints on one group. Poses keep the order in which they were added, constraints their index."""

    def __init__(self, group: Group = SE3) -> None:
        self.group = group
        self.extra: dict[str, Any] = {}
        self._poses: dict[int, Pose] = {}
        self._constraints: list[Constraint] = []
        self._network = nx.MultiDiGraph()

    def __len__(self) -> int:
        return len(self._poses)

    def __contains__(self, pose_id: int) -> bool:
        return pose_id in self._poses

    @property
    def ids(self) -> tuple[int, ...]:
        """Ids of all poses, in the order in which they were added."""
        return tuple(self._poses)

    @property
    def poses(self) -> tuple[Pose, ...]:
        """All poses, in the order in which they were added."""
        return tuple(self._poses.values())

    @property
    def constraints(self) -> tuple[Constraint, ...]:
        """All constraints; positions in this tuple are the constraint indices."""
        return tuple(self._constraints)

    def constraint(self, index: int) -> Constraint:
        """The constraint of that index."""
        return self._constraints[index]

    @property
    def network(self) -> nx.MultiDiGraph:
        """The networkx graph; edges are keyed by constraint index. Read it, never change it."""
        return self._network

    def pose(self, pose_id: int) -> Pose:
        """The pose of that id. Raises OptionError where there is none."""
        if pose_id not in self._poses:
            raise OptionError(f"pose graph: expected the id of one of its {len(self)} poses, got {pose_id}")
        return self._poses[pose_id]

    def world_from_camera(self, ids: Iterable[int] | None = None) -> Array:
        """Poses (N, 4, 4) of the given ids, or of all."""
        chosen = self.ids if ids is None else tuple(ids)
        return np.array([self.pose(i).world_from_camera for i in chosen]).reshape(-1, 4, 4)

    def add_pose(self, pose_id: int, t_ns: int, world_from_camera: Array, segment: int = 0, **extra: Any) -> None:
        """Add a node. Ids are whole numbers from 0, each used once. Raises OptionError, ShapeError."""
        if int(pose_id) != pose_id or pose_id < 0:
            raise OptionError(f"pose id: expected a whole number from 0, got {pose_id}")
        if pose_id in self._poses:
            raise OptionError(f"pose id: expected one not in the graph, got {pose_id} a second time")
        matrix = self.group.checked(world_from_camera, f"pose {pose_id}")
        self._poses[int(pose_id)] = Pose(int(pose_id), int(t_ns), matrix, int(segment), extra)
        self._network.add_node(int(pose_id))

    def add(self, constraint: Constraint) -> int:
        """Add a constraint between poses that are in the graph and return its index.

        Raises OptionError (unknown id, equal ends, unknown verdict), ShapeError, DegenerateDataError (singular).
        """
        ends = (constraint.from_id, constraint.to_id)
        for end in ends:
            if end not in self._poses and end != WORLD:
                raise OptionError(f"{constraint.name}: expected poses of the graph, got the unknown id {end}")
        if ends[0] == ends[1] or ends[1] == WORLD:
            raise OptionError(f"{constraint.name}: expected two different poses, or from the world to a pose")
        if constraint.verdict not in VERDICTS:
            raise OptionError(f"{constraint.name}: expected a verdict of {VERDICTS}, got {constraint.verdict!r}")
        valid = replace(
            constraint,
            from_from_to=self.group.checked(constraint.from_from_to, constraint.name),
            covariance=checked_covariance(constraint.covariance, self.group.dimension, constraint.name),
        )
        self._network.add_edge(*ends, key=len(self._constraints))
        self._constraints.append(valid)
        return len(self._constraints) - 1

    def add_constraint(self, from_id: int, to_id: int, kind: str, from_from_to: Array, covariance: Array) -> int:
        """Add a measurement of inv(world_from_from) @ world_from_to and return its index; raises as `add`."""
        return self.add(Constraint(from_id, to_id, kind, from_from_to, covariance))

    def add_prior(self, pose_id: int, world_from_camera: Array, covariance: Array) -> int:
        """Add a measurement of the pose itself and return its index; raises as `add`."""
        return self.add(Constraint(WORLD, pose_id, "prior", world_from_camera, covariance))

    def with_solution(self, world_from_camera: Array, constraints: Iterable[Constraint]) -> "PoseGraph":
        """A copy with other poses (N, 4, 4), in the order of `ids`, and other verdicts on the same constraints."""
        copy = PoseGraph(self.group)
        copy.extra = dict(self.extra)
        for pose, matrix in zip(self._poses.values(), world_from_camera, strict=True):
            copy._poses[pose.id] = replace(pose, world_from_camera=matrix)
        copy._constraints = list(constraints)
        copy._network = self._network.copy()
        return copy

    def with_scaled_covariances(self, kinds: Iterable[str], factor: float) -> "PoseGraph":
        """A copy in which the covariances of the given kinds of constraint are `factor` times as large."""
        if not (np.isfinite(factor) and factor > 0.0):
            raise OptionError(f"factor: expected a positive number, got {factor}")
        chosen = set(kinds)
        scaled = [replace(c, covariance=factor * c.covariance) if c.kind in chosen else c for c in self._constraints]
        return self.with_solution(self.world_from_camera(), scaled)

    def subnetwork(self, indices: Iterable[int]) -> nx.MultiDiGraph:
        """All nodes with only the chosen constraints, as a networkx graph keyed by constraint index."""
        chosen = nx.MultiDiGraph()
        chosen.add_nodes_from(self._network.nodes)
        for index in indices:
            constraint = self._constraints[index]
            chosen.add_edge(constraint.from_id, constraint.to_id, key=index)
        return chosen

    def components(self, indices: Iterable[int] | None = None) -> list[set[int]]:
        """Sets of ids tied together by the chosen constraints (all if None); priors tie through `WORLD`."""
        network = self._network if indices is None else self.subnetwork(indices)
        return [set(component) for component in nx.weakly_connected_components(network)]

    def untestable(self, indices: Iterable[int] | None = None) -> set[int]:
        """Indices of constraints in no cycle: nothing else in the graph can contradict them."""
        chosen = set(range(len(self._constraints)) if indices is None else indices)
        plain = nx.Graph()
        doubled = set()
        for index in chosen:
            constraint = self._constraints[index]
            ends = (constraint.from_id, constraint.to_id)
            if plain.has_edge(*ends):
                doubled |= {index, plain.edges[ends]["index"]}
            else:
                plain.add_edge(*ends, index=index)
        return {plain.edges[ends]["index"] for ends in nx.bridges(plain)} - doubled

    def cycles(self, indices: Iterable[int] | None = None) -> list[list[int]]:
        """A basis of the cycles of the chosen constraints, each as a list of ids (Paton 1969, by networkx)."""
        network = self._network if indices is None else self.subnetwork(indices)
        return nx.cycle_basis(nx.Graph(network))
