"""Tests of hybridtrack.geometry.lens_arrays."""

import numpy as np

from hybridtrack.geometry.lens_arrays import grid_over


def test_grid_reaches_the_outer_edges() -> None:
    """The grid runs from the outer edge of the first pixel to that of the last, and holds all four corners."""
    grid = grid_over(64, 48)
    np.testing.assert_array_equal(grid.min(axis=0), [-0.5, -0.5])
    np.testing.assert_array_equal(grid.max(axis=0), [63.5, 47.5])
    for corner in ([-0.5, -0.5], [63.5, -0.5], [-0.5, 47.5], [63.5, 47.5]):
        assert np.any(np.all(grid == corner, axis=1))
