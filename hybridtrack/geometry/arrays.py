"""The one check every public function of this room makes on its arrays."""

import numpy as np
from numpy.typing import ArrayLike, NDArray

from hybridtrack.errors import ShapeError

FloatArray = NDArray[np.float64]


def with_trailing_shape(value: ArrayLike, name: str, trailing: tuple[int | str, ...]) -> FloatArray:
    """Return `value` as float64 whose last axes are `trailing`; a string stands for any length.

    >>> with_trailing_shape([[1, 2, 3]], "points", ("N", 3)).shape
    (1, 3)
    >>> with_trailing_shape([1, 2], "points", ("N", 3))
    Traceback (most recent call last):
    hybridtrack.errors.ShapeError: Expected `points` of shape (..., N, 3), got (2,).
    """
    array = np.asarray(value, dtype=np.float64)
    count = len(trailing)
    actual = array.shape[-count:]
    fits = len(actual) == count and all(
        isinstance(want, str) or want == have for want, have in zip(trailing, actual, strict=True)
    )
    if not fits:
        wanted = ", ".join(["...", *map(str, trailing)])
        raise ShapeError(f"Expected `{name}` of shape ({wanted}), got {array.shape}.")
    return array
