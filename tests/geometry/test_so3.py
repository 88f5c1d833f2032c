"""Tests of hybridtrack.geometry.so3."""

from collections.abc import Callable

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from hypothesis.extra.numpy import arrays
from scipy.linalg import expm
from scipy.spatial.transform import Rotation

from hybridtrack.errors import DegenerateDataError, ShapeError
from hybridtrack.geometry import so3
from hybridtrack.geometry.arrays import FloatArray

_vectors = arrays(np.float64, 3, elements=st.floats(-1.8, 1.8))


def _differences(function: Callable[[FloatArray], FloatArray], at: FloatArray, step: float = 1e-5) -> FloatArray:
    shifts = step * np.eye(len(at))
    return np.stack([(function(at + d) - function(at - d)) / (2.0 * step) for d in shifts], axis=-1)


def test_hat_is_the_cross_product_and_vee_undoes_it(rng: np.random.Generator) -> None:
    """hat(a) b = a x b, and vee(hat(a)) = a, over any leading axes."""
    a, b = rng.normal(size=(2, 4, 5, 3))
    np.testing.assert_allclose((so3.hat(a) @ b[..., None])[..., 0], np.cross(a, b), atol=1e-15)
    np.testing.assert_array_equal(so3.vee(so3.hat(a)), a)


def test_exp_agrees_with_scipy(rotation_vectors: FloatArray) -> None:
    """exp equals scipy.spatial.transform.Rotation and the matrix exponential from zero to half a turn."""
    R = so3.exp(rotation_vectors)
    np.testing.assert_allclose(R, Rotation.from_rotvec(rotation_vectors).as_matrix(), atol=2e-15)
    np.testing.assert_allclose(R[::40], expm(so3.hat(rotation_vectors[::40])), atol=5e-15)


def test_log_undoes_exp_from_zero_to_half_a_turn(rotation_vectors: FloatArray) -> None:
    """log(exp(w)) = w to 1e-14, tiny angles relative to their size."""
    back = so3.log(so3.exp(rotation_vectors))
    np.testing.assert_allclose(back, rotation_vectors, atol=2e-14)
    tiny = np.array([1e-12, -2e-12, 3e-12])
    np.testing.assert_allclose(so3.log(so3.exp(tiny)), tiny, rtol=1e-12)


def test_log_agrees_with_scipy(rng: np.random.Generator) -> None:
    """log equals scipy's rotation vectors on rotations drawn uniformly."""
    R = Rotation.random(500, rng=rng)
    np.testing.assert_allclose(so3.log(R.as_matrix()), R.as_rotvec(), atol=1e-13)


def test_log_at_exactly_half_a_turn(rng: np.random.Generator) -> None:
    """At half a turn log has length pi and exp of it is the same rotation."""
    axes = rng.normal(size=(50, 3))
    axes /= np.linalg.norm(axes, axis=1, keepdims=True)
    axes = np.concatenate([axes, np.eye(3), -np.eye(3)])
    R = 2.0 * axes[:, :, None] * axes[:, None, :] - np.eye(3)
    w = so3.log(R)
    np.testing.assert_allclose(np.linalg.norm(w, axis=1), np.pi, rtol=1e-15)
    np.testing.assert_allclose(so3.exp(w), R, atol=5e-15)


@settings(deadline=None)
@given(w=_vectors, scale=st.floats(0.0, 1.0))
def test_exp_is_a_rotation_and_log_its_inverse(w: FloatArray, scale: float) -> None:
    """For any vector: R^T R = 1, exp(log(R)) = R, exp(-w) = R^T."""
    R = so3.exp(scale * w)
    np.testing.assert_allclose(R.T @ R, np.eye(3), atol=4e-15)
    np.testing.assert_allclose(so3.exp(so3.log(R)), R, atol=4e-15)
    np.testing.assert_allclose(so3.exp(-scale * w), R.T, atol=4e-15)


@pytest.mark.parametrize("size", [0.0, 1e-7, 1e-3, 0.7, 1.3, 3.0])
def test_jacobians_by_differences(size: float, rng: np.random.Generator) -> None:
    """Left and right Jacobian equal central differences of exp about w, on the side they are named for."""
    w = rng.normal(size=3)
    w *= size / np.linalg.norm(w)
    R = so3.exp(w)
    left = _differences(lambda x: so3.log(so3.exp(x) @ R.T), w)
    right = _differences(lambda x: so3.log(R.T @ so3.exp(x)), w)
    np.testing.assert_allclose(so3.left_jacobian(w), left, atol=1e-9)
    np.testing.assert_allclose(so3.right_jacobian(w), right, atol=1e-9)


def test_jacobian_inverses(rotation_vectors: FloatArray) -> None:
    """Each Jacobian times its inverse is one to 1e-14."""
    w = rotation_vectors
    np.testing.assert_allclose(
        so3.left_jacobian(w) @ so3.left_jacobian_inverse(w), np.broadcast_to(np.eye(3), (600, 3, 3)), atol=1e-14
    )
    np.testing.assert_allclose(
        so3.right_jacobian(w) @ so3.right_jacobian_inverse(w), np.broadcast_to(np.eye(3), (600, 3, 3)), atol=1e-14
    )


def test_quaternions_agree_with_scipy(rng: np.random.Generator) -> None:
    """Order x, y, z, w and w >= 0 as in scipy's canonical form, both ways, any length on input."""
    R = Rotation.random(300, rng=rng)
    q = R.as_quat(canonical=True)
    np.testing.assert_allclose(so3.to_quaternion(R.as_matrix()), q, atol=1e-14)
    np.testing.assert_allclose(so3.from_quaternion(-3.0 * q), R.as_matrix(), atol=1e-14)


def test_lost_rotations_stay_nan() -> None:
    """NaN rotations give NaN vectors and leave their neighbours alone."""
    lost = np.full((3, 3), np.nan)
    w = so3.log(np.stack([np.eye(3), lost]))
    np.testing.assert_array_equal(w[0], 0.0)
    assert np.isnan(w[1]).all()
    with pytest.raises(ShapeError, match="got a deviation of 3"):
        so3.log(np.stack([lost, 2.0 * np.eye(3)]))


def test_empty_input_gives_empty_output() -> None:
    """No rotations in, none out."""
    assert so3.exp(np.empty((0, 3))).shape == (0, 3, 3)
    assert so3.log(np.empty((0, 3, 3))).shape == (0, 3)


def test_project_to_rotation_is_nearest(rng: np.random.Generator) -> None:
    """A disturbed rotation comes back as a rotation that no small turn brings nearer; a true one is kept."""
    R = so3.exp(rng.normal(size=(20, 3)))
    np.testing.assert_allclose(so3.project_to_rotation(R), R, atol=2e-15)
    M = R + 0.1 * rng.normal(size=R.shape)
    nearest = so3.project_to_rotation(M)
    np.testing.assert_allclose(np.linalg.det(nearest), 1.0, rtol=1e-14)
    distance = np.linalg.norm(nearest - M, axis=(1, 2))
    for turn in 0.01 * np.concatenate([np.eye(3), -np.eye(3)]):
        assert np.all(np.linalg.norm(nearest @ so3.exp(turn) - M, axis=(1, 2)) > distance)


def test_refusals() -> None:
    """What is no rotation, no quaternion, or has no nearest rotation is refused by name."""
    with pytest.raises(ShapeError, match=r"`R` to hold rotations \(R R\^T = 1 .*got a deviation of"):
        so3.log(np.eye(3) + 1e-4)
    with pytest.raises(ShapeError, match="got a mirroring"):
        so3.to_quaternion(np.diag([1.0, 1.0, -1.0]))
    with pytest.raises(ShapeError, match="non-zero length"):
        so3.from_quaternion([0.0, 0.0, 0.0, 0.0])
    with pytest.raises(ShapeError, match="`M` to be finite"):
        so3.project_to_rotation(np.full((3, 3), np.nan))
    with pytest.raises(DegenerateDataError, match="one nearest rotation"):
        so3.project_to_rotation(np.diag([1.0, 0.0, 0.0]))
    with pytest.raises(DegenerateDataError, match="one nearest rotation"):
        so3.project_to_rotation(np.diag([1.0, 1.0, -1.0]))
    with pytest.raises(ShapeError, match=r"Expected `w` of shape \(\.\.\., 3\), got \(4,\)"):
        so3.exp(np.zeros(4))
