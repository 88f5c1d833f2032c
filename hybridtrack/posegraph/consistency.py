"""Which loops agree with odometry and with one another: a maximum clique of consistent pairs (Mangelson et al. 2018).

A loop Z from a to b, with the chained poses X of its ends, says where the root of b's tree lies as seen from the root
of a's tree:  G = X_a Z X_b^-1.  Within one tree G should be the identity; two loops of the same pair of trees should
give the same G, so that G_1 G_2^-1 should be the identity within the noise of both loops and of the odometry between
their ends. A pair that fails at the stated confidence cannot both be right. The largest set of loops without such a
pair is the maximum clique of the graph of consistent pairs.
"""

from collections.abc import Sequence
from dataclasses import dataclass

import networkx as nx
import numpy as np
from scipy.stats import chi2

from hybridtrack.posegraph.graph import PoseGraph
from hybridtrack.posegraph.odometry_tree import OdometryTree, odometry_tree

Array = np.ndarray

# Exact search is exponential in the loops left after the exact reductions; above this the best of many maximal
# cliques is taken and said not to be proven largest.
EXACT_LIMIT = 60
CLIQUES_TRIED = 20_000


@dataclass(frozen=True, eq=False)
class ConsistencyResult:
    """Verdict on loops, all sequences in the order of `loops` (constraint indices).

    `kept` (L,) bool; `against_odometry` (L,) chi-square with the group's dimension in degrees of freedom, NaN where
    odometry does not tie both ends; `consistent` (L, L) bool, True also for pairs that cannot be compared; `contested`
    (L,) bool: in the largest set, but another loop would do as well in its place, so that neither is kept;
    `is_exact`: whether the clique is proven to be the largest.
    """

    loops: tuple[int, ...]
    kept: Array
    against_odometry: Array
    consistent: Array
    contested: Array
    is_exact: bool


@dataclass(frozen=True, eq=False)
class _Loops:
    """Loops oriented so that all of one pair of trees run the same way.

    Rows `a`, `b` (L,); `root_from_root` (L, 4, 4) is G; `spread` (L, d, d): the loop's own covariance in the
    coordinates of a's root; `turn` (L, d, d): Ad(G).
    """

    a: Array
    b: Array
    root_from_root: Array
    spread: Array
    turn: Array

    def part(self, index: Array) -> "_Loops":
        return _Loops(*(getattr(self, name)[index] for name in self.__dataclass_fields__))


def _oriented(graph: PoseGraph, tree: OdometryTree, loops: Sequence[int]) -> _Loops:
    group = graph.group
    a, b, measured, covariance = [], [], [], []
    for index in loops:
        constraint = graph.constraint(index)
        start, end = tree.row[constraint.from_id], tree.row[constraint.to_id]
        motion, spread = constraint.from_from_to, constraint.covariance
        stamps = [graph.pose(i).t_ns if i in graph else 0 for i in (constraint.from_id, constraint.to_id)]
        if (tree.component[start], stamps[0]) > (tree.component[end], stamps[1]):
            turn = group.adjoint(motion)
            start, end, motion, spread = end, start, group.inverse(motion), turn @ spread @ turn.T
        a.append(start)
        b.append(end)
        measured.append(motion)
        covariance.append(spread)
    rows_a, rows_b = np.array(a, dtype=np.int64), np.array(b, dtype=np.int64)
    root_from_b = tree.root_from[rows_a] @ np.array(measured).reshape(-1, 4, 4)
    root_from_root = root_from_b @ group.inverse(tree.root_from[rows_b])
    at_b = group.adjoint(root_from_b)
    spreads = at_b @ np.array(covariance).reshape(-1, group.dimension, group.dimension) @ at_b.swapaxes(1, 2)
    return _Loops(rows_a, rows_b, root_from_root, spreads, group.adjoint(root_from_root))


def _mahalanobis(residual: Array, covariance: Array) -> Array:
    return np.einsum("...i,...i->...", residual, np.linalg.solve(covariance, residual[..., None])[..., 0])


def _against_odometry(graph: PoseGraph, tree: OdometryTree, loops: _Loops) -> Array:
    """Chi-square (L,) of G against the identity; NaN between trees."""
    result = np.full(len(loops.a), np.nan)
    inside = np.flatnonzero(tree.component[loops.a] == tree.component[loops.b])
    own = loops.part(inside)
    covariance = own.spread + tree.path_spread(own.a, own.b)
    result[inside] = _mahalanobis(graph.group.log(own.root_from_root), covariance)
    return result


def _pair_chi_squares(graph: PoseGraph, tree: OdometryTree, one: _Loops, many: _Loops) -> Array:
    """Chi-square (K,) of one loop (its arrays of length 1) against each of K others of the same pair of trees.

    The odometry between the loops is the pair of disjoint paths that joins their four ends: from a to a and from b to
    b, or, where two loops of one tree follow one another, along each loop by itself.
    """
    a, b = np.broadcast_to(one.a, many.a.shape), np.broadcast_to(one.b, many.b.shape)
    between = tree.path_spread(a, many.a) + one.turn @ tree.path_spread(b, many.b) @ one.turn.swapaxes(1, 2)
    if tree.component[one.a[0]] == tree.component[one.b[0]]:
        along = tree.path_spread(a, b) + tree.path_spread(many.a, many.b)
        across_hops = tree.hops(a, many.a) + tree.hops(b, many.b)
        along_hops = tree.hops(a, b) + tree.hops(many.a, many.b)
        between = np.where((along_hops < across_hops)[:, None, None], along, between)
    difference = graph.group.log(one.root_from_root @ graph.group.inverse(many.root_from_root))
    return _mahalanobis(difference, between + one.spread + many.spread)


def _consistent_pairs(graph: PoseGraph, tree: OdometryTree, loops: _Loops, limit: float) -> Array:
    count = len(loops.a)
    consistent = np.ones((count, count), dtype=bool)
    ends = np.stack([tree.component[loops.a], tree.component[loops.b]], axis=1)
    for i in range(count):
        others = i + 1 + np.flatnonzero((ends[i + 1 :] == ends[i]).all(axis=1))
        if len(others):
            values = _pair_chi_squares(graph, tree, loops.part(np.array([i])), loops.part(others))
            consistent[i, others] = consistent[others, i] = values <= limit
    return consistent


def _greedy_clique(adjacent: Array) -> list[int]:
    """A maximal clique: again and again the vertex with most neighbours among those still possible."""
    clique: list[int] = []
    possible = np.ones(len(adjacent), dtype=bool)
    while possible.any():
        degree = np.where(possible, adjacent[:, possible].sum(axis=1), -1)
        vertex = int(np.argmax(degree))
        clique.append(vertex)
        possible &= adjacent[vertex]
        possible[vertex] = False
    return clique


def _contested(consistent: Array, kept: Array, untied: Array) -> Array:
    """Kept loops (L,) that one single loop left out contradicts, where odometry cannot say which is right."""
    outside = np.flatnonzero(~kept & untied)
    conflicts = ~consistent[outside] & kept
    decisive = conflicts[conflicts.sum(axis=1) == 1]
    return decisive.any(axis=0) & untied if len(decisive) else np.zeros_like(kept)


def maximum_clique(adjacent: Array, penalty: Array) -> tuple[list[int], bool]:
    """Largest clique of an adjacency matrix (L, L); among equals, that of the smallest sum of `penalty` (L,) in [0, 1].

    Returns its members and whether it is proven largest. Vertices with too few neighbours to beat a greedy clique are
    dropped and those adjacent to all others taken before the search: both reductions are exact.
    """
    joined = adjacent & ~np.eye(len(adjacent), dtype=bool)
    size = len(_greedy_clique(joined))
    alive = np.ones(len(joined), dtype=bool)
    while True:
        weak = alive & (joined[:, alive].sum(axis=1) < size - 1)
        if not weak.any():
            break
        alive &= ~weak
    universal = alive & (joined[:, alive].sum(axis=1) == alive.sum() - 1)
    rest = np.flatnonzero(alive & ~universal)
    clique, is_exact = _searched(joined[np.ix_(rest, rest)], penalty[rest])
    return sorted([*np.flatnonzero(universal).tolist(), *rest[clique].tolist()]), is_exact


def _searched(joined: Array, penalty: Array) -> tuple[list[int], bool]:
    # Whole-number weights, size first: all penalties together stay below one vertex.
    unit = 1_000_000 * (len(joined) + 1)
    weight = (unit - np.rint(1_000_000 * np.clip(penalty, 0.0, 1.0))).astype(int).tolist()
    network = nx.from_numpy_array(joined.astype(int))
    if len(joined) <= EXACT_LIMIT:
        nx.set_node_attributes(network, dict(enumerate(weight)), "weight")
        return list(nx.max_weight_clique(network, weight="weight")[0]), True
    best, best_weight = [], -1
    for number, clique in enumerate(nx.find_cliques(network)):
        value = sum(weight[vertex] for vertex in clique)
        if value > best_weight:
            best, best_weight = clique, value
        if number + 1 == CLIQUES_TRIED:
            return best, False
    return best, True


def consistent_loops(
    graph: PoseGraph,
    loops: Sequence[int],
    trusted: Sequence[int],
    confidence: float = 0.999,
    trust_odometry: bool = True,
) -> ConsistencyResult:
    """Keep the largest set of loops that agree pairwise and, if `trust_odometry`, each with odometry alone.

    `loops` and `trusted` are constraint indices. Every test is a chi-square at the given confidence, with the stated
    covariances: they must be honest, odometry's above all.
    """
    chosen = tuple(int(i) for i in loops)
    if not chosen:
        none = np.zeros(0, bool)
        return ConsistencyResult((), none, np.zeros(0), np.zeros((0, 0), bool), none, True)
    tree = odometry_tree(graph, trusted)
    oriented = _oriented(graph, tree, chosen)
    dimension = graph.group.dimension
    limit = float(chi2.ppf(confidence, dimension))
    against = _against_odometry(graph, tree, oriented)
    consistent = _consistent_pairs(graph, tree, oriented, limit)
    candidates = np.ones(len(chosen), dtype=bool)
    if trust_odometry:
        candidates = ~(against > limit)
    penalty = np.nan_to_num(chi2.cdf(against, dimension), nan=0.5)
    part = np.flatnonzero(candidates)
    clique, is_exact = maximum_clique(consistent[np.ix_(part, part)], penalty[part])
    kept = np.zeros(len(chosen), dtype=bool)
    kept[part[clique]] = True
    contested = _contested(consistent, kept, np.isnan(against))
    return ConsistencyResult(chosen, kept & ~contested, against, consistent, contested, is_exact)
