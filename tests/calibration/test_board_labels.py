"""Which corner is which: rotation, offset, and refusal where it is not clear."""

import numpy as np
import pytest
from rendered_boards import board

from hybridtrack.calibration.board_labels import Cells, label_grid
from hybridtrack.calibration.grid_growth import Grid

TURNS = (np.eye(2, dtype=int), np.array([[0, -1], [1, 0]]), -np.eye(2, dtype=int), np.array([[0, 1], [-1, 0]]))


def observed(target, columns, rows, turn, flip_sign=False):
    """Corners of the given ranges, their squares and a ring around them, seen under a turn of the grid."""
    ij = np.array([(i, j) for j in rows for i in columns])
    around = [range(side[0] - 2, side[-1] + 2) for side in (columns, rows)]
    squares = np.array([(i, j) for j in around[1] for i in around[0]])
    sets = np.pad(target.square_sets().astype(int), 4)
    blink = sets[squares[:, 1] + 4, squares[:, 0] + 4] * (-1 if flip_sign else 1)
    inverse = TURNS[turn].T
    grid = Grid({tuple(place): n for n, place in enumerate((ij - ij[0]) @ inverse.T)}, {})
    middles = (squares + 0.5 - ij[0]) @ inverse.T
    return grid, Cells(np.floor(middles).astype(int), blink), ij


@pytest.mark.parametrize("turn", range(4))
@pytest.mark.parametrize("kind", ["shuttered_checker", "counterphase_checker"])
def test_a_full_board_is_named_under_any_turn(turn, kind):
    """Every corner gets its own index, half turns included."""
    target = board(kind)
    grid, cells, ij = observed(target, range(1, 12), range(1, 9), turn)
    labelling = label_grid(grid, cells, target)
    np.testing.assert_array_equal(labelling.ij, ij)
    assert labelling.wrong == 0
    assert labelling.half_turn_lead > 0


@pytest.mark.parametrize("turn", range(4))
def test_a_partial_board_is_named_by_its_marker_squares(turn):
    """A third of the board is enough where it shows markers."""
    target = board()
    grid, cells, ij = observed(target, range(3, 9), range(2, 7), turn)
    np.testing.assert_array_equal(label_grid(grid, cells, target).ij, ij)


def test_a_full_board_without_markers_is_named_by_parity():
    """Half a turn maps set A to set B, so that a full view is unique."""
    target = board(steady=())
    grid, cells, ij = observed(target, range(1, 12), range(1, 9), 2)
    np.testing.assert_array_equal(label_grid(grid, cells, target).ij, ij)


def test_an_inner_part_without_markers_is_refused():
    """Several places fit equally well, so that there is no answer."""
    target = board(steady=())
    grid, cells, _ = observed(target, range(4, 8), range(3, 6), 0)
    assert label_grid(grid, cells, target) is None


def test_a_pattern_that_is_not_the_targets_is_refused():
    """Another board's markers contradict every labelling."""
    grid, cells, _ = observed(board(steady=((2, 2), (6, 4), (3, 7), (9, 5), (10, 6))), range(1, 12), range(1, 9), 0)
    assert label_grid(grid, cells, board()) is None


def test_the_opposite_phase_of_a_marked_screen_is_refused():
    """With set B first, no labelling puts the markers where they are: the caller then turns the sign."""
    target = board("counterphase_checker")
    grid, cells, ij = observed(target, range(1, 12), range(1, 9), 0, flip_sign=True)
    assert label_grid(grid, cells, target) is None
    turned = Cells(cells.places, -cells.blink)
    np.testing.assert_array_equal(label_grid(grid, turned, target).ij, ij)
