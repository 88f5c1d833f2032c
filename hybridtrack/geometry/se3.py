"""Rigid motions of space, SE(3), as homogeneous matrices (..., 4, 4).

A twist xi (..., 6) is translation (m), then rotation vector (rad). Formulas follow Barfoot 2017, "State
Estimation for Robotics", whose order of the twist is the same.

>>> import numpy as np
>>> world_from_camera = compose(np.eye(3), [1.0, 2.0, 3.0])
>>> transform(world_from_camera, [[0.0, 0.0, 1.0]])
array([[1., 2., 4.]])
>>> inverse(np.eye(3))
Traceback (most recent call last):
hybridtrack.errors.ShapeError: Expected `T` of shape (..., 4, 4), got (3, 3).
"""

import numpy as np
from numpy.typing import ArrayLike

from hybridtrack.geometry import so3
from hybridtrack.geometry.arrays import FloatArray, with_trailing_shape
from hybridtrack.geometry.small_angle import (
    angle_minus_sine_over_cube,
    cosine_remainder_over_fourth,
    mixed_remainder_over_fifth,
)


def homogeneous(block: FloatArray, t: FloatArray) -> FloatArray:
    """Matrices (..., 4, 4) with `block` (..., 3, 3) and `t` (..., 3) over the row 0 0 0 1."""
    lead = np.broadcast_shapes(block.shape[:-2], t.shape[:-1])
    matrix = np.zeros((*lead, 4, 4))
    matrix[..., :3, :3] = block
    matrix[..., :3, 3] = t
    matrix[..., 3, 3] = 1.0
    return matrix


def affine_transform(T: FloatArray, points: FloatArray) -> FloatArray:
    """`points` (..., N, 3) or (3,) through the upper three rows of `T` (..., 4, 4)."""
    if points.ndim == 1:
        return np.asarray(T[..., :3, :3] @ points + T[..., :3, 3])
    return points @ np.swapaxes(T[..., :3, :3], -1, -2) + T[..., None, :3, 3]


def compose(R: ArrayLike, t: ArrayLike) -> FloatArray:
    """T (..., 4, 4) of rotations R (..., 3, 3) and translations t (..., 3)."""
    return homogeneous(with_trailing_shape(R, "R", (3, 3)), with_trailing_shape(t, "t", (3,)))


def transform(T: ArrayLike, points: ArrayLike) -> FloatArray:
    """R p + t for `points` (..., N, 3), or one point (3,), under T (..., 4, 4); leading axes broadcast."""
    T = with_trailing_shape(T, "T", (4, 4))
    return affine_transform(T, with_trailing_shape(points, "points", (3,)))


def inverse(T: ArrayLike) -> FloatArray:
    """Inverse (..., 4, 4) of rigid motions."""
    T = with_trailing_shape(T, "T", (4, 4))
    R_transposed = np.swapaxes(T[..., :3, :3], -1, -2)
    return homogeneous(R_transposed, -(R_transposed @ T[..., :3, 3:])[..., 0])


def exp(xi: ArrayLike) -> FloatArray:
    """T (..., 4, 4) of twists (..., 6)."""
    xi = with_trailing_shape(xi, "xi", (6,))
    rotation = xi[..., 3:]
    t = (so3.left_jacobian(rotation) @ xi[..., :3, None])[..., 0]
    return homogeneous(so3.exp(rotation), t)


def log(T: ArrayLike) -> FloatArray:
    """Twists (..., 6), rotation at most half a turn, of T (..., 4, 4); ShapeError if not rigid motions."""
    T = with_trailing_shape(T, "T", (4, 4))
    rotation = so3.log(T[..., :3, :3])
    translation = (so3.left_jacobian_inverse(rotation) @ T[..., :3, 3:])[..., 0]
    return np.concatenate([translation, rotation], axis=-1)


def _upper_block_matrix(diagonal: FloatArray, corner: FloatArray) -> FloatArray:
    """[[diagonal, corner], [0, diagonal]] (..., 6, 6)."""
    matrix = np.zeros((*diagonal.shape[:-2], 6, 6))
    matrix[..., :3, :3] = matrix[..., 3:, 3:] = diagonal
    matrix[..., :3, 3:] = corner
    return matrix


def adjoint(T: ArrayLike) -> FloatArray:
    """Ad (..., 6, 6) with T exp(xi) T^-1 = exp(Ad xi)."""
    T = with_trailing_shape(T, "T", (4, 4))
    R = T[..., :3, :3]
    return _upper_block_matrix(R, so3.hat(T[..., :3, 3]) @ R)


def _coupling(xi: FloatArray) -> FloatArray:
    """Corner block Q (..., 3, 3) of the left Jacobian (Barfoot 2017, eq. 7.86)."""
    P, W = so3.hat(xi[..., :3]), so3.hat(xi[..., 3:])
    angle = np.asarray(np.linalg.norm(xi[..., 3:], axis=-1)[..., None, None])
    WP, PW = W @ P, P @ W
    WPW = WP @ W
    return np.asarray(
        0.5 * P
        + angle_minus_sine_over_cube(angle) * (WP + PW + WPW)
        + cosine_remainder_over_fourth(angle) * (W @ WP + PW @ W - 3.0 * WPW)
        + mixed_remainder_over_fifth(angle) * (WPW @ W + W @ WPW)
    )


def left_jacobian(xi: ArrayLike) -> FloatArray:
    """J (..., 6, 6) with exp(xi + d) = exp(J d) exp(xi) to first order in d."""
    xi = with_trailing_shape(xi, "xi", (6,))
    return _upper_block_matrix(so3.left_jacobian(xi[..., 3:]), _coupling(xi))


def left_jacobian_inverse(xi: ArrayLike) -> FloatArray:
    """Inverse (..., 6, 6) of `left_jacobian`."""
    xi = with_trailing_shape(xi, "xi", (6,))
    J_inverse = so3.left_jacobian_inverse(xi[..., 3:])
    return _upper_block_matrix(J_inverse, -J_inverse @ _coupling(xi) @ J_inverse)


def right_jacobian(xi: ArrayLike) -> FloatArray:
    """J (..., 6, 6) with exp(xi + d) = exp(xi) exp(J d) to first order in d."""
    return left_jacobian(-with_trailing_shape(xi, "xi", (6,)))


def right_jacobian_inverse(xi: ArrayLike) -> FloatArray:
    """Inverse (..., 6, 6) of `right_jacobian`."""
    return left_jacobian_inverse(-with_trailing_shape(xi, "xi", (6,)))


def from_position_quaternion(pose: ArrayLike) -> FloatArray:
    """T (..., 4, 4) of stored poses (..., 7): px, py, pz in m, then qx, qy, qz, qw."""
    pose = with_trailing_shape(pose, "pose", (7,))
    return homogeneous(so3.from_quaternion(pose[..., 3:]), pose[..., :3])


def to_position_quaternion(T: ArrayLike) -> FloatArray:
    """Stored poses (..., 7): px, py, pz in m, then qx, qy, qz, qw with qw >= 0, of T (..., 4, 4)."""
    T = with_trailing_shape(T, "T", (4, 4))
    return np.concatenate([T[..., :3, 3], so3.to_quaternion(T[..., :3, :3])], axis=-1)
