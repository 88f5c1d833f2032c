"""From crossings to a grid by topology."""

import numpy as np

from hybridtrack.calibration.grid_growth import largest_grid
from hybridtrack.calibration.saddle_points import Saddles


def saddles_of(columns=7, rows=5, angle=0.4, drop=(), warp=0.0):
    """Ideal crossings of a checker, some dropped; returns them and their grid places."""
    places = np.array([(i, j) for j in range(rows) for i in range(columns) if (i, j) not in drop])
    turn = np.array([[np.cos(angle), np.sin(angle)], [-np.sin(angle), np.cos(angle)]])
    xy = places @ turn * 25.0 + [60.0, 40.0]
    xy = xy + warp * (xy - 100.0) ** 2 / 100.0
    # Bright between the axes on even places, between the second and the first turned back on odd ones.
    first = np.where(places.sum(1) % 2 == 0, angle, angle + np.pi / 2)
    first = np.mod(first, np.pi)
    return Saddles(xy, np.stack([first, first + np.pi / 2], axis=1), np.ones(len(xy))), places


def agrees(grid, places):
    """Whether the grid's places are the true ones up to a rotation and an offset."""
    found, true = grid.places(), places[grid.members()]
    steps = np.linalg.lstsq(np.c_[true, np.ones(len(true))], found, rcond=None)
    return np.allclose(np.c_[true, np.ones(len(true))] @ steps[0], found, atol=1e-6) and np.isclose(
        np.linalg.det(steps[0][:2]), 1.0
    )


def test_a_whole_grid_grows_from_any_roll():
    """All crossings join, in their order, and the grid is not mirrored."""
    for angle in np.linspace(0.0, 2 * np.pi, 9):
        saddles, places = saddles_of(angle=angle)
        grid = largest_grid(saddles)
        assert len(grid.index) == 35
        assert agrees(grid, places)


def test_gaps_are_not_stepped_over():
    """With crossings missing around a dark square the others keep their places."""
    drop = ((3, 2), (4, 2), (3, 3), (4, 3))
    saddles, places = saddles_of(drop=drop, warp=0.02)
    grid = largest_grid(saddles)
    assert len(grid.index) == 31
    assert agrees(grid, places)


def test_stray_crossings_do_not_join():
    """Crossings off their place, or of the wrong polarity, stay out."""
    saddles, places = saddles_of()
    stray_xy = np.array([[120.0, 95.0], [61.0, 210.0]])
    saddles = Saddles(np.vstack([saddles.xy, stray_xy]), np.vstack([saddles.axes, [[0.1, 1.7], [0.4, 1.97]]]),
                      np.ones(len(places) + 2))  # fmt: skip
    grid = largest_grid(saddles)
    assert set(grid.members()) == set(range(35))
    assert agrees(grid, places)


def test_a_handful_of_crossings_is_no_grid():
    """Fewer than six crossings give an empty grid."""
    saddles, _ = saddles_of(2, 2)
    assert largest_grid(saddles).index == {}
