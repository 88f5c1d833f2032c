"""The perspective lens with radial and tangential distortion (Brown 1971), undistorted to distorted.

With a = x/z, b = y/z and r^2 = a^2 + b^2:

    u = fx (a (1 + k1 r^2 + k2 r^4 + k3 r^6) + 2 p1 a b + p2 (r^2 + 2 a^2)) + cx
    v = fy (b (1 + k1 r^2 + k2 r^4 + k3 r^6) + p1 (r^2 + 2 b^2) + 2 p2 a b) + cy

>>> lens = PerspectiveLens(800.0, 800.0, 320.0, 240.0, radial=(-0.3, 0.0, 0.0))
>>> lens.project([0.1, 0.0, 1.0]).round(3)
array([399.76, 240.  ])
>>> lens.unproject([2000.0, 240.0])
Traceback (most recent call last):
hybridtrack.errors.LensDomainError: Expected pixels that the lens model reaches (up to 1.054 from the axis), \
got 1 of 1 outside, the first at (u, v) = (2000, 240).
"""

from dataclasses import dataclass
from functools import cached_property
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
from hybridtrack.geometry.lens_kernels import (
    perspective_jacobians,
    perspective_project,
    perspective_unproject,
)
from hybridtrack.geometry.monotonic import perspective_limit


@dataclass(frozen=True)
class PerspectiveLens:
    """Focal lengths and centre in px; `radial` k1, k2, k3; `tangential` p1, p2.

    OptionError for a focal length that is not positive, a value that is not finite, a wrong number of terms.
    """

    fx: float
    fy: float
    cx: float
    cy: float
    radial: tuple[float, ...] = (0.0, 0.0, 0.0)
    tangential: tuple[float, ...] = (0.0, 0.0)

    model: ClassVar[str] = "perspective"
    names: ClassVar[tuple[str, ...]] = ("fx", "fy", "cx", "cy", "k1", "k2", "k3", "p1", "p2")

    def __post_init__(self) -> None:
        for name in ("fx", "fy", "cx", "cy"):
            object.__setattr__(self, name, float(getattr(self, name)))
        for name, count in (("radial", 3), ("tangential", 2)):
            object.__setattr__(self, name, checked_terms("PerspectiveLens", name, getattr(self, name), count))
        others = (self.cx, self.cy, *self.radial, *self.tangential)
        checked_lens("PerspectiveLens", (self.fx, self.fy), others)

    @property
    def parameters(self) -> FloatArray:
        """Values (9,) in the order of `names`."""
        return np.array([self.fx, self.fy, self.cx, self.cy, *self.radial, *self.tangential])

    def with_parameters(self, parameters: ArrayLike) -> "PerspectiveLens":
        """A lens of this model with the values (9,) in the order of `names`."""
        fx, fy, cx, cy, *terms = checked_parameters(parameters, 9)
        return PerspectiveLens(fx, fy, cx, cy, radial=tuple(terms[:3]), tangential=tuple(terms[3:]))

    @cached_property
    def monotonic_limit(self) -> float:
        """Largest undistorted r on whose disc the model is one to one; infinite where it is so everywhere.

        Without tangential terms: where the slope of the radial function turns negative.
        """
        return perspective_limit(self.radial, (self.tangential[0], self.tangential[1]))

    def project(self, points: ArrayLike) -> FloatArray:
        """uv (..., 2) px of camera points (..., 3); NaN behind the camera or beyond `monotonic_limit`."""
        return project_rows(perspective_project, points, self.parameters, self.monotonic_limit)

    def project_with_jacobians(self, points: ArrayLike) -> tuple[FloatArray, FloatArray, FloatArray]:
        """uv (..., 2), d uv / d point (..., 2, 3), d uv / d parameters (..., 2, 9), or NaN."""
        return jacobian_rows(perspective_jacobians, points, self.parameters, self.monotonic_limit)

    def unproject(self, uv: ArrayLike, allow_outside: bool = False) -> FloatArray:
        """Unit directions (..., 3) of pixels uv (..., 2), to 1e-10 px when projected again (Newton).

        Pixels that no point within `monotonic_limit` reaches raise LensDomainError; NaN if `allow_outside`.
        """
        return unproject_rows(perspective_unproject, uv, self.parameters, self.monotonic_limit, allow_outside)

    def is_monotonic_over(self, width: int, height: int) -> bool:
        """Whether every position on an array of `width` x `height` px, edges included, has a direction."""
        return bool(np.all(np.isfinite(self.unproject(grid_over(width, height), allow_outside=True))))
