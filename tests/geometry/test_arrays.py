"""Tests of hybridtrack.geometry.arrays."""

import numpy as np
import pytest

from hybridtrack.errors import ShapeError
from hybridtrack.geometry.arrays import with_trailing_shape


def test_integers_become_float64() -> None:
    """Whole numbers and float32 come back as float64 of the same shape."""
    assert with_trailing_shape([[1, 2, 3]], "p", (3,)).dtype == np.float64
    assert with_trailing_shape(np.zeros((2, 5, 3), np.float32), "p", ("N", 3)).shape == (2, 5, 3)


@pytest.mark.parametrize("shape", [(), (2,), (3, 2)])
def test_other_trailing_shape_is_refused(shape: tuple[int, ...]) -> None:
    """The refusal names the array, the shape wanted and the shape received."""
    with pytest.raises(ShapeError, match=r"Expected `p` of shape \(\.\.\., 3\), got \(.*\)\."):
        with_trailing_shape(np.zeros(shape), "p", (3,))
