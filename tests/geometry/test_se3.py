"""Tests of hybridtrack.geometry.se3."""

from collections.abc import Callable

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from hypothesis.extra.numpy import arrays
from scipy.linalg import expm
from scipy.spatial.transform import Rotation

from hybridtrack.errors import ShapeError
from hybridtrack.geometry import se3, so3
from hybridtrack.geometry.arrays import FloatArray

_twists = arrays(np.float64, 6, elements=st.floats(-1.8, 1.8))


def _differences(function: Callable[[FloatArray], FloatArray], at: FloatArray, step: float = 1e-5) -> FloatArray:
    shifts = step * np.eye(len(at))
    return np.stack([(function(at + d) - function(at - d)) / (2.0 * step) for d in shifts], axis=-1)


def _twist(size: float, rng: np.random.Generator) -> FloatArray:
    """A twist whose rotation has the length `size`."""
    xi = rng.normal(size=6)
    xi[3:] *= size / np.linalg.norm(xi[3:])
    return xi


@pytest.fixture
def twists(rotation_vectors: FloatArray, rng: np.random.Generator) -> FloatArray:
    """Twists (600, 6) with rotations from zero to half a turn."""
    return np.concatenate([rng.normal(scale=3.0, size=(600, 3)), rotation_vectors], axis=1)


def test_exp_is_the_matrix_exponential(twists: FloatArray) -> None:
    """exp equals scipy.linalg.expm of the 4 x 4 generator."""
    generator = np.zeros((600, 4, 4))
    generator[:, :3, :3] = so3.hat(twists[:, 3:])
    generator[:, :3, 3] = twists[:, :3]
    np.testing.assert_allclose(se3.exp(twists)[::10], expm(generator[::10]), atol=2e-14)


def test_log_undoes_exp(twists: FloatArray) -> None:
    """log(exp(xi)) = xi to 1e-13, from no rotation to half a turn."""
    np.testing.assert_allclose(se3.log(se3.exp(twists)), twists, atol=1e-13)


@settings(deadline=None)
@given(a=_twists, b=_twists)
def test_group_and_adjoint_identities(a: FloatArray, b: FloatArray) -> None:
    """T T^-1 = 1, T exp(b) T^-1 = exp(Ad(T) b), and Ad of a product is the product of Ads."""
    T, U = se3.exp(a), se3.exp(b)
    np.testing.assert_allclose(T @ se3.inverse(T), np.eye(4), atol=1e-14)
    np.testing.assert_allclose(T @ U @ se3.inverse(T), se3.exp(se3.adjoint(T) @ b), atol=1e-13)
    np.testing.assert_allclose(se3.adjoint(T @ U), se3.adjoint(T) @ se3.adjoint(U), atol=1e-13)


@pytest.mark.parametrize("size", [1e-9, 1e-3, 0.7, 0.999, 1.001, 2.0, 3.0])
def test_jacobians_by_differences(size: float, rng: np.random.Generator) -> None:
    """Left and right Jacobian equal central differences of exp about xi, on the side they are named for."""
    xi = _twist(size, rng)
    T_inverse = se3.inverse(se3.exp(xi))
    left = _differences(lambda x: se3.log(se3.exp(x) @ T_inverse), xi)
    right = _differences(lambda x: se3.log(T_inverse @ se3.exp(x)), xi)
    np.testing.assert_allclose(se3.left_jacobian(xi), left, atol=2e-9)
    np.testing.assert_allclose(se3.right_jacobian(xi), right, atol=2e-9)


def test_left_is_adjoint_times_right(twists: FloatArray) -> None:
    """J_left = Ad(exp(xi)) J_right, to 1e-13."""
    product = se3.adjoint(se3.exp(twists)) @ se3.right_jacobian(twists)
    np.testing.assert_allclose(se3.left_jacobian(twists), product, atol=1e-13)


def test_jacobian_inverses(twists: FloatArray) -> None:
    """Each Jacobian times its inverse is one."""
    one = np.broadcast_to(np.eye(6), (600, 6, 6))
    np.testing.assert_allclose(se3.left_jacobian(twists) @ se3.left_jacobian_inverse(twists), one, atol=1e-13)
    np.testing.assert_allclose(se3.right_jacobian(twists) @ se3.right_jacobian_inverse(twists), one, atol=1e-13)


def test_transform_composes_and_broadcasts(rng: np.random.Generator) -> None:
    """(T U) p = T (U p) for stacks of motions and of points, and a single point keeps its shape."""
    T, U = se3.exp(rng.normal(size=(2, 7, 6)))
    points = rng.normal(size=(7, 11, 3))
    np.testing.assert_allclose(se3.transform(T @ U, points), se3.transform(T, se3.transform(U, points)), atol=1e-13)
    np.testing.assert_allclose(se3.transform(T, points[0])[3], points[0] @ T[3, :3, :3].T + T[3, :3, 3], atol=1e-14)
    np.testing.assert_allclose(se3.transform(T[0], points[0, 0]), se3.transform(T[0], points[0])[0], atol=1e-15)


def test_position_quaternion_round_trip(rng: np.random.Generator) -> None:
    """Stored poses come back with qw >= 0, and their rotation is scipy's."""
    pose = np.concatenate([rng.normal(size=(40, 3)), Rotation.random(40, rng=rng).as_quat(canonical=True)], axis=1)
    T = se3.from_position_quaternion(pose)
    np.testing.assert_allclose(T[:, :3, :3], Rotation.from_quat(pose[:, 3:]).as_matrix(), atol=1e-14)
    np.testing.assert_allclose(se3.to_position_quaternion(T), pose, atol=1e-14)


def test_refusals() -> None:
    """Wrong shapes and blocks that are no rotation are refused."""
    with pytest.raises(ShapeError, match=r"Expected `xi` of shape \(\.\.\., 6\), got \(7,\)"):
        se3.exp(np.zeros(7))
    with pytest.raises(ShapeError, match=r"Expected `pose` of shape \(\.\.\., 7\), got \(6,\)"):
        se3.from_position_quaternion(np.zeros(6))
    with pytest.raises(ShapeError, match="`R` to hold rotations"):
        se3.log(np.diag([2.0, 2.0, 2.0, 1.0]))
