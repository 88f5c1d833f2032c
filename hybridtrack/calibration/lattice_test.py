"""Is the event map the die's lattice? Wald tests of the affine and radial terms that a lattice does not have.

Coefficients are those of `MapBasis`: displacements from the lattice at the edge of the grid, in px. The covariance was
scaled by a factor estimated from the scatter of views, so that the statistic follows Fisher's distribution, not the chi
square.
"""

from dataclasses import dataclass

import numpy as np
from scipy.stats import f as fisher

Array = np.ndarray

_LINEAR = np.array([1, 2, 4, 5])
_RADIAL = np.array([6])
_JOINT_LEVEL = 0.02
_SINGLE_LEVEL = 0.01


@dataclass(frozen=True)
class LatticeVerdict:
    """`linear`, `radial`: whether the map needs linear terms off the lattice, or a radial term; the p-values of their
    absence; `coefficients` (7,) and `covariance` (7, 7) with the terms not needed set to zero."""

    linear: bool
    radial: bool
    linear_p: float
    radial_p: float
    joint_p: float
    coefficients: Array
    covariance: Array


def wald_p_value(coefficients: Array, covariance: Array, terms: Array, degrees_of_freedom: float) -> float:
    """Probability of terms as large as these if the true ones are zero."""
    part = coefficients[terms]
    statistic = float(part @ np.linalg.solve(covariance[np.ix_(terms, terms)], part)) / len(terms)
    return float(fisher.sf(statistic, len(terms), degrees_of_freedom))


def without_terms(coefficients: Array, covariance: Array, terms: Array) -> tuple[Array, Array]:
    """The estimate and covariance under the condition that `terms` are zero."""
    gain = covariance[:, terms] @ np.linalg.inv(covariance[np.ix_(terms, terms)])
    kept, reduced = coefficients - gain @ coefficients[terms], covariance - gain @ covariance[terms]
    kept[terms] = 0.0
    reduced[terms, :] = 0.0
    reduced[:, terms] = 0.0
    return kept, reduced


def judge_lattice(coefficients: Array, covariance: Array, degrees_of_freedom: float) -> LatticeVerdict:
    """Test all terms off the lattice together; where they are not zero, keep those that a test of their own asks
    for."""
    every = np.concatenate([_LINEAR, _RADIAL])
    joint = wald_p_value(coefficients, covariance, every, degrees_of_freedom)
    linear_p = wald_p_value(*without_terms(coefficients, covariance, _RADIAL), _LINEAR, degrees_of_freedom)
    radial_p = wald_p_value(coefficients, covariance, _RADIAL, degrees_of_freedom)
    linear = radial = False
    if joint < _JOINT_LEVEL:
        linear_given_radial = wald_p_value(coefficients, covariance, _LINEAR, degrees_of_freedom)
        radial = radial_p < _SINGLE_LEVEL
        linear_p = linear_given_radial if radial else linear_p
        linear = linear_p < _SINGLE_LEVEL
        if not linear and not radial:
            linear, radial = linear_p <= radial_p, radial_p < linear_p
    dropped = np.concatenate([_LINEAR if not linear else [], _RADIAL if not radial else []]).astype(int)
    if len(dropped):
        coefficients, covariance = without_terms(coefficients, covariance, dropped)
    return LatticeVerdict(linear, radial, linear_p, radial_p, joint, coefficients, covariance)
