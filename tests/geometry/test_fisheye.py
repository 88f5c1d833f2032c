"""Tests of hybridtrack.geometry.fisheye."""

import cv2
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from hybridtrack.errors import LensDomainError, OptionError, ShapeError
from hybridtrack.geometry import FisheyeLens
from hybridtrack.geometry.arrays import FloatArray

LENS = FisheyeLens(410.0, 405.0, 640.0, 400.0, radial=(0.08, -0.03, 0.007, -0.0012))
_term = st.floats(-0.5, 0.5)


def _matrix(lens: FisheyeLens) -> FloatArray:
    return np.array([[lens.fx, 0.0, lens.cx], [0.0, lens.fy, lens.cy], [0.0, 0.0, 1.0]])


def _at(theta: FloatArray | float, angle: FloatArray | float) -> FloatArray:
    """Unit directions `theta` from the axis, at `angle` about it."""
    theta, angle = np.asarray(theta), np.asarray(angle)
    return np.stack([np.sin(theta) * np.cos(angle), np.sin(theta) * np.sin(angle), np.cos(theta)], axis=-1)


def test_project_agrees_with_opencv(rng: np.random.Generator) -> None:
    """Pixels and derivatives equal cv2.fisheye.projectPoints in front of the camera."""
    points = _at(rng.uniform(0.01, 1.45, 300), rng.uniform(0.0, 6.3, 300)) * rng.uniform(0.5, 9.0, (300, 1))
    zero = np.zeros((1, 1, 3))
    wanted, jacobian = cv2.fisheye.projectPoints(points[None], zero, zero, _matrix(LENS), np.array(LENS.radial))
    uv, _, d_parameters = LENS.project_with_jacobians(points)
    np.testing.assert_allclose(uv, wanted[0], atol=1e-10)
    np.testing.assert_allclose(LENS.project(points), wanted[0], atol=1e-10)
    # OpenCV's columns start with f (2), c (2), k (4).
    np.testing.assert_allclose(d_parameters, jacobian.reshape(300, 2, -1)[:, :, :8], atol=1e-9)


def test_unproject_agrees_with_opencv(rng: np.random.Generator) -> None:
    """Directions equal cv2.fisheye.undistortPoints iterated to convergence."""
    uv = LENS.project(_at(rng.uniform(0.01, 1.3, 300), rng.uniform(0.0, 6.3, 300)))
    criteria = (cv2.TERM_CRITERIA_COUNT | cv2.TERM_CRITERIA_EPS, 100, 1e-14)
    wanted = cv2.fisheye.undistortPoints(uv[None], _matrix(LENS), np.array(LENS.radial), criteria=criteria)[0]
    directions = LENS.unproject(uv)
    np.testing.assert_allclose(directions[:, :2] / directions[:, 2:], wanted, atol=1e-10)


@pytest.mark.parametrize("theta", [0.0, 1e-9, 1e-4, 0.3, 1.2, np.pi / 2.0, 1.7])
def test_jacobians_by_differences(theta: float) -> None:
    """Derivatives by point and by every parameter equal central differences, on the axis and past 90 degrees."""
    points = 2.0 * _at(np.full(8, theta), np.linspace(0.0, 5.5, 8))
    _, d_point, d_parameters = LENS.project_with_jacobians(points)
    for i, step in enumerate(1e-5 * np.eye(3)):
        difference = (LENS.project(points + step) - LENS.project(points - step)) / 2e-5
        np.testing.assert_allclose(d_point[..., i], difference, atol=1e-6)
    for i, step in enumerate(1e-5 * np.eye(8)):
        up, down = LENS.with_parameters(LENS.parameters + step), LENS.with_parameters(LENS.parameters - step)
        difference = (up.project(points) - down.project(points)) / 2e-5
        np.testing.assert_allclose(d_parameters[..., i], difference, atol=1e-6)


@settings(deadline=None, max_examples=200)
@given(
    focal=st.tuples(st.floats(50.0, 3000.0), st.floats(50.0, 3000.0)),
    radial=st.tuples(_term, _term, _term, _term),
    part=st.floats(0.0, 1.0),
    angle=st.floats(0.0, 6.3),
)
def test_round_trip_wherever_the_model_is_monotonic(
    focal: tuple[float, float], radial: tuple[float, float, float, float], part: float, angle: float
) -> None:
    """For any lens, a point anywhere up to the limit projects, unprojects and projects to 1e-10 px."""
    lens = FisheyeLens(*focal, 320.0, 240.0, radial=radial)
    # Straight behind (theta = pi) every direction about the axis is the same point: no picture.
    theta = part * min(lens.monotonic_limit, 3.0)
    uv = lens.project(_at(theta, angle))
    np.testing.assert_allclose(lens.project(lens.unproject(uv)), uv, rtol=2e-15, atol=1e-10)


def test_directions_are_those_projected(rng: np.random.Generator) -> None:
    """Unprojecting gives back the direction, also behind the camera plane."""
    assert LENS.monotonic_limit > 1.7
    directions = _at(rng.uniform(0.0, 1.7, 2000), rng.uniform(0.0, 6.3, 2000))
    np.testing.assert_allclose(LENS.unproject(LENS.project(directions)), directions, atol=1e-13)


def test_points_without_a_picture_are_nan() -> None:
    """Straight behind, at the origin, beyond the limit, and NaN: NaN from every output, and only there."""
    lens = FisheyeLens(300.0, 300.0, 0.0, 0.0, radial=(-1.0 / 3.0, 0.0, 0.0, 0.0))
    assert lens.monotonic_limit == pytest.approx(1.0, rel=1e-12)
    points = np.array([[0.0, 0, 2], [0, 0, -1], [0, 0, 0], _at(1.001, 2.0), _at(0.999, 2.0), [np.nan, 0, 1]])
    wanted = [False, True, True, True, False, True]
    for output in (lens.project(points), *lens.project_with_jacobians(points)):
        np.testing.assert_array_equal(np.isnan(output).reshape(6, -1).all(axis=1), wanted)
        np.testing.assert_array_equal(np.isnan(output).reshape(6, -1).any(axis=1), wanted)


def test_pixels_outside_are_refused_or_nan() -> None:
    """A pixel past the rim of the picture (200 px here) raises; with allow_outside it alone is NaN."""
    lens = FisheyeLens(300.0, 300.0, 0.0, 0.0, radial=(-1.0 / 3.0, 0.0, 0.0, 0.0))
    uv = np.array([[0.0, 199.9], [0.0, 200.1], [np.nan, 0.0], [0.0, 0.0]])
    with pytest.raises(LensDomainError, match=r"got 2 of 4 outside, the first at \(u, v\) = \(0, 200.1\)"):
        lens.unproject(uv)
    directions = lens.unproject(uv, allow_outside=True)
    np.testing.assert_array_equal(np.isnan(directions).all(axis=1), [False, True, True, False])
    np.testing.assert_array_equal(np.isnan(directions).any(axis=1), [False, True, True, False])


def test_is_monotonic_over() -> None:
    """An array whose corners lie past the rim of the picture is not covered."""
    lens = FisheyeLens(300.0, 300.0, 100.0, 100.0, radial=(-1.0 / 3.0, 0.0, 0.0, 0.0))
    assert lens.is_monotonic_over(200, 200)
    assert not lens.is_monotonic_over(250, 250)


def test_parameters_round_trip() -> None:
    """`parameters` and `with_parameters` follow `names`."""
    assert LENS.names == ("fx", "fy", "cx", "cy", "k1", "k2", "k3", "k4")
    assert LENS.with_parameters(LENS.parameters) == LENS


def test_refusals() -> None:
    """Values that can't be a lens, and arrays of other shapes, are refused by name."""
    with pytest.raises(OptionError, match="`fx` of FisheyeLens to be positive and finite, got 0"):
        FisheyeLens(0.0, 300.0, 0.0, 0.0)
    with pytest.raises(OptionError, match="`radial` of FisheyeLens to have 4 terms, got 3"):
        FisheyeLens(300.0, 300.0, 0.0, 0.0, radial=(0.0, 0.0, 0.0))
    with pytest.raises(ShapeError, match=r"Expected `points` of shape \(\.\.\., 3\), got \(2,\)"):
        LENS.project([1.0, 2.0])
    with pytest.raises(ShapeError, match=r"Expected `parameters` of shape \(8,\), got \(9,\)"):
        LENS.with_parameters(np.ones(9))
