"""How far from the axis a lens model has an inverse.

Fisheye, and perspective with no tangential terms: up to the first radius where the slope of the radial
function turns negative, a root of a polynomial.

Perspective with tangential terms of size P = |(p1, p2)|: the model of Brown 1971 is the gradient of a
potential, so its Jacobian is symmetric, and on a disc on which it is positive definite the model is one to
one. Along and across the radius r, with f' the slope of the radial function f, L = f(r)/r, q = P r, and c
and s the cosine and sine of the angle from the direction (p2, p1), it is [[f' + 6 q c, 2 q s], [2 q s, L +
2 q c]]. Its determinant, least over the angle, is (f' - 6 q)(L - 2 q) at c = -1 or, where 16 q > f' + 3 L,
the inner minimum f' L - 4 q^2 - (f' + 3 L)^2 / 16. The limit is the first radius where the matrix stops
being positive definite.
"""

from collections.abc import Callable, Sequence
from itertools import pairwise
from math import hypot, inf, sqrt

import numpy as np
from numpy.polynomial import Polynomial
from scipy.optimize import brentq

_REAL_WITHIN = 1e-3  # imaginary over absolute part; only a candidate, the sign of the margin decides


def _positive_roots(polynomial: Polynomial) -> list[float]:
    """Positive roots of a polynomial, real or nearly so; those at zero and past 1e40 are left out."""
    coefficients = np.trim_zeros(polynomial.coef, "b")
    significant = np.abs(coefficients) > 1e-100 * np.abs(coefficients).max(initial=0.0)
    coefficients = coefficients[np.argmax(significant) :]
    if len(coefficients) < 2:
        return []
    # Reversed, the polynomial starts with its constant term, which is not small: dividing by it does no harm.
    reciprocals = Polynomial(coefficients[::-1] / coefficients[0]).roots()
    near = np.abs(reciprocals.imag) <= _REAL_WITHIN * np.abs(reciprocals)
    least = max(1e-14 * np.abs(reciprocals).max(), 1e-40)
    return [1.0 / float(s) for s in reciprocals.real[near] if s > least]


def _first_negative(margin: Callable[[float], float], candidates: Sequence[float]) -> float:
    """The first radius at which `margin`, positive at zero, turns negative, given where it may be zero."""
    marks = sorted(candidates)
    if not marks:
        return inf
    probes = [0.0, *(sqrt(a * b) for a, b in pairwise(marks)), 2.0 * marks[-1]]
    for inner, outer in pairwise(probes):
        if margin(outer) < 0.0:
            return float(brentq(margin, inner, outer, xtol=1e-15, rtol=1e-14))
    return inf


def radial_limit(radial: Sequence[float]) -> float:
    """Largest r up to which r (1 + k0 r^2 + k1 r^4 + ...) rises; infinite where it always does.

    >>> round(radial_limit([-1.0 / 3.0]), 6)
    1.0
    """
    slope = Polynomial([1.0, *((2 * i + 3) * k for i, k in enumerate(radial))])
    return _first_negative(lambda r: float(slope(r * r)), [sqrt(q) for q in _positive_roots(slope)])


def perspective_limit(radial: Sequence[float], tangential: tuple[float, float]) -> float:
    """Largest r of a disc on which the perspective model is one to one by the proof above; may be infinite.

    >>> round(perspective_limit([0.0, 0.0, 0.0], (0.0, 0.01)), 6)
    16.666667
    """
    size = hypot(*tangential)
    if size == 0.0:
        return radial_limit(radial)
    r = Polynomial([0.0, 1.0])
    gain = 1.0 + sum((k * r ** (2 * i + 2) for i, k in enumerate(radial)), Polynomial([0.0]))
    slope = gain + r * gain.deriv()
    q = size * r
    # The inner minimum is (f' - L)(9 L - f') / 16 - 4 q^2, and f' - L has the factor r^2, as q^2 has.
    bend = sum(((2 * i + 2) * k * r ** (2 * i) for i, k in enumerate(radial)), Polynomial([0.0]))
    inner_over_square = bend * (9.0 * gain - slope) / 16.0 - 4.0 * size**2

    def margin(radius: float) -> float:
        f, g, w = float(slope(radius)), float(gain(radius)), size * radius
        axis = min(f - 6.0 * w, g - 2.0 * w)
        return min(axis, float(inner_over_square(radius))) if 16.0 * w > f + 3.0 * g else axis

    polynomials = (slope - 6.0 * q, gain - 2.0 * q, inner_over_square)
    return _first_negative(margin, [root for each in polynomials for root in _positive_roots(each)])
