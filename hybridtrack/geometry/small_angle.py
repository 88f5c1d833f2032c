"""Quotients of trigonometric functions that stay exact as their angle goes to zero.

Every function takes angles >= 0 in rad, of any shape. Where the quotient cancels, a Taylor series in the
squared angle takes over below one radian, with as many terms as reach the last bit.
"""

from collections.abc import Callable
from math import factorial, pi

import numpy as np
from scipy.special import zeta

from hybridtrack.geometry.arrays import FloatArray

_SERIES_BELOW_RAD = 1.0
_TERMS = 11

_SINE_CUBE = [(-1) ** j / factorial(2 * j + 3) for j in range(_TERMS)]
_COSINE_FOURTH = [(-1) ** j / factorial(2 * j + 4) for j in range(_TERMS)]
_MIXED_FIFTH = [(-1) ** j * (j + 1) / factorial(2 * j + 5) for j in range(_TERMS)]
# (1 - (a/2) cot(a/2)) / a^2 has the Bernoulli numbers in its series: |B_2n| / (2n)! = 2 zeta(2n) / (2 pi)^2n.
_COTANGENT_SQUARE = [2.0 * float(zeta(2 * n)) / (2.0 * pi) ** (2 * n) for n in range(1, _TERMS + 1)]


def _series_or_closed(
    angle: FloatArray, coefficients: list[float], closed: Callable[[FloatArray], FloatArray]
) -> FloatArray:
    small = angle < _SERIES_BELOW_RAD
    square = np.where(small, angle, 0.0) ** 2
    series = np.full_like(square, coefficients[-1])
    for coefficient in reversed(coefficients[:-1]):
        series = series * square + coefficient
    return np.where(small, series, closed(np.where(small, _SERIES_BELOW_RAD, angle)))


def sine_over_angle(angle: FloatArray) -> FloatArray:
    """sin(a) / a."""
    zero = angle == 0.0
    safe = np.where(zero, 1.0, angle)
    return np.where(zero, 1.0, np.sin(safe) / safe)


def one_minus_cosine_over_square(angle: FloatArray) -> FloatArray:
    """(1 - cos a) / a^2, as sin^2(a/2) / (a^2 / 2), which does not cancel."""
    return 0.5 * sine_over_angle(0.5 * angle) ** 2


def angle_minus_sine_over_cube(angle: FloatArray) -> FloatArray:
    """(a - sin a) / a^3."""
    return _series_or_closed(angle, _SINE_CUBE, lambda a: (a - np.sin(a)) / a**3)


def cosine_remainder_over_fourth(angle: FloatArray) -> FloatArray:
    """(a^2 + 2 cos a - 2) / (2 a^4)."""
    return _series_or_closed(angle, _COSINE_FOURTH, lambda a: (a**2 + 2.0 * np.cos(a) - 2.0) / (2.0 * a**4))


def mixed_remainder_over_fifth(angle: FloatArray) -> FloatArray:
    """(2 a - 3 sin a + a cos a) / (2 a^5)."""
    return _series_or_closed(angle, _MIXED_FIFTH, lambda a: (2.0 * a - 3.0 * np.sin(a) + a * np.cos(a)) / (2.0 * a**5))


def cotangent_remainder_over_square(angle: FloatArray) -> FloatArray:
    """(1 - (a/2) cot(a/2)) / a^2; infinite at multiples of a full turn other than zero."""
    return _series_or_closed(angle, _COTANGENT_SQUARE, lambda a: (1.0 - 0.5 * a / np.tan(0.5 * a)) / a**2)
