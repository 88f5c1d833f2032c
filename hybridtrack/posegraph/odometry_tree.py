"""Chained motion and its covariance between any two poses of a spanning forest, in constant time a pair.

With X_k the pose of node k in the frame of its root, the noise of the tree edge into node j, right perturbation with
covariance C_j, displaces every later node by Ad(X_j) C_j Ad(X_j)' seen from the root. So S_k, the sum of these along
the path from the root, is additive, and the path between k and m has, in root coordinates,

    S_km = S_k + S_m - 2 S_l,    l the lowest common ancestor.                                               (1)

To first order in the noise: on a path whose accumulated turn is uncertain by more than about 0.3 rad it is a guess.
"""

from collections.abc import Iterable
from dataclasses import dataclass

import numpy as np

from hybridtrack.posegraph.graph import WORLD, PoseGraph
from hybridtrack.posegraph.initialise import spanning_forest, tree_steps

Array = np.ndarray


@dataclass(frozen=True, eq=False)
class OdometryTree:
    """Rows are poses in the order of `graph.ids`, then the world.

    `root_from` (N, 4, 4), `spread` (N, d, d) is S of the module docstring, `component` (N,) numbers the trees,
    `ancestors` (levels, N) are the rows 1, 2, 4, ... steps towards the root, `depth` (N,).
    """

    row: dict[int, int]
    root_from: Array
    spread: Array
    component: Array
    depth: Array
    ancestors: Array

    def meeting(self, k: Array, m: Array) -> Array:
        """Rows of the lowest common ancestors of rows `k` and `m` of one tree (binary lifting)."""
        deep, high = (
            np.where(self.depth[k] >= self.depth[m], k, m),
            np.where(self.depth[k] >= self.depth[m], m, k),
        )
        lag = self.depth[deep] - self.depth[high]
        for level, table in enumerate(self.ancestors):
            deep = np.where((lag >> level) & 1 == 1, table[deep], deep)
        for table in self.ancestors[::-1]:
            apart = table[deep] != table[high]
            deep, high = np.where(apart, table[deep], deep), np.where(apart, table[high], high)
        return np.where(deep == high, deep, self.ancestors[0][deep])

    def path_spread(self, k: Array, m: Array) -> Array:
        """Covariance (..., d, d) of the path between rows `k` and `m`, in root coordinates, equation (1)."""
        return self.spread[k] + self.spread[m] - 2.0 * self.spread[self.meeting(k, m)]

    def hops(self, k: Array, m: Array) -> Array:
        """Number of edges between rows `k` and `m`."""
        return self.depth[k] + self.depth[m] - 2 * self.depth[self.meeting(k, m)]


def _lifting_table(parent: Array, depth: Array) -> Array:
    levels = max(1, int(depth.max(initial=0)).bit_length())
    table = [parent]
    for _ in range(levels - 1):
        table.append(table[-1][table[-1]])
    return np.array(table)


def odometry_tree(graph: PoseGraph, trusted: Iterable[int]) -> OdometryTree:
    """Chain the trusted constraints along their minimum spanning forest."""
    group = graph.group
    row = {pose_id: number for number, pose_id in enumerate((*graph.ids, WORLD))}
    count = len(row)
    root_from = np.broadcast_to(np.eye(4), (count, 4, 4)).copy()
    spread = np.zeros((count, group.dimension, group.dimension))
    parent, depth = np.arange(count), np.zeros(count, dtype=np.int64)
    component = np.zeros(count, dtype=np.int64)
    chosen = list(trusted)
    trees = graph.components(chosen)
    roots = [WORLD if WORLD in tree else min(tree) for tree in trees]
    for number, tree in enumerate(trees):
        component[[row[i] for i in tree]] = number
    component[row[WORLD]] = component[row[WORLD]] if WORLD in graph.network else len(trees)
    for start, end, index in tree_steps(graph, spanning_forest(graph, chosen), roots):
        constraint = graph.constraint(index)
        here, there = row[start], row[end]
        forward = constraint.from_id == start
        motion = constraint.from_from_to if forward else group.inverse(constraint.from_from_to)
        root_from[there] = root_from[here] @ motion
        # The covariance sits at the constraint's `to` end, wherever the root is.
        adjoint = group.adjoint(root_from[there if forward else here])
        spread[there] = spread[here] + adjoint @ constraint.covariance @ adjoint.T
        parent[there], depth[there] = here, depth[here] + 1
    return OdometryTree(row, root_from, spread, component, depth, _lifting_table(parent, depth))
