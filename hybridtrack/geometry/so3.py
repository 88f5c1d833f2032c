"""Rotations of space, SO(3): exponential, logarithm, Jacobians, quaternions.

Rotations are matrices (..., 3, 3), rotation vectors (..., 3) in rad, quaternions (..., 4) as x, y, z, w.
Formulas follow Barfoot 2017, "State Estimation for Robotics"; the quaternion of a matrix takes the largest of
four candidates (Shepperd 1978), so that it and the logarithm keep full precision up to half a turn.

>>> import numpy as np
>>> np.round(exp([0.0, 0.0, np.pi / 2]), 3) + 0.0
array([[ 0., -1.,  0.],
       [ 1.,  0.,  0.],
       [ 0.,  0.,  1.]])
>>> log(2.0 * np.eye(3))
Traceback (most recent call last):
hybridtrack.errors.ShapeError: Expected `R` to hold rotations (R R^T = 1 within 1e-06), got a deviation of 3.
"""

import numpy as np
from numpy.typing import ArrayLike

from hybridtrack.errors import DegenerateDataError, ShapeError
from hybridtrack.geometry.arrays import FloatArray, with_trailing_shape
from hybridtrack.geometry.small_angle import (
    angle_minus_sine_over_cube,
    cotangent_remainder_over_square,
    one_minus_cosine_over_square,
    sine_over_angle,
)

_ORTHONORMAL_WITHIN = 1e-6


def _norm(w: FloatArray) -> FloatArray:
    """Angle of rotation vectors (..., 3), shaped (..., 1, 1) to scale matrices."""
    return np.asarray(np.linalg.norm(w, axis=-1)[..., None, None])


def hat(w: ArrayLike) -> FloatArray:
    """Skew matrices (..., 3, 3) of vectors (..., 3): hat(a) @ b = a x b."""
    w = with_trailing_shape(w, "w", (3,))
    matrix = np.zeros((*w.shape, 3))
    matrix[..., 2, 1], matrix[..., 0, 2], matrix[..., 1, 0] = w[..., 0], w[..., 1], w[..., 2]
    matrix[..., 1, 2], matrix[..., 2, 0], matrix[..., 0, 1] = -w[..., 0], -w[..., 1], -w[..., 2]
    return matrix


def vee(W: ArrayLike) -> FloatArray:
    """Vectors (..., 3) of skew matrices (..., 3, 3); of any other matrix, those of its skew part."""
    W = with_trailing_shape(W, "W", (3, 3))
    pairs = [(2, 1), (0, 2), (1, 0)]
    return 0.5 * np.stack([W[..., i, j] - W[..., j, i] for i, j in pairs], axis=-1)


def _polynomial(w: FloatArray, linear: FloatArray | float, quadratic: FloatArray) -> FloatArray:
    """1 + linear * hat(w) + quadratic * hat(w)^2, the form every function below takes."""
    W = hat(w)
    return np.asarray(np.eye(3) + linear * W + quadratic * (W @ W))


def exp(w: ArrayLike) -> FloatArray:
    """Rotations (..., 3, 3) of rotation vectors (..., 3) in rad (Rodrigues 1840)."""
    w = with_trailing_shape(w, "w", (3,))
    angle = _norm(w)
    return _polynomial(w, sine_over_angle(angle), one_minus_cosine_over_square(angle))


def determinant(M: FloatArray) -> FloatArray:
    """Determinants (...) of matrices (..., 3, 3) as a triple product, NaN for NaN without a warning."""
    return np.asarray(np.sum(M[..., 0, :] * np.cross(M[..., 1, :], M[..., 2, :]), axis=-1))


def _refuse_other_than_rotations(R: FloatArray) -> None:
    """NaN (a pose that is lost) passes, and stays NaN in what is made of it."""
    deviation = np.abs(R @ np.swapaxes(R, -1, -2) - np.eye(3))
    wrong = deviation > _ORTHONORMAL_WITHIN
    if np.any(wrong):
        raise ShapeError(
            f"Expected `R` to hold rotations (R R^T = 1 within {_ORTHONORMAL_WITHIN:g}), "
            f"got a deviation of {deviation[wrong].max():.3g}."
        )
    if np.any(determinant(R) < 0.0):
        raise ShapeError("Expected `R` to hold rotations (det > 0), got a mirroring with det < 0.")


def to_quaternion(R: ArrayLike) -> FloatArray:
    """Unit quaternions (..., 4), x, y, z, w with w >= 0, of R (..., 3, 3); ShapeError if not rotations."""
    R = with_trailing_shape(R, "R", (3, 3))
    _refuse_other_than_rotations(R)
    x, y, z = R[..., 0, 0], R[..., 1, 1], R[..., 2, 2]
    candidates = np.empty((*R.shape[:-2], 4, 4))  # the symmetric matrix 4 q q^T
    candidates[..., 0, 0] = 1.0 + x - y - z
    candidates[..., 1, 1] = 1.0 - x + y - z
    candidates[..., 2, 2] = 1.0 - x - y + z
    candidates[..., 3, 3] = 1.0 + x + y + z
    for i, j in ((0, 1), (0, 2), (1, 2)):
        candidates[..., i, j] = candidates[..., j, i] = R[..., j, i] + R[..., i, j]
    for i, (j, k) in enumerate(((2, 1), (0, 2), (1, 0))):
        candidates[..., i, 3] = candidates[..., 3, i] = R[..., j, k] - R[..., k, j]
    largest = np.argmax(np.diagonal(candidates, axis1=-2, axis2=-1), axis=-1)
    q = np.take_along_axis(candidates, largest[..., None, None], axis=-2)[..., 0, :]
    q = q / np.linalg.norm(q, axis=-1, keepdims=True)
    return np.where(q[..., 3:] < 0.0, -q, q)


def from_quaternion(q_xyzw: ArrayLike) -> FloatArray:
    """Rotations (..., 3, 3) of quaternions (..., 4) as x, y, z, w of any length but zero."""
    q = with_trailing_shape(q_xyzw, "q_xyzw", (4,))
    norm = np.linalg.norm(q, axis=-1, keepdims=True)
    if np.any(norm == 0.0):
        raise ShapeError("Expected `q_xyzw` of non-zero length, got a quaternion of zeros.")
    q = q / norm
    W = hat(q[..., :3])
    return np.asarray(np.eye(3) + 2.0 * q[..., 3, None, None] * W + 2.0 * (W @ W))


def log(R: ArrayLike) -> FloatArray:
    """Rotation vectors (..., 3) in rad, of length 0 to pi, of R (..., 3, 3); ShapeError if not rotations.

    At exactly half a turn the two opposite vectors are both right; one of them is returned.
    """
    q = to_quaternion(R)
    sine = np.linalg.norm(q[..., :3], axis=-1, keepdims=True)
    half = np.arctan2(sine, q[..., 3:])
    zero = sine == 0.0
    return q[..., :3] * np.where(zero, 2.0, 2.0 * half / np.where(zero, 1.0, sine))


def left_jacobian(w: ArrayLike) -> FloatArray:
    """J (..., 3, 3) with exp(w + d) = exp(J d) exp(w) to first order in d."""
    w = with_trailing_shape(w, "w", (3,))
    angle = _norm(w)
    return _polynomial(w, one_minus_cosine_over_square(angle), angle_minus_sine_over_cube(angle))


def left_jacobian_inverse(w: ArrayLike) -> FloatArray:
    """Inverse (..., 3, 3) of `left_jacobian`; none exists at full turns, where it grows without bound."""
    w = with_trailing_shape(w, "w", (3,))
    return _polynomial(w, -0.5, cotangent_remainder_over_square(_norm(w)))


def right_jacobian(w: ArrayLike) -> FloatArray:
    """J (..., 3, 3) with exp(w + d) = exp(w) exp(J d) to first order in d."""
    return left_jacobian(-with_trailing_shape(w, "w", (3,)))


def right_jacobian_inverse(w: ArrayLike) -> FloatArray:
    """Inverse (..., 3, 3) of `right_jacobian`."""
    return left_jacobian_inverse(-with_trailing_shape(w, "w", (3,)))


def nearest_rotation_and_spectrum(M: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Rotations R (..., 3, 3) that maximise trace(R^T M), and the signed singular values (..., 3) of M.

    The last singular value carries the sign of det(U V^T) (Umeyama 1991). DegenerateDataError where the
    maximum is not unique.
    """
    if not np.all(np.isfinite(M)):
        raise ShapeError("Expected `M` to be finite, got NaN or infinity.")
    U, spectrum, Vt = np.linalg.svd(M)
    sign = np.where(np.linalg.det(U) * np.linalg.det(Vt) < 0.0, -1.0, 1.0)
    spectrum = spectrum.copy()
    spectrum[..., 2] *= sign
    if np.any(spectrum[..., 1] + spectrum[..., 2] <= 1e-12 * spectrum[..., 0]):
        raise DegenerateDataError(
            "Expected a matrix with one nearest rotation, got one whose rank or mirroring leaves it open."
        )
    U = U.copy()
    U[..., :, 2] *= sign[..., None]
    return U @ Vt, spectrum


def project_to_rotation(M: ArrayLike) -> FloatArray:
    """Rotations nearest to M (..., 3, 3) in the Frobenius norm; DegenerateDataError where not unique."""
    return nearest_rotation_and_spectrum(with_trailing_shape(M, "M", (3, 3)))[0]
