"""Tests of hybridtrack.geometry.perspective."""

import time

import cv2
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from hybridtrack.errors import LensDomainError, OptionError, ShapeError
from hybridtrack.geometry import PerspectiveLens
from hybridtrack.geometry.arrays import FloatArray

WIDE = PerspectiveLens(820.0, 790.0, 633.0, 402.0, radial=(-0.31, 0.12, -0.02), tangential=(8e-4, -5e-4))
_focal = st.floats(50.0, 5000.0)
_term = st.floats(-1.0, 1.0)
_side = st.floats(-0.05, 0.05)


def _matrices(lens: PerspectiveLens) -> tuple[FloatArray, FloatArray]:
    """Camera matrix and distortion (k1, k2, p1, p2, k3) as OpenCV orders them."""
    camera = np.array([[lens.fx, 0.0, lens.cx], [0.0, lens.fy, lens.cy], [0.0, 0.0, 1.0]])
    k1, k2, k3 = lens.radial
    return camera, np.array([k1, k2, *lens.tangential, k3])


def _points(rng: np.random.Generator, count: int = 400) -> FloatArray:
    return np.concatenate([rng.uniform(-2.0, 2.0, (count, 2)), rng.uniform(2.5, 9.0, (count, 1))], axis=1)


def test_project_agrees_with_opencv(rng: np.random.Generator) -> None:
    """Pixels and derivatives by fx, fy, cx, cy and distortion equal cv2.projectPoints."""
    points = _points(rng)
    camera, distortion = _matrices(WIDE)
    wanted, jacobian = cv2.projectPoints(points, np.zeros(3), np.zeros(3), camera, distortion)
    uv, _, d_parameters = WIDE.project_with_jacobians(points)
    np.testing.assert_allclose(uv, wanted[:, 0], atol=1e-10)
    np.testing.assert_allclose(WIDE.project(points), wanted[:, 0], atol=1e-10)
    order = [0, 1, 2, 3, 4, 5, 8, 6, 7]  # OpenCV: fx fy cx cy k1 k2 p1 p2 k3, after 6 columns of pose
    outside = jacobian[:, 6:].reshape(len(points), 2, -1)[:, :, order]
    np.testing.assert_allclose(d_parameters, outside, atol=1e-9)


def test_unproject_agrees_with_opencv(rng: np.random.Generator) -> None:
    """Directions equal cv2.undistortPoints iterated to convergence."""
    uv = rng.uniform([0.0, 0.0], [1279.0, 799.0], (300, 2))
    camera, distortion = _matrices(WIDE)
    criteria = (cv2.TERM_CRITERIA_COUNT | cv2.TERM_CRITERIA_EPS, 500, 1e-15)
    wanted = cv2.undistortPoints(uv[:, None], camera, distortion, None, None, criteria=criteria)[:, 0]
    directions = WIDE.unproject(uv)
    np.testing.assert_allclose(directions[:, :2] / directions[:, 2:], wanted, atol=1e-11)


def test_jacobians_by_differences(rng: np.random.Generator) -> None:
    """Derivatives by point and by every parameter equal central differences."""
    points = _points(rng, 40)
    _, d_point, d_parameters = WIDE.project_with_jacobians(points)
    for i, step in enumerate(1e-6 * np.eye(3)):
        difference = (WIDE.project(points + step) - WIDE.project(points - step)) / 2e-6
        np.testing.assert_allclose(d_point[..., i], difference, atol=2e-6)
    for i, step in enumerate(1e-5 * np.eye(9)):
        up, down = WIDE.with_parameters(WIDE.parameters + step), WIDE.with_parameters(WIDE.parameters - step)
        difference = (up.project(points) - down.project(points)) / 2e-5
        np.testing.assert_allclose(d_parameters[..., i], difference, atol=2e-6)


@settings(deadline=None, max_examples=200)
@given(
    focal=st.tuples(_focal, _focal),
    radial=st.tuples(_term, _term, _term),
    tangential=st.tuples(_side, _side),
    part=st.floats(0.0, 1.0),
    angle=st.floats(0.0, 6.3),
)
def test_round_trip_wherever_the_model_is_monotonic(
    focal: tuple[float, float],
    radial: tuple[float, float, float],
    tangential: tuple[float, float],
    part: float,
    angle: float,
) -> None:
    """For any lens, a point anywhere up to the limit itself projects, unprojects and projects to 1e-10 px."""
    lens = PerspectiveLens(*focal, 320.0, 240.0, radial=radial, tangential=tangential)
    r = part * min(lens.monotonic_limit, 1.5)
    uv = lens.project([r * np.cos(angle), r * np.sin(angle), 1.0])
    np.testing.assert_allclose(lens.project(lens.unproject(uv)), uv, rtol=2e-15, atol=1e-10)


def test_directions_are_those_projected(rng: np.random.Generator) -> None:
    """Unprojecting gives back the unit direction of the point, not another that shares its pixel."""
    r = 0.98 * WIDE.monotonic_limit * np.sqrt(rng.uniform(size=3000))
    angle = rng.uniform(0.0, 2.0 * np.pi, 3000)
    points = np.stack([r * np.cos(angle), r * np.sin(angle), np.ones_like(r)], axis=-1)
    unit = points / np.linalg.norm(points, axis=1, keepdims=True)
    np.testing.assert_allclose(WIDE.unproject(WIDE.project(points)), unit, atol=1e-12)


def test_leading_axes_are_kept() -> None:
    """Any leading axes, none and empty ones included, come back; float32 and strided arrays are accepted."""
    points = np.ones((2, 5, 3), np.float32)[:, ::2]
    uv, d_point, d_parameters = WIDE.project_with_jacobians(points)
    assert (uv.shape, d_point.shape, d_parameters.shape) == ((2, 3, 2), (2, 3, 2, 3), (2, 3, 2, 9))
    assert WIDE.unproject(uv).shape == (2, 3, 3)
    assert WIDE.project(np.ones(3)).shape == (2,)
    assert WIDE.unproject(np.empty((0, 2))).shape == (0, 3)


def test_points_without_a_picture_are_nan() -> None:
    """Behind the lens, on its plane, beyond the limit, and NaN: NaN from every output, and only there."""
    lens = PerspectiveLens(800.0, 800.0, 0.0, 0.0, radial=(-1.0 / 3.0, 0.0, 0.0))
    points = np.array([[0.0, 0, 1], [0, 0, -1], [0.1, 0, 0], [1.001, 0, 1], [0.999, 0, 1], [np.nan, 0, 1]])
    wanted = [False, True, True, True, False, True]
    for output in (lens.project(points), *lens.project_with_jacobians(points)):
        np.testing.assert_array_equal(np.isnan(output).reshape(6, -1).all(axis=1), wanted)
        np.testing.assert_array_equal(np.isnan(output).reshape(6, -1).any(axis=1), wanted)


def test_pixels_outside_are_refused_or_nan() -> None:
    """A pixel that no point reaches raises, naming the first; with allow_outside it alone is NaN."""
    lens = PerspectiveLens(800.0, 800.0, 0.0, 0.0, radial=(-1.0 / 3.0, 0.0, 0.0), tangential=(1e-4, 0.0))
    uv = np.array([[10.0, 10.0], [700.0, 0.0], [np.inf, 0.0], [np.nan, 1.0], [0.0, 0.0]])
    with pytest.raises(LensDomainError, match=r"got 3 of 5 outside, the first at \(u, v\) = \(700, 0\)"):
        lens.unproject(uv)
    directions = lens.unproject(uv, allow_outside=True)
    np.testing.assert_array_equal(np.isnan(directions).all(axis=1), [False, True, True, True, False])
    np.testing.assert_array_equal(np.isnan(directions).any(axis=1), [False, True, True, True, False])
    np.testing.assert_array_equal(directions[4], [0.0, 0.0, 1.0])


def test_is_monotonic_over() -> None:
    """An array that reaches past the largest distorted radius (533 px here) is not covered."""
    lens = PerspectiveLens(800.0, 800.0, 300.0, 300.0, radial=(-1.0 / 3.0, 0.0, 0.0))
    assert lens.is_monotonic_over(600, 600)
    assert not lens.is_monotonic_over(840, 600)
    assert lens.is_monotonic_over(740, 600)
    assert not lens.is_monotonic_over(740, 840)


def test_parameters_round_trip() -> None:
    """`parameters` and `with_parameters` follow `names`; equal lenses compare and hash equal."""
    assert WIDE.names == ("fx", "fy", "cx", "cy", "k1", "k2", "k3", "p1", "p2")
    np.testing.assert_array_equal(WIDE.parameters, [820, 790, 633, 402, -0.31, 0.12, -0.02, 8e-4, -5e-4])
    again = WIDE.with_parameters(WIDE.parameters)
    assert again == WIDE
    assert hash(again) == hash(WIDE)


def test_refusals() -> None:
    """Values that can't be a lens, and arrays of other shapes, are refused by name."""
    with pytest.raises(OptionError, match="`fy` of PerspectiveLens to be positive and finite, got -1"):
        PerspectiveLens(800.0, -1.0, 0.0, 0.0)
    with pytest.raises(OptionError, match="centre and distortion of PerspectiveLens to be finite"):
        PerspectiveLens(800.0, 800.0, 0.0, float("nan"))
    with pytest.raises(OptionError, match="`radial` of PerspectiveLens to have 3 terms, got 2"):
        PerspectiveLens(800.0, 800.0, 0.0, 0.0, radial=(0.1, 0.2))
    with pytest.raises(ShapeError, match=r"Expected `points` of shape \(\.\.\., 3\), got \(2,\)"):
        WIDE.project([1.0, 2.0])
    with pytest.raises(ShapeError, match=r"Expected `uv` of shape \(\.\.\., 2\), got \(3,\)"):
        WIDE.unproject([1.0, 2.0, 3.0])
    with pytest.raises(ShapeError, match=r"Expected `parameters` of shape \(9,\), got \(8,\)"):
        WIDE.with_parameters(np.ones(8))


@pytest.mark.study
def test_a_million_pixels_in_a_second(rng: np.random.Generator) -> None:
    """Unprojecting a million pixels with tangential terms takes less than a second on one core."""
    uv = rng.uniform([0.0, 0.0], [1279.0, 799.0], (1_000_000, 2))
    WIDE.unproject(uv[:10])
    start = time.perf_counter()
    WIDE.unproject(uv)
    assert time.perf_counter() - start < 1.0
