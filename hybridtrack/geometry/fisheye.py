"""The fisheye lens of Kannala and Brandt 2006, its radial part with odd powers up to theta^9.

With r = hypot(x, y) and theta = atan2(r, z), the angle from the axis:

    d = theta (1 + k1 theta^2 + k2 theta^4 + k3 theta^6 + k4 theta^8)
    u = fx d x/r + cx,   v = fy d y/r + cy

Points behind the camera plane (theta > pi/2) have a picture as long as d rises.

>>> lens = FisheyeLens(300.0, 300.0, 320.0, 240.0)
>>> lens.project([1.0, 0.0, 0.0]).round(3)
array([791.239, 240.   ])
>>> lens.unproject([2000.0, 240.0])
Traceback (most recent call last):
hybridtrack.errors.LensDomainError: Expected pixels that the lens model reaches (up to 3.142 from the axis), \
got 1 of 1 outside, the first at (u, v) = (2000, 240).
"""

from dataclasses import dataclass
from functools import cached_property
from math import pi
from typing import ClassVar

import numpy as np
from numpy.typing import ArrayLike

from hybridtrack.geometry.arrays import FloatArray
from hybridtrack.geometry.lens_arrays import (
    checked_lens,
    checked_parameters,
    checked_terms,
    grid_over,
    jacobian_rows,
    project_rows,
    unproject_rows,
)
from hybridtrack.geometry.lens_kernels import fisheye_jacobians, fisheye_project, fisheye_unproject
from hybridtrack.geometry.monotonic import radial_limit


@dataclass(frozen=True)
class FisheyeLens:
    """Focal lengths and centre in px; `radial` k1 .. k4. OptionError for values that can't be."""

    fx: float
    fy: float
    cx: float
    cy: float
    radial: tuple[float, ...] = (0.0, 0.0, 0.0, 0.0)

    model: ClassVar[str] = "fisheye"
    names: ClassVar[tuple[str, ...]] = ("fx", "fy", "cx", "cy", "k1", "k2", "k3", "k4")

    def __post_init__(self) -> None:
        for name in ("fx", "fy", "cx", "cy"):
            object.__setattr__(self, name, float(getattr(self, name)))
        object.__setattr__(self, "radial", checked_terms("FisheyeLens", "radial", self.radial, 4))
        checked_lens("FisheyeLens", (self.fx, self.fy), (self.cx, self.cy, *self.radial))

    @property
    def parameters(self) -> FloatArray:
        """Values (8,) in the order of `names`."""
        return np.array([self.fx, self.fy, self.cx, self.cy, *self.radial])

    def with_parameters(self, parameters: ArrayLike) -> "FisheyeLens":
        """A lens of this model with the values (8,) in the order of `names`."""
        fx, fy, cx, cy, *terms = checked_parameters(parameters, 8)
        return FisheyeLens(fx, fy, cx, cy, radial=tuple(terms))

    @cached_property
    def monotonic_limit(self) -> float:
        """Largest theta in rad, at most pi, up to which the radial function rises."""
        return min(pi, radial_limit(self.radial))

    def project(self, points: ArrayLike) -> FloatArray:
        """uv (..., 2) px of camera points (..., 3); NaN beyond `monotonic_limit` and straight behind."""
        return project_rows(fisheye_project, points, self.parameters, self.monotonic_limit)

    def project_with_jacobians(self, points: ArrayLike) -> tuple[FloatArray, FloatArray, FloatArray]:
        """uv (..., 2), d uv / d point (..., 2, 3), d uv / d parameters (..., 2, 8), or NaN."""
        return jacobian_rows(fisheye_jacobians, points, self.parameters, self.monotonic_limit)

    def unproject(self, uv: ArrayLike, allow_outside: bool = False) -> FloatArray:
        """Unit directions (..., 3) of pixels uv (..., 2), to 1e-10 px when projected again (Newton).

        Pixels that no angle within `monotonic_limit` reaches raise LensDomainError; NaN if `allow_outside`.
        """
        return unproject_rows(fisheye_unproject, uv, self.parameters, self.monotonic_limit, allow_outside)

    def is_monotonic_over(self, width: int, height: int) -> bool:
        """Whether every position on an array of `width` x `height` px, edges included, has a direction."""
        return bool(np.all(np.isfinite(self.unproject(grid_over(width, height), allow_outside=True))))
