"""The closed-form light of blurred squares against point sampling and bivariate normal integrals."""

import numpy as np
import pytest
from scipy.stats import multivariate_normal

from hybridtrack.calibration.light_kernels import crossing_memberships, square_fractions

NODE = np.zeros((1, 2))
WHOLE = np.ones((1, 1))


def fractions_at(board, gradient, sigma, squares, nodes=NODE, weights=WHOLE):
    """One row of square_fractions for each board point."""
    board = np.atleast_2d(np.asarray(board, float))
    out = np.empty((len(board), 4))
    square_fractions(board, np.tile(gradient, (len(board), 1, 1)), nodes, weights, np.zeros(len(board), dtype=np.int64),
                     np.ones(2), sigma, np.asarray(squares, float), out)  # fmt: skip
    return out


@pytest.mark.parametrize("skew", [0.0, 0.15, -0.3])
def test_light_at_a_crossing_is_the_bivariate_normal_integral(skew):
    """With edges up to 17 degrees off square, the closed form is within 1e-3 of the exact integral (scipy)."""
    gradient = np.array([[0.05, 0.0], [0.05 * skew, 0.05]])
    squares = np.array([[1.0, 0.0], [0.0, 0.0]])
    cov = gradient @ gradient.T * 0.9**2
    for point in ([1.0, 1.0], [1.02, 0.97], [0.95, 1.06], [1.1, 0.9]):
        exact = multivariate_normal.cdf([1.0 - point[0], 1.0 - point[1]], cov=cov)
        assert fractions_at(point, gradient, 0.9, squares)[0, 0] == pytest.approx(exact, abs=1e-3)


def test_light_far_from_edges_is_that_of_the_square():
    """Inside a square, and outside the board, blur changes nothing."""
    squares = np.array([[1.0, -1.0, 0.0], [-1.0, 0.0, -1.0]])
    gradient = 0.02 * np.eye(2)
    found = fractions_at([[0.5, 0.5], [1.5, 0.5], [1.5, 1.5], [-0.5, 0.5], [3.6, 1.5]], gradient, 1.0, squares)
    assert found[:, 0].tolist() == [1.0, -1.0, 0.0, 0.0, 0.0]
    assert np.all(found[:, 1:] == 0.0)


def test_derivatives_are_those_of_differences():
    """By position and by blur, at edges and at skewed crossings, aperture included."""
    rng = np.random.default_rng(3)
    gradient = np.array([[0.04, 0.006], [-0.01, 0.05]])
    squares = rng.normal(size=(3, 4))
    nodes, weights = rng.uniform(-0.5, 0.5, (5, 2)), np.full((1, 5), 0.2)
    points = np.array([[1.02, 1.01], [2.0, 1.4], [0.97, 2.03], [3.01, 0.6]])
    found = fractions_at(points, gradient, 0.8, squares, nodes, weights)
    h = 1e-5
    for k in range(2):
        move = gradient[:, k] * h
        ahead = fractions_at(points + move, gradient, 0.8, squares, nodes, weights)[:, 0]
        back = fractions_at(points - move, gradient, 0.8, squares, nodes, weights)[:, 0]
        np.testing.assert_allclose(found[:, 1 + k], (ahead - back) / (2 * h), atol=1e-7)
    ahead = fractions_at(points, gradient, 0.8 * np.exp(h), squares, nodes, weights)[:, 0]
    back = fractions_at(points, gradient, 0.8 * np.exp(-h), squares, nodes, weights)[:, 0]
    np.testing.assert_allclose(found[:, 3], (ahead - back) / (2 * h), atol=1e-7)


def test_memberships_agree_with_fractions_and_differences():
    """The four quadrants' memberships rebuild the light of squares, and their derivatives are those of differences."""
    gradient, centre, shift = np.array([[0.04, 0.006], [-0.01, 0.05]]), np.array([1.0, 1.0]), np.array([0.3, -0.2])
    points = np.array([[1.02, 1.01], [0.95, 1.02], [1.0, 0.9]])
    squares = np.array([[0.2, 0.9], [0.7, -0.3]])

    def members(moved, sigma=0.8):
        out = np.empty((len(points), 12))
        crossing_memberships(points, np.tile(gradient, (3, 1, 1)), NODE, WHOLE, np.zeros(3, dtype=np.int64), centre,
                             moved, sigma, out)  # fmt: skip
        return out

    a, b, ab = members(shift)[:, :3].T
    light = 0.2 * (1 - a - b + ab) + 0.9 * (a - ab) + 0.7 * (b - ab) - 0.3 * ab
    np.testing.assert_allclose(light, fractions_at(points - gradient @ shift, gradient, 0.8, squares)[:, 0], atol=1e-12)
    h = 1e-5
    for k in range(2):
        step = h * np.eye(2)[k]
        slope = (members(shift + step) - members(shift - step))[:, :3] / (2 * h)
        np.testing.assert_allclose(-slope, members(shift)[:, [3 + k, 6 + k, 9 + k]], atol=1e-7)
    slope = (members(shift, 0.8 * np.exp(h)) - members(shift, 0.8 * np.exp(-h)))[:, :3] / (2 * h)
    np.testing.assert_allclose(slope, members(shift)[:, [5, 8, 11]], atol=1e-7)
