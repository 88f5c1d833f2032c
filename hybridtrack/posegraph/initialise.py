"""Starting poses for the solver: along a spanning tree, or by the chordal relaxation of Carlone et al. 2015.

Chordal. Rotations minimise sum w |R_a Z - R_b|^2 (Frobenius) over unconstrained 3 x 3 matrices, a linear problem in
which the three rows of all R share one sparse matrix; each is then projected to the nearest rotation. With rotations
known, log scales (on Sim(3)) and positions, t_b - t_a = s_a R_a t_Z, are linear too. One pose a component is held
where it is.
"""

from collections.abc import Iterable, Iterator

import networkx as nx
import numpy as np
from scipy.sparse import bsr_matrix, coo_matrix, csc_matrix
from scipy.sparse.linalg import splu

from hybridtrack.errors import DegenerateDataError
from hybridtrack.geometry import sim3, so3
from hybridtrack.posegraph.graph import WORLD, PoseGraph
from hybridtrack.posegraph.problem import PoseProblem, build_problem, gauge

Array = np.ndarray

# Added to the edge length of loops, so that a tree uses one only where nothing else ties two parts together.
LOOP_LENGTH = 1e6


def spanning_forest(graph: PoseGraph, indices: Iterable[int]) -> nx.Graph:
    """Minimum spanning forest of the chosen constraints; each edge has its constraint's `index`.

    An edge's length is the log determinant of its covariance: the tree keeps the most certain constraints, and loops
    only where there is no other way.
    """
    plain = nx.Graph()
    plain.add_nodes_from(graph.network.nodes)
    for index in indices:
        constraint = graph.constraint(index)
        ends = (constraint.from_id, constraint.to_id)
        length = float(np.linalg.slogdet(constraint.covariance)[1]) + LOOP_LENGTH * (constraint.kind == "loop")
        if not plain.has_edge(*ends) or length < plain.edges[ends]["length"]:
            plain.add_edge(*ends, length=length, index=index)
    return nx.minimum_spanning_tree(plain, weight="length")


def tree_steps(graph: PoseGraph, forest: nx.Graph, roots: Iterable[int]) -> Iterator[tuple[int, int, int]]:
    """Yield (parent, child, constraint index) from the roots outwards, parents before children."""
    for root in roots:
        for parent, child in nx.bfs_edges(forest, root):
            yield parent, child, forest.edges[parent, child]["index"]


def spanning_tree_poses(graph: PoseGraph, indices: Iterable[int]) -> Array:
    """Poses (N, 4, 4) in the order of `graph.ids`, chained along the most certain constraints.

    The pose that fixes each component keeps its place. Raises DegenerateDataError where a segment falls apart.
    """
    chosen = list(indices)
    held = sorted(gauge(graph, chosen) & set(graph.network.nodes))
    world_from = {i: np.eye(4) if i == WORLD else graph.pose(i).world_from_camera for i in held}
    forest = spanning_forest(graph, chosen)
    for parent, child, index in tree_steps(graph, forest, held):
        constraint = graph.constraint(index)
        step = constraint.from_from_to
        if constraint.from_id != parent:
            step = graph.group.inverse(step)
        world_from[child] = world_from[parent] @ step
    return graph.group.orthonormal(np.array([world_from[i] for i in graph.ids]))


def _incidence(problem: PoseProblem) -> csc_matrix:
    """(M, N): -1 at a, +1 at b."""
    count = len(problem.a)
    rows = np.arange(count)
    values = np.r_[-np.ones(count), np.ones(count)]
    return coo_matrix(
        (values, (np.r_[rows, rows], np.r_[problem.a, problem.b])), shape=(count, len(problem.start))
    ).tocsc()


def _solved_from_fixed(design: csc_matrix, target: Array, weights: Array, known: Array, values: Array) -> Array:
    """Weighted least squares of design @ x = target where the rows of x marked `known` are given in `values`."""
    free = ~known
    reduced = design[:, np.flatnonzero(free)]
    remaining = target - design[:, np.flatnonzero(known)] @ values[known]
    normal = (reduced.T.multiply(weights) @ reduced).tocsc()
    result = values.copy()
    if not free.any():
        return result
    try:
        factors = splu(normal, permc_spec="MMD_AT_PLUS_A", options={"SymmetricMode": True})
    except RuntimeError:
        raise DegenerateDataError(
            "pose graph: expected constraints that determine every pose, got singular chordal equations"
        ) from None
    result[free] = factors.solve(reduced.T @ (weights[:, None] * remaining))
    return result


def _chordal_rotations(problem: PoseProblem, relative: Array, held: Array, weights: Array) -> Array:
    """Rotations (N, 3, 3): rows of R solve Z' R_a' - R_b' = 0, three right-hand sides at once."""
    count, poses = len(problem.a), len(held)
    blocks = np.stack([relative.swapaxes(1, 2), np.broadcast_to(-np.eye(3), (count, 3, 3))], axis=1)
    columns = np.stack([problem.a, problem.b], axis=1)
    flat, order = blocks.reshape(-1, 3, 3), columns.ravel()
    design = bsr_matrix((flat, order, np.arange(count + 1) * 2), shape=(3 * count, 3 * poses)).tocsc()
    known = np.repeat(problem.fixed, 3)
    solution = _solved_from_fixed(
        design, np.zeros((3 * count, 3)), np.repeat(weights, 3), known, held.swapaxes(1, 2).reshape(-1, 3)
    )
    return so3.project_to_rotation(solution.reshape(-1, 3, 3).swapaxes(1, 2))


def chordal_poses(graph: PoseGraph, indices: Iterable[int]) -> Array:
    """Poses (N, 4, 4) in the order of `graph.ids` from the chordal relaxation over the chosen constraints.

    Every chosen constraint counts, so leave out loops that may be wrong. Raises DegenerateDataError where a segment
    falls apart.
    """
    problem = build_problem(graph, indices)
    constraints = [graph.constraint(i) for i in problem.used]
    measured = np.array([c.from_from_to for c in constraints]).reshape(-1, 4, 4)
    scale, rotation, translation = sim3.decompose(measured)
    held_scale, held_rotation, held_translation = sim3.decompose(problem.start)
    variances = np.array([np.diag(c.covariance) for c in constraints]).reshape(-1, graph.group.dimension)
    rotations = _chordal_rotations(problem, rotation, held_rotation, 1.0 / variances[:, 3:6].sum(axis=1))
    difference = _incidence(problem)
    by_position = 1.0 / variances[:, :3].sum(axis=1)
    log_scales = np.zeros((len(rotations), 1))
    if graph.group.dimension == 7:
        log_scales = _solved_from_fixed(
            difference,
            np.log(scale)[:, None],
            1.0 / variances[:, 6],
            problem.fixed,
            np.log(held_scale)[:, None],
        )
    scales = np.exp(log_scales[:, 0])
    offsets = scales[problem.a, None] * (rotations[problem.a] @ translation[..., None])[..., 0]
    positions = _solved_from_fixed(difference, offsets, by_position, problem.fixed, held_translation)
    return sim3.compose(scales, rotations, positions)[:-1]
