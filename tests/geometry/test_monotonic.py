"""Tests of hybridtrack.geometry.monotonic."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from hybridtrack.geometry.arrays import FloatArray
from hybridtrack.geometry.monotonic import perspective_limit, radial_limit


def _slope(radial: list[float], r: FloatArray) -> FloatArray:
    return 1.0 + sum(((2 * i + 3) * k * r ** (2 * i + 2) for i, k in enumerate(radial)), np.zeros_like(r))


def _least_eigenvalue(radial: list[float], tangential: tuple[float, float], r: float) -> float:
    """The least eigenvalue of the Jacobian, by differences of the model as published, over a ring of radius r."""

    def distorted(a: FloatArray, b: FloatArray) -> FloatArray:
        q = a**2 + b**2
        scale = 1.0 + radial[0] * q + radial[1] * q**2 + radial[2] * q**3
        p1, p2 = tangential
        return np.stack(
            [a * scale + 2 * p1 * a * b + p2 * (q + 2 * a**2), b * scale + p1 * (q + 2 * b**2) + 2 * p2 * a * b]
        )

    angle = np.linspace(0.0, 2.0 * np.pi, 721) + np.arctan2(tangential[0], tangential[1])
    a, b, h = r * np.cos(angle), r * np.sin(angle), 1e-6
    J = np.stack([distorted(a + h, b) - distorted(a - h, b), distorted(a, b + h) - distorted(a, b - h)], axis=1)
    J = np.moveaxis(J / (2.0 * h), -1, 0)
    return float(np.linalg.eigvalsh(0.5 * (J + np.swapaxes(J, 1, 2))).min())


@pytest.mark.parametrize(
    ("radial", "limit"),
    [
        ([0.0, 0.0, 0.0], np.inf),
        ([-1.0 / 3.0], 1.0),  # slope 1 - r^2
        ([0.0, -1.0 / 5.0], 1.0),  # slope 1 - r^4
        ([0.5, 0.1, 0.0], np.inf),
        ([-5.0 / 12.0, 1.0 / 20.0], 1.0),  # slope (1 - r^2)(1 - r^2 / 4)
        ([-2.0 / 3.0, 1.0 / 5.0], np.inf),  # slope (1 - r^2)^2 touches zero and rises again
        ([0.0, 0.0, -1e-100], (1.0 / 7e-100) ** (1.0 / 6.0)),
        ([-2e-313], np.inf),  # the turn lies past any direction a number can hold
        ([-1.0 / 3.0, 1e-14, 0.0], 1.0),
    ],
)
def test_known_limits(radial: list[float], limit: float) -> None:
    """Polynomials with a known first root of the slope give it; those that never fall give infinity."""
    assert radial_limit(radial) == pytest.approx(limit, rel=1e-12)


@settings(deadline=None)
@given(radial=st.lists(st.floats(-2.0, 2.0), min_size=1, max_size=4))
def test_slope_is_positive_inside_and_turns_at_the_limit(radial: list[float]) -> None:
    """On a fine grid the slope stays positive up to the limit, and just past it is negative."""
    limit = radial_limit(radial)
    inside = min(limit, 20.0) * np.linspace(0.0, 1.0, 4001)[:-1]
    assert np.all(_slope(radial, inside) > -1e-9)
    if np.isfinite(limit):
        near = limit * np.array([1.0 + 1e-7, 1.0 + 1e-4, 1.0 + 1e-2])
        assert _slope(radial, near).min() < 0.0


def test_with_tangential_terms_alone() -> None:
    """With no radial term the Jacobian first turns singular at r = 1 / (6 |p|)."""
    assert perspective_limit([0.0, 0.0, 0.0], (0.03, 0.04)) == pytest.approx(1.0 / 0.3, rel=1e-12)


@settings(deadline=None)
@given(
    radial=st.lists(st.floats(-1.0, 1.0), min_size=3, max_size=3),
    tangential=st.tuples(st.floats(-0.3, 0.3), st.floats(-0.3, 0.3)).filter(lambda p: np.hypot(*p) > 1e-6),
)
def test_jacobian_is_positive_definite_inside_and_not_outside(
    radial: list[float], tangential: tuple[float, float]
) -> None:
    """Over rings inside the limit every Jacobian is positive definite; just outside, one is not."""
    limit = perspective_limit(radial, tangential)
    for part in (0.1, 0.5, 0.9, 0.999):
        assert _least_eigenvalue(radial, tangential, part * min(limit, 5.0)) > -1e-7
    if limit < 50.0:
        assert min(_least_eigenvalue(radial, tangential, part * limit) for part in (1.0001, 1.01)) < 1e-7


def test_tangential_limit_is_at_most_the_radial_one() -> None:
    """Tangential terms only shrink the disc, and vanish into the radial limit as they go to zero."""
    radial = [-0.3, 0.05, 0.0]
    limits = [perspective_limit(radial, (p, 0.0)) for p in (0.0, 1e-12, 1e-3, 1e-2, 1e-1)]
    assert limits == sorted(limits, reverse=True)
    assert limits[1] == pytest.approx(radial_limit(radial), rel=1e-9)
