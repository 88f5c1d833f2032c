"""Tests of hybridtrack.geometry.sim3."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from hypothesis.extra.numpy import arrays
from scipy.linalg import expm

from hybridtrack.errors import ShapeError
from hybridtrack.geometry import se3, sim3, so3
from hybridtrack.geometry.arrays import FloatArray

_tangents = arrays(np.float64, 7, elements=st.floats(-1.8, 1.8))


def _generator(xi: FloatArray) -> FloatArray:
    matrix = np.zeros((4, 4))
    matrix[:3, :3] = so3.hat(xi[3:6]) + xi[6] * np.eye(3)
    matrix[:3, 3] = xi[:3]
    return matrix


def _translation_by_quadrature(xi: FloatArray) -> FloatArray:
    """Integral of exp(x (g + hat(w))) t over x from 0 to 1, by Gauss and Legendre's rule with 40 points."""
    x, weights = np.polynomial.legendre.leggauss(40)
    x = 0.5 * (x + 1.0)
    paths = np.exp(x * xi[6])[:, None] * (so3.exp(x[:, None] * xi[3:6]) @ xi[:3])
    return 0.5 * weights @ paths


@pytest.mark.parametrize("log_scale", [0.0, 1e-13, -1e-7, 1e-3, -0.5, 0.9, -1.1, 3.0, -4.0])
@pytest.mark.parametrize("angle", [0.0, 1e-13, 1e-7, 1e-3, 0.4, 0.999, 1.2, 3.1415])
def test_exp_and_log_over_both_limits(angle: float, log_scale: float, rng: np.random.Generator) -> None:
    """exp equals its defining integral and scipy.linalg.expm, and log undoes it, at every mix of the two sizes.

    The tolerance on expm is that of its own squarings, relative to the largest entry.
    """
    xi = np.concatenate([rng.normal(size=6), [log_scale]])
    xi[3:6] *= angle / np.linalg.norm(xi[3:6])
    S = sim3.exp(xi)
    largest = max(1.0, np.exp(log_scale))
    np.testing.assert_allclose(S[:3, :3], np.exp(log_scale) * so3.exp(xi[3:6]), atol=1e-15 * largest)
    np.testing.assert_allclose(S[:3, 3], _translation_by_quadrature(xi), atol=1e-14 * largest)
    np.testing.assert_allclose(S, expm(_generator(xi)), atol=1e-13 * largest)
    np.testing.assert_allclose(sim3.log(S), xi, atol=1e-13)


def test_without_scale_it_is_the_rigid_motion(rng: np.random.Generator) -> None:
    """With log scale zero exp equals that of SE(3), stacked or one at a time."""
    xi = rng.normal(size=(5, 4, 6))
    stacked = sim3.exp(np.concatenate([xi, np.zeros((5, 4, 1))], axis=-1))
    np.testing.assert_allclose(stacked, se3.exp(xi), atol=1e-14)


@settings(deadline=None)
@given(a=_tangents, b=_tangents)
def test_group_and_adjoint_identities(a: FloatArray, b: FloatArray) -> None:
    """S S^-1 = 1, S exp(b) S^-1 = exp(Ad(S) b), and Ad of a product is the product of Ads."""
    S, U = sim3.exp(a), sim3.exp(b)
    scale = max(1.0, float(np.abs(S).max()), float(np.abs(U).max())) ** 2
    np.testing.assert_allclose(S @ sim3.inverse(S), np.eye(4), atol=1e-14 * scale)
    np.testing.assert_allclose(S @ U @ sim3.inverse(S), sim3.exp(sim3.adjoint(S) @ b), atol=2e-13 * scale)
    np.testing.assert_allclose(sim3.adjoint(S @ U), sim3.adjoint(S) @ sim3.adjoint(U), atol=1e-13 * scale)


def test_compose_decompose_and_transform(rng: np.random.Generator) -> None:
    """decompose undoes compose, and transform is s R p + t for stacks and for one point."""
    s, R, t = np.exp(rng.normal(size=6)), so3.exp(rng.normal(size=(6, 3))), rng.normal(size=(6, 3))
    S = sim3.compose(s, R, t)
    for got, wanted in zip(sim3.decompose(S), (s, R, t), strict=True):
        np.testing.assert_allclose(got, wanted, atol=1e-14)
    points = rng.normal(size=(6, 8, 3))
    wanted = s[:, None, None] * points @ np.swapaxes(R, 1, 2) + t[:, None]
    np.testing.assert_allclose(sim3.transform(S, points), wanted, atol=1e-13)
    np.testing.assert_allclose(sim3.transform(S[2], points[2, 5]), wanted[2, 5], atol=1e-13)
    back = sim3.transform(sim3.inverse(S), sim3.transform(S, points))
    np.testing.assert_allclose(back, points, atol=1e-13)


def test_refusals() -> None:
    """Scales that are not positive, mirrorings and sheared blocks are refused."""
    with pytest.raises(ShapeError, match="Expected `s` to be positive, got 0"):
        sim3.compose([1.0, 0.0], np.eye(3), np.zeros(3))
    with pytest.raises(ShapeError, match=r"det of the block > 0\), got det = -1"):
        sim3.inverse(np.diag([1.0, 1.0, -1.0, 1.0]))
    with pytest.raises(ShapeError, match="`R` to hold rotations"):
        sim3.log(np.diag([1.0, 2.0, 1.0, 1.0]))
    with pytest.raises(ShapeError, match=r"Expected `xi` of shape \(\.\.\., 7\), got \(6,\)"):
        sim3.exp(np.zeros(6))
