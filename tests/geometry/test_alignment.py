"""Tests of hybridtrack.geometry.alignment."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from skimage.transform import estimate_transform

from hybridtrack.errors import DegenerateDataError, ShapeError
from hybridtrack.geometry import rigid, se3, sim3, similarity
from hybridtrack.geometry.arrays import FloatArray


def _cloud(rng: np.random.Generator, count: int = 30) -> FloatArray:
    return rng.normal(size=(count, 3)) * [3.0, 1.0, 0.5] + [10.0, -4.0, 2.0]


@settings(deadline=None, max_examples=60)
@given(seed=st.integers(0, 2**32 - 1), count=st.integers(3, 20))
def test_exact_on_noiseless_points(seed: int, count: int) -> None:
    """Any rigid motion and any similarity come back from 3 or more of their points.

    Three random points can be as good as on a line, hence the tolerance over their spread across it.
    """
    rng = np.random.default_rng(seed)
    source = _cloud(rng, count)
    spread = np.linalg.svd(source - source.mean(axis=0), compute_uv=False)[1]
    T, S = se3.exp(rng.normal(size=6)), sim3.exp(rng.normal(size=7))
    tolerance = 1e-11 / min(1.0, spread)
    np.testing.assert_allclose(rigid(source, se3.transform(T, source)), T, atol=tolerance)
    np.testing.assert_allclose(similarity(source, sim3.transform(S, source)), S, rtol=tolerance, atol=10 * tolerance)


def test_similarity_agrees_with_scikit_image(rng: np.random.Generator) -> None:
    """On noisy points the similarity equals skimage.transform.estimate_transform, which also follows Umeyama."""
    source = _cloud(rng)
    target = sim3.transform(sim3.exp(rng.normal(size=7)), source) + 0.1 * rng.normal(size=source.shape)
    outside = estimate_transform("similarity", source, target)
    np.testing.assert_allclose(similarity(source, target), outside.params, atol=1e-12)
    outside = estimate_transform("euclidean", source, target)
    np.testing.assert_allclose(rigid(source, target), outside.params, atol=1e-12)


def test_planar_and_mirrored_points_give_a_rotation(rng: np.random.Generator) -> None:
    """Points on a plane are enough, and a mirrored cloud still gets a proper rotation."""
    plane = _cloud(rng) * [1.0, 1.0, 0.0]
    T = se3.exp(rng.normal(size=6))
    np.testing.assert_allclose(rigid(plane, se3.transform(T, plane)), T, atol=1e-12)
    mirrored = rigid(_cloud(rng), _cloud(np.random.default_rng(5)) * [1.0, 1.0, -1.0])
    assert np.linalg.det(mirrored[:3, :3]) == pytest.approx(1.0, rel=1e-12)


def test_noisy_rigid_errors_are_as_large_as_predicted() -> None:
    """Over 300 draws the whitened error of translation and turn has a mean square of one a degree of freedom."""
    rng = np.random.default_rng(3)
    source, sigma = _cloud(rng), 0.02
    rows = np.concatenate([np.broadcast_to(np.eye(3), (30, 3, 3)), -np.array([_skew(p) for p in source])], axis=2)
    information = np.einsum("nij,nik->jk", rows, rows) / sigma**2
    squares = []
    for _ in range(300):
        T = se3.exp(rng.normal(size=6))
        target = se3.transform(T, source) + sigma * rng.normal(size=source.shape)
        error = se3.log(se3.inverse(T) @ rigid(source, target))
        squares.append(error @ information @ error)
    assert 0.85 < np.mean(squares) / 6.0 < 1.15


def _skew(p: FloatArray) -> FloatArray:
    return np.array([[0.0, -p[2], p[1]], [p[2], 0.0, -p[0]], [-p[1], p[0], 0.0]])


def test_weights_count_points(rng: np.random.Generator) -> None:
    """A weight of two equals the point twice, and a weight of zero the point left out, however wrong it is."""
    source = _cloud(rng, 8)
    target = se3.transform(se3.exp(rng.normal(size=6)), source) + 0.05 * rng.normal(size=(8, 3))
    target[7] += 100.0
    weighted = rigid(source, target, weights=[2.0, 1, 1, 1, 1, 1, 1, 0.0])
    index = [0, 0, 1, 2, 3, 4, 5, 6]
    np.testing.assert_allclose(weighted, rigid(source[index], target[index]), atol=1e-12)


@pytest.mark.parametrize("align", [rigid, similarity])
def test_degenerate_points_are_refused(align, rng: np.random.Generator) -> None:  # type: ignore[no-untyped-def]
    """Two points, points on a line (also far from the origin), and one point many times are refused."""
    line = np.outer(np.linspace(0.0, 1.0, 9), [1.0, 2.0, 3.0])
    with pytest.raises(DegenerateDataError, match=r"at least 3 matched points .* got 2"):
        align(line[:2], line[:2])
    with pytest.raises(DegenerateDataError, match="Expected `source` to span a plane"):
        align(line, _cloud(rng, 9))
    with pytest.raises(DegenerateDataError, match="Expected `source` to span a plane"):
        align(line + 1e6, _cloud(rng, 9))
    with pytest.raises(DegenerateDataError, match="Expected `target` to span a plane"):
        align(_cloud(rng, 9), np.ones((9, 3)))


def test_wrong_arguments_are_refused(rng: np.random.Generator) -> None:
    """Shapes that differ, values that are not finite and weights that are negative are refused."""
    source = _cloud(rng, 6)
    with pytest.raises(ShapeError, match=r"one shape \(N, 3\), got \(6, 3\) and \(5, 3\)"):
        rigid(source, source[:5])
    with pytest.raises(ShapeError, match="to be finite, got NaN"):
        similarity(source, np.where(np.arange(6)[:, None] == 2, np.nan, source))
    with pytest.raises(ShapeError, match=r"`weights` of shape \(6,\), got \(5,\)"):
        rigid(source, source, weights=np.ones(5))
    with pytest.raises(ShapeError, match="`weights` to be finite and not negative"):
        rigid(source, source, weights=[1, 1, 1, 1, 1, -1])
    with pytest.raises(DegenerateDataError, match="positive weight, got 2"):
        rigid(source, source, weights=[1, 1, 0, 0, 0, 0])
