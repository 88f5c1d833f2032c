"""Elimination orders: permutations, right trees, and no more fill after postordering."""

import numpy as np
import pytest

from hybridtrack.posegraph.ordering import elimination_order, elimination_tree, minimum_degree_order, postorder


def eliminated(count, a, b, position):
    """Parents by eliminating one row after the other on sets, and the number of edges in the filled graph."""
    neighbours = [set() for _ in range(count)]
    for one, two in zip(position[a].tolist(), position[b].tolist(), strict=True):
        neighbours[one].add(two)
        neighbours[two].add(one)
    parent, filled = [-1] * count, 0
    for row in range(count):
        later = {other for other in neighbours[row] if other > row}
        filled += len(later)
        if later:
            parent[row] = min(later)
            for other in later:
                neighbours[other] |= later - {other}
    return parent, filled


def laps(count: int, lap: int):
    """Edges of a chain with a link to the lap before at every third row."""
    back = np.arange(lap, count, 3)
    return np.r_[np.arange(count - 1), back - lap], np.r_[np.arange(1, count), back]


def test_tree_equals_that_of_elimination_by_sets():
    """Liu's algorithm gives the first later neighbour of every eliminated row, on laps and on random graphs."""
    rng = np.random.default_rng(0)
    random = rng.integers(0, 40, (2, 70))
    for count, (a, b) in [(60, laps(60, 13)), (40, random[:, random[0] != random[1]])]:
        assert elimination_tree(count, a, b) == eliminated(count, a, b, np.arange(count))[0]


def test_postorder_keeps_subtrees_together():
    """Children come before parents, and every subtree takes consecutive positions."""
    parent = [4, 4, 5, 5, 6, 6, -1, 8, -1]
    position = postorder(parent)
    assert sorted(position.tolist()) == list(range(9))
    for node, above in enumerate(parent):
        assert above == -1 or position[node] < position[above]
    for members in ([0, 1, 4], [2, 3, 5], [0, 1, 2, 3, 4, 5, 6], [7, 8]):
        assert np.ptp(position[members]) == len(members) - 1


def test_postordering_leaves_the_fill_of_minimum_degree():
    """The filled graph has as many edges as before, and less than half of those in the order of time."""
    a, b = laps(300, 40)
    degree, full = minimum_degree_order(300, a, b), elimination_order(300, a, b)
    fill = eliminated(300, a, b, degree)[1]
    assert eliminated(300, a, b, full)[1] == fill
    assert fill < 0.5 * eliminated(300, a, b, np.arange(300))[1]


@pytest.mark.parametrize("order", [minimum_degree_order, elimination_order])
def test_order_of_nothing_and_of_loners(order):
    """No row, and rows without neighbours, have an order too."""
    none = np.zeros(0, dtype=np.int64)
    assert order(0, none, none).tolist() == []
    assert sorted(order(3, none, none).tolist()) == [0, 1, 2]
