"""Tests of hybridtrack.geometry.small_angle."""

from collections.abc import Callable
from decimal import Decimal, getcontext

import numpy as np
import pytest

from hybridtrack.geometry import small_angle
from hybridtrack.geometry.arrays import FloatArray

getcontext().prec = 120
_ANGLES = [1e-9, 1e-4, 0.1, 0.5, 0.9999999, 1.0, 1.0000001, 2.0, 3.1, 5.0]


def _sine(a: Decimal) -> Decimal:
    """Taylor sum in 120 digits, which no cancellation below reaches."""
    term, total, n = a, a, 1
    while abs(term) > Decimal(10) ** -110:
        n += 2
        term *= -a * a / (n * (n - 1))
        total += term
    return total


def _cosine(a: Decimal) -> Decimal:
    return 1 - 2 * _sine(a / 2) ** 2


_EXACT: dict[str, Callable[[Decimal], Decimal]] = {
    "sine_over_angle": lambda a: _sine(a) / a,
    "one_minus_cosine_over_square": lambda a: (1 - _cosine(a)) / a**2,
    "angle_minus_sine_over_cube": lambda a: (a - _sine(a)) / a**3,
    "cosine_remainder_over_fourth": lambda a: (a**2 + 2 * _cosine(a) - 2) / (2 * a**4),
    "mixed_remainder_over_fifth": lambda a: (2 * a - 3 * _sine(a) + a * _cosine(a)) / (2 * a**5),
    "cotangent_remainder_over_square": lambda a: (1 - a / 2 * _cosine(a / 2) / _sine(a / 2)) / a**2,
}
_AT_ZERO = {
    "sine_over_angle": 1.0,
    "one_minus_cosine_over_square": 1.0 / 2.0,
    "angle_minus_sine_over_cube": 1.0 / 6.0,
    "cosine_remainder_over_fourth": 1.0 / 24.0,
    "mixed_remainder_over_fifth": 1.0 / 120.0,
    "cotangent_remainder_over_square": 1.0 / 12.0,
}


@pytest.mark.parametrize("name", list(_EXACT))
def test_agrees_with_long_arithmetic_on_both_sides_of_the_switch(name: str) -> None:
    """Each quotient equals its definition in 120 digits to 1e-13 of its value, at small and large angles."""
    function: Callable[[FloatArray], FloatArray] = getattr(small_angle, name)
    wanted = [float(_EXACT[name](Decimal(a))) for a in _ANGLES]
    np.testing.assert_allclose(function(np.array(_ANGLES)), wanted, rtol=1e-13)


@pytest.mark.parametrize("name", list(_AT_ZERO))
def test_limit_at_zero(name: str) -> None:
    """At zero each quotient is its limit, with no warning."""
    function: Callable[[FloatArray], FloatArray] = getattr(small_angle, name)
    assert function(np.array([0.0]))[0] == pytest.approx(_AT_ZERO[name], rel=1e-15)
