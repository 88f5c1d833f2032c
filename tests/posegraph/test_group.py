"""Both groups keep the promises that the solver is written against."""

import numpy as np
import pytest
from scipy.linalg import expm

from hybridtrack.errors import ShapeError
from hybridtrack.posegraph import SE3, SIM3
from hybridtrack.posegraph.group import sim3_right_jacobian_inverse

GROUPS = pytest.mark.parametrize("group", [SE3, SIM3], ids=["SE3", "Sim3"])


def tangents(dimension: int, count: int = 40) -> np.ndarray:
    """Tangent vectors from tiny to far: translations up to 100, turns up to 3 rad, log scales up to 1.5."""
    rng = np.random.default_rng(3)
    direction = rng.normal(size=(count, 3))
    turn = direction / np.linalg.norm(direction, axis=1)[:, None] * np.geomspace(1e-9, 3.0, count)[:, None]
    rest = rng.uniform(-1.5, 1.5, size=(count, dimension - 6))
    return np.concatenate([rng.normal(size=(count, 3)) * np.geomspace(1e-3, 100.0, count)[:, None], turn, rest], axis=1)


@GROUPS
def test_right_jacobian_inverse_agrees_with_differences(group):
    """log(T exp(d)) changes with d as the inverse right Jacobian says, far from and at the identity."""
    xi = np.concatenate([tangents(group.dimension), np.zeros((1, group.dimension))])
    step = 1e-6
    for column in range(group.dimension):
        small = np.zeros(group.dimension)
        small[column] = step
        ahead = group.log(group.exp(xi) @ group.exp(small))
        behind = group.log(group.exp(xi) @ group.exp(-small))
        expected = (ahead - behind) / (2.0 * step)
        analytic = group.right_jacobian_inverse(xi)[..., column]
        scale = np.maximum(1.0, np.abs(xi).max(axis=1))[:, None]
        assert np.abs((analytic - expected) / scale).max() < 2e-7


def test_sim3_jacobian_agrees_with_the_exponential_of_an_augmented_matrix():
    """phi1(-ad) read off scipy's exponential of [[-ad, I], [0, 0]] is the inverse of the inverse Jacobian."""
    for xi in tangents(7, 12):
        columns = []
        for basis in np.eye(7):
            commuted = _bracket(xi, basis)
            columns.append(commuted)
        ad = np.array(columns).T
        augmented = np.zeros((14, 14))
        augmented[:7, :7], augmented[:7, 7:] = -ad, np.eye(7)
        jacobian = expm(augmented)[:7, 7:]
        product = sim3_right_jacobian_inverse(xi) @ jacobian
        assert np.abs(product - np.eye(7)).max() < 1e-10 * max(1.0, np.abs(xi).max())


def _matrix(xi: np.ndarray) -> np.ndarray:
    """Algebra element (4, 4) of a Sim(3) tangent vector, written out."""
    v, w, s = xi[:3], xi[3:6], xi[6]
    return np.array([[s, -w[2], w[1], v[0]], [w[2], s, -w[0], v[1]], [-w[1], w[0], s, v[2]], [0.0, 0.0, 0.0, 0.0]])


def _bracket(one: np.ndarray, two: np.ndarray) -> np.ndarray:
    """Commutator of two tangent vectors by matrix products."""
    m = _matrix(one) @ _matrix(two) - _matrix(two) @ _matrix(one)
    return np.array([m[0, 3], m[1, 3], m[2, 3], m[2, 1], m[0, 2], m[1, 0], m[0, 0]])


@GROUPS
def test_orthonormal_removes_rounding_and_nothing_else(group):
    """A disturbed rotation block comes back to the group, close to where it was."""
    pose = group.exp(tangents(group.dimension, 5))
    disturbed = pose.copy()
    disturbed[..., :3, :3] += 1e-10 * np.random.default_rng(1).normal(size=(5, 3, 3))
    mended = group.orthonormal(disturbed)
    assert np.abs(mended - pose).max() < 1e-9
    assert group.checked(mended[0], "pose").shape == (4, 4)


def test_checked_refuses_what_is_no_element():
    """A wrong shape, a NaN and a scale on SE(3) are each refused with the name of the thing."""
    with pytest.raises(ShapeError, match=r"pose 7: expected a pose of shape \(4, 4\), got \(3, 4\)"):
        SE3.checked(np.eye(4)[:3], "pose 7")
    with pytest.raises(ShapeError, match="pose 7: expected finite numbers"):
        SE3.checked(np.full((4, 4), np.nan), "pose 7")
    scaled = np.diag([2.0, 2.0, 2.0, 1.0])
    with pytest.raises(ShapeError, match=r"expected an element of SE\(3\)"):
        SE3.checked(scaled, "pose 7")
    assert np.array_equal(SIM3.checked(scaled, "pose 7"), scaled)
    with pytest.raises(ShapeError, match=r"expected an element of Sim\(3\)"):
        SIM3.checked(np.diag([1.0, 1.0, -1.0, 1.0]), "pose 7")
