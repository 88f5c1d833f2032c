"""What both lens models do alike: flatten, call a kernel, restore the leading axes, refuse."""

from collections.abc import Callable
from typing import Any

import numpy as np
from numpy.typing import ArrayLike

from hybridtrack.errors import LensDomainError, OptionError, ShapeError
from hybridtrack.geometry.arrays import FloatArray, with_trailing_shape

Kernel = Callable[..., Any]


def checked_lens(owner: str, focal: tuple[float, float], others: tuple[float, ...]) -> None:
    """OptionError unless both focal lengths are positive and every value is finite."""
    for name, value in zip(("fx", "fy"), focal, strict=True):
        if not 0.0 < value < np.inf:
            raise OptionError(f"Expected `{name}` of {owner} to be positive and finite, got {value}.")
    if not np.all(np.isfinite(others)):
        raise OptionError(f"Expected the centre and distortion of {owner} to be finite, got {others}.")


def checked_terms(owner: str, name: str, value: tuple[float, ...], count: int) -> tuple[float, ...]:
    """`value` as `count` Python floats; OptionError if it has another length."""
    terms = tuple(float(term) for term in value)
    if len(terms) != count:
        raise OptionError(f"Expected `{name}` of {owner} to have {count} terms, got {len(terms)}.")
    return terms


def checked_parameters(parameters: ArrayLike, count: int) -> list[float]:
    """`parameters` as floats; ShapeError unless of shape (count,)."""
    array = np.asarray(parameters, dtype=np.float64)
    if array.shape != (count,):
        raise ShapeError(f"Expected `parameters` of shape ({count},), got {array.shape}.")
    return [float(value) for value in array]


def project_rows(kernel: Kernel, points: ArrayLike, parameters: FloatArray, limit: float) -> FloatArray:
    """uv (..., 2) px of points (..., 3)."""
    points = with_trailing_shape(points, "points", (3,))
    flat = np.ascontiguousarray(points.reshape(-1, 3))
    uv = np.empty((len(flat), 2))
    kernel(flat, parameters, limit, uv)
    return uv.reshape(*points.shape[:-1], 2)


def jacobian_rows(
    kernel: Kernel, points: ArrayLike, parameters: FloatArray, limit: float
) -> tuple[FloatArray, FloatArray, FloatArray]:
    """uv (..., 2), d uv / d point (..., 2, 3) and d uv / d parameters (..., 2, P) of points (..., 3)."""
    points = with_trailing_shape(points, "points", (3,))
    flat = np.ascontiguousarray(points.reshape(-1, 3))
    count, lead = len(flat), points.shape[:-1]
    uv, d_point = np.empty((count, 2)), np.empty((count, 2, 3))
    d_parameters = np.empty((count, 2, len(parameters)))
    kernel(flat, parameters, limit, uv, d_point, d_parameters)
    return (
        uv.reshape(*lead, 2),
        d_point.reshape(*lead, 2, 3),
        d_parameters.reshape(*lead, 2, len(parameters)),
    )


def unproject_rows(
    kernel: Kernel, uv: ArrayLike, parameters: FloatArray, limit: float, allow_outside: bool
) -> FloatArray:
    """Unit directions (..., 3) of uv (..., 2) px; LensDomainError, or NaN if `allow_outside`, outside."""
    uv = with_trailing_shape(uv, "uv", (2,))
    flat = np.ascontiguousarray(uv.reshape(-1, 2))
    directions = np.empty((len(flat), 3))
    kernel(flat, parameters, limit, directions)
    if not allow_outside:
        outside = np.flatnonzero(np.isnan(directions[:, 2]))
        if len(outside):
            u, v = flat[outside[0]]
            raise LensDomainError(
                f"Expected pixels that the lens model reaches (up to {limit:.4g} from the axis), "
                f"got {len(outside)} of {len(flat)} outside, the first at (u, v) = ({u:.6g}, {v:.6g})."
            )
    return directions.reshape(*uv.shape[:-1], 3)


def grid_over(width: int, height: int) -> FloatArray:
    """Positions (N, 2) px over an array: its outer edges in half pixels, the inside in 33 steps."""
    u, v = np.linspace(-0.5, width - 0.5, 33), np.linspace(-0.5, height - 0.5, 33)
    inside = np.stack(np.meshgrid(u, v), axis=-1).reshape(-1, 2)
    along_u, along_v = np.linspace(u[0], u[-1], 2 * width + 1), np.linspace(v[0], v[-1], 2 * height + 1)
    edges = [np.stack([along_u, np.full_like(along_u, side)], axis=-1) for side in (v[0], v[-1])]
    edges += [np.stack([np.full_like(along_v, side), along_v], axis=-1) for side in (u[0], u[-1])]
    return np.concatenate([inside, *edges])
