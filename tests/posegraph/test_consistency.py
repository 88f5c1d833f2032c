"""Pairwise consistency and maximum cliques."""

from itertools import combinations

import numpy as np
import pytest

from hybridtrack.posegraph import SE3, SIM3, consistent_loops
from hybridtrack.posegraph import consistency as module
from hybridtrack.posegraph.consistency import maximum_clique

GROUPS = pytest.mark.parametrize("group", [SE3, SIM3], ids=["SE3", "Sim3"])


def odometry_of(graph):
    return [i for i, c in enumerate(graph.constraints) if c.kind == "odometry"]


def largest_by_trying(adjacent):
    """Size of the largest clique by trying every subset."""
    count = len(adjacent)
    for size in range(count, 0, -1):
        for subset in combinations(range(count), size):
            if all(adjacent[i, j] for i, j in combinations(subset, 2)):
                return size
    return 0


def test_maximum_clique_is_the_largest_of_all_subsets():
    """On random graphs of 10 vertices, sparse to dense, against trying all subsets."""
    rng = np.random.default_rng(0)
    for density in np.linspace(0.05, 0.95, 25):
        upper = np.triu(rng.random((10, 10)) < density, 1)
        adjacent = upper | upper.T | np.eye(10, dtype=bool)
        clique, is_exact = maximum_clique(adjacent, np.zeros(10))
        assert is_exact
        assert len(clique) == largest_by_trying(adjacent)
        assert all(adjacent[i, j] for i, j in combinations(clique, 2))


def test_equal_cliques_are_told_apart_by_their_penalty():
    """Of two pairs, the one that fits better elsewhere is taken, whichever comes first."""
    adjacent = np.zeros((4, 4), dtype=bool)
    adjacent[0, 1] = adjacent[1, 0] = adjacent[2, 3] = adjacent[3, 2] = True
    assert maximum_clique(adjacent, np.array([0.5, 0.5, 0.4, 0.5]))[0] == [2, 3]
    assert maximum_clique(adjacent, np.array([0.3, 0.5, 0.4, 0.5]))[0] == [0, 1]


def test_large_consistent_sets_are_found_at_once():
    """150 vertices that agree but for one pair in a hundred, among 100 that do not: more than a third searched for."""
    rng = np.random.default_rng(1)
    adjacent = rng.random((250, 250)) < 0.05
    adjacent[:150, :150] = rng.random((150, 150)) > 0.0005
    adjacent = np.triu(adjacent, 1)
    adjacent |= adjacent.T
    clique, is_exact = maximum_clique(adjacent, np.zeros(250))
    assert is_exact
    assert set(clique) <= set(range(150))
    assert len(clique) > 135


def test_says_when_the_search_was_cut_short(monkeypatch):
    """With its budget spent, the best clique so far is returned and not called the largest."""
    rng = np.random.default_rng(2)
    adjacent = np.triu(rng.random((80, 80)) < 0.7, 1)
    adjacent |= adjacent.T
    monkeypatch.setattr(module, "CLIQUES_TRIED", 50)
    clique, is_exact = maximum_clique(adjacent, np.zeros(80))
    assert not is_exact
    assert all(adjacent[i, j] for i, j in combinations(clique, 2))


def test_no_loops_and_no_vertices():
    """Nothing asked, nothing kept."""
    assert maximum_clique(np.zeros((0, 0), dtype=bool), np.zeros(0)) == ([], True)


@GROUPS
def test_chi_squares_against_odometry_are_honest(laps, group):
    """Right loops over 60 noisy graphs: mean chi-square over its degrees of freedom near one, few beyond 95 %.

    The loops of one graph share odometry, so the limits are wider than for independent values.
    """
    values = np.concatenate(
        [
            consistent_loops(made.graph, made.loops, odometry_of(made.graph)).against_odometry
            for made in (laps(30, lap=12, seed=seed, group=group, every=6) for seed in range(60))
        ]
    )
    assert abs(np.mean(values) / group.dimension - 1.0) < 0.12
    assert 0.01 < np.mean(values > module.chi2.ppf(0.95, group.dimension)) < 0.10


@GROUPS
def test_pair_chi_squares_are_honest(laps, group):
    """Pairs of right loops, nested, crossing and one after the other, are as far apart as their covariance says."""
    nested, apart = [], []
    for seed in range(60):
        made = laps(40, lap=100, seed=seed, group=group)
        rng = np.random.default_rng(1000 + seed)
        sigma = np.sqrt(np.diag(made.covariance))
        loops = [
            made.graph.add_constraint(
                a, b, "loop", made.measured(a, b, sigma * rng.normal(size=group.dimension)), made.covariance
            )
            for a, b in [(2, 30), (36, 5), (0, 9), (15, 26)]
        ]
        tree = module.odometry_tree(made.graph, odometry_of(made.graph))
        oriented = module._oriented(made.graph, tree, loops)
        for i, j, into in [(0, 1, nested), (2, 3, apart)]:
            one, other = oriented.part(np.array([i])), oriented.part(np.array([j]))
            into.append(module._pair_chi_squares(made.graph, tree, one, other)[0] / group.dimension)
    limit = 4.0 * np.sqrt(2.0 / group.dimension / 60.0) + 0.03
    assert abs(np.mean(nested) - 1.0) < limit
    assert abs(np.mean(apart) - 1.0) < limit


@GROUPS
def test_wrong_loops_that_agree_with_nothing_are_left_out(laps, group):
    """Without trusting odometry alone, right loops still form the largest set among random wrong ones."""
    made = laps(80, lap=20, seed=4, group=group)
    rng = np.random.default_rng(9)
    right = made.loops
    wrong = []
    for _ in range(15):
        a, b = sorted(rng.choice(80, 2, replace=False).tolist())
        error = np.concatenate([rng.normal(size=3), 0.3 * rng.normal(size=group.dimension - 3)])
        wrong.append(made.graph.add_constraint(a, b, "loop", made.measured(a, b, error), made.covariance))
    result = consistent_loops(made.graph, [*right, *wrong], odometry_of(made.graph), trust_odometry=False)
    assert result.loops == (*right, *wrong)
    assert result.kept[: len(right)].all()
    assert not result.kept[len(right) :].any()


def test_loops_between_separate_parts_are_compared(laps):
    """Two segments tied by loops only: three that agree outvote two that do not, whichever way each runs."""
    one, two = laps(20, lap=20, seed=1), laps(20, lap=20, seed=2)
    graph = one.graph
    away = SE3.exp(np.array([3.0, 1.0, -2.0, 0.2, 0.7, -0.4]))
    for pose in two.graph.poses:
        graph.add_pose(100 + pose.id, 10**9 + pose.t_ns, pose.world_from_camera, segment=1)
    for c in two.graph.constraints:
        graph.add_constraint(100 + c.from_id, 100 + c.to_id, c.kind, c.from_from_to, c.covariance)
    loops = []
    for a, b, wrong in [(1, 4, 0.0), (15, 9, 0.0), (7, 18, 0.0), (3, 3, 1.0), (12, 2, -0.7)]:
        measured = np.linalg.inv(one.truth[a]) @ away @ two.truth[b] @ SE3.exp(np.full(6, wrong))
        if a > b:
            loops.append(graph.add_constraint(100 + b, a, "loop", np.linalg.inv(measured), one.covariance))
        else:
            loops.append(graph.add_constraint(a, 100 + b, "loop", measured, one.covariance))
    result = consistent_loops(graph, loops, odometry_of(graph))
    assert result.kept.tolist() == [True, True, True, False, False]
    assert np.isnan(result.against_odometry).all()


def test_without_loops_nothing_is_kept(laps):
    """An empty question has an empty answer."""
    graph = laps(10, lap=50).graph
    result = consistent_loops(graph, [], odometry_of(graph))
    assert result.loops == ()
    assert result.is_exact
