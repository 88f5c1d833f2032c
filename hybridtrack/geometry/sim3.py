"""Similarities of space, Sim(3), as homogeneous matrices (..., 4, 4) with s R in the block.

A tangent vector (..., 7) is translation, rotation vector w (rad), log of the scale. With g the log scale, a
the angle and z = g + i a, the translation is W times the tangent translation, where W, the integral over x
from 0 to 1 of exp(x (g + hat(w))), is A + B hat(w) + C hat(w)^2 (Strasdat 2012, "Local Accuracy and Global
Consistency for Efficient Visual SLAM", here in a form that divides by |z|^2 only, so that neither limit
alone is singular):

    A = (e^g - 1) / g,   B = (g e^g sin(a)/a - e^g cos(a) + 1) / |z|^2,
    C = (g e^g (1 - cos a)/a^2 + A - e^g sin(a)/a) / |z|^2.

Below |z| = 1 these cancel; there the power series of (e^z - 1)/z is summed in real terms.

>>> import numpy as np
>>> S = compose(2.0, np.eye(3), [1.0, 0.0, 0.0])
>>> transform(S, [[1.0, 1.0, 1.0]])
array([[3., 2., 2.]])
>>> compose(-1.0, np.eye(3), [0.0, 0.0, 0.0])
Traceback (most recent call last):
hybridtrack.errors.ShapeError: Expected `s` to be positive, got -1.
"""

import numpy as np
from numpy.typing import ArrayLike

from hybridtrack.errors import ShapeError
from hybridtrack.geometry import so3
from hybridtrack.geometry.arrays import FloatArray, with_trailing_shape
from hybridtrack.geometry.se3 import affine_transform, homogeneous
from hybridtrack.geometry.small_angle import one_minus_cosine_over_square, sine_over_angle

_SERIES_TERMS = 20  # 1 / 21! is below 1e-19


def _series_coefficients(g: FloatArray, a: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray]:
    """A, B, C from the powers z^n / (n + 1)!, carried as g^n, Im(z^n) / a and (g^n - Re(z^n)) / a^2."""
    power, real = np.ones_like(g), np.ones_like(g)
    imaginary, lag = np.zeros_like(g), np.zeros_like(g)
    A, B, C = np.ones_like(g), np.zeros_like(g), np.zeros_like(g)
    factor = 1.0
    for n in range(1, _SERIES_TERMS + 1):
        lag = g * lag + imaginary
        real, imaginary = g * real - a**2 * imaginary, real + g * imaginary
        power = power * g
        factor /= n + 1
        A, B, C = A + factor * power, B + factor * imaginary, C + factor * lag
    return A, B, C


def _closed_coefficients(g: FloatArray, a: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray]:
    scale, sine = np.exp(g), sine_over_angle(a)
    zero = g == 0.0
    A = np.where(zero, 1.0, np.expm1(g) / np.where(zero, 1.0, g))
    square = g**2 + a**2
    B = (g * scale * sine - scale * np.cos(a) + 1.0) / square
    C = (g * scale * one_minus_cosine_over_square(a) + A - scale * sine) / square
    return A, B, C


def _translation_matrix(rotation: FloatArray, log_scale: FloatArray) -> FloatArray:
    """W (..., 3, 3) of the module docstring."""
    g = np.asarray(log_scale)[..., None, None]
    a = np.asarray(np.linalg.norm(rotation, axis=-1)[..., None, None])
    small = g**2 + a**2 < 1.0
    series = _series_coefficients(np.where(small, g, 0.0), np.where(small, a, 0.0))
    closed = _closed_coefficients(np.where(small, 1.0, g), np.where(small, 1.0, a))
    A, B, C = (np.where(small, near, far) for near, far in zip(series, closed, strict=True))
    K = so3.hat(rotation)
    return np.asarray(A * np.eye(3) + B * K + C * (K @ K))


def compose(s: ArrayLike, R: ArrayLike, t: ArrayLike) -> FloatArray:
    """S (..., 4, 4): p -> s R p + t, of s (...), R (..., 3, 3), t (..., 3); ShapeError unless s > 0."""
    s = np.asarray(s, dtype=np.float64)
    if np.any(s <= 0.0):
        raise ShapeError(f"Expected `s` to be positive, got {np.nanmin(s):g}.")
    block = s[..., None, None] * with_trailing_shape(R, "R", (3, 3))
    return homogeneous(block, with_trailing_shape(t, "t", (3,)))


def decompose(S: ArrayLike) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Scales s (...), rotations R (..., 3, 3), translations t (..., 3) of S (..., 4, 4): p -> s R p + t.

    ShapeError where the block mirrors or collapses space.
    """
    S = with_trailing_shape(S, "S", (4, 4))
    volume = so3.determinant(S[..., :3, :3])
    if np.any(volume <= 0.0):
        raise ShapeError(f"Expected `S` to hold similarities (det of the block > 0), got det = {np.nanmin(volume):g}.")
    s = np.cbrt(volume)
    return s, S[..., :3, :3] / s[..., None, None], S[..., :3, 3].copy()


def transform(S: ArrayLike, points: ArrayLike) -> FloatArray:
    """s R p + t for `points` (..., N, 3), or one point (3,), under S (..., 4, 4); leading axes broadcast."""
    S = with_trailing_shape(S, "S", (4, 4))
    return affine_transform(S, with_trailing_shape(points, "points", (3,)))


def inverse(S: ArrayLike) -> FloatArray:
    """Inverse (..., 4, 4) of similarities; ShapeError if they are none."""
    s, R, t = decompose(S)
    block = np.swapaxes(R, -1, -2) / s[..., None, None]
    return homogeneous(block, -(block @ t[..., None])[..., 0])


def exp(xi: ArrayLike) -> FloatArray:
    """S (..., 4, 4) of tangent vectors (..., 7): translation, rotation, log scale."""
    xi = with_trailing_shape(xi, "xi", (7,))
    rotation, log_scale = xi[..., 3:6], xi[..., 6]
    t = (_translation_matrix(rotation, log_scale) @ xi[..., :3, None])[..., 0]
    return homogeneous(np.exp(log_scale)[..., None, None] * so3.exp(rotation), t)


def log(S: ArrayLike) -> FloatArray:
    """Tangents (..., 7), rotation at most half a turn, of S (..., 4, 4); ShapeError if not similarities."""
    s, R, t = decompose(S)
    rotation, log_scale = so3.log(R), np.log(s)
    translation = np.linalg.solve(_translation_matrix(rotation, log_scale), t[..., None])[..., 0]
    return np.concatenate([translation, rotation, log_scale[..., None]], axis=-1)


def adjoint(S: ArrayLike) -> FloatArray:
    """Ad (..., 7, 7) with S exp(xi) S^-1 = exp(Ad xi)."""
    s, R, t = decompose(S)
    matrix = np.zeros((*s.shape, 7, 7))
    matrix[..., :3, :3] = s[..., None, None] * R
    matrix[..., :3, 3:6] = so3.hat(t) @ R
    matrix[..., :3, 6] = -t
    matrix[..., 3:6, 3:6] = R
    matrix[..., 6, 6] = 1.0
    return matrix
