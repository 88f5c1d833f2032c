"""The test of the die's lattice: level, power, and conditional estimates."""

import numpy as np
import pytest

from hybridtrack.calibration.lattice_test import judge_lattice, wald_p_value, without_terms

SPREAD = np.random.default_rng(0).normal(size=(7, 7)) * 1e-3
COVARIANCE = SPREAD @ SPREAD.T + 1e-6 * np.eye(7)
TRUE_LATTICE = np.array([1.9, 0.0, 0.0, -0.2, 0.0, 0.0, 0.0])


def drawn(truth, rng):
    return truth + np.linalg.cholesky(COVARIANCE) @ rng.normal(size=7)


def test_false_alarms_stay_under_the_level():
    """On true lattices the map is called off-lattice or radial in about 2 % of 500 draws."""
    rng = np.random.default_rng(1)
    verdicts = [judge_lattice(drawn(TRUE_LATTICE, rng), COVARIANCE, 66) for _ in range(500)]
    assert np.mean([v.linear or v.radial for v in verdicts]) < 0.05


@pytest.mark.parametrize(("term", "name"), [(1, "linear"), (4, "linear"), (6, "radial")])
def test_a_term_of_eight_deviations_is_found(term, name):
    """And attributed to its kind."""
    rng, hits = np.random.default_rng(2), []
    for _ in range(50):
        truth = TRUE_LATTICE.copy()
        truth[term] = 8.0 / np.sqrt(np.linalg.inv(COVARIANCE)[term, term])
        hits.append(getattr(judge_lattice(drawn(truth, rng), COVARIANCE, 66), name))
    assert np.mean(hits) > 0.95


def test_terms_not_needed_are_zero_and_the_rest_is_sharper():
    """Conditioning on the lattice moves the offset to its best estimate and lowers its variance."""
    verdict = judge_lattice(TRUE_LATTICE + np.array([0, 1e-4, 0, 0, 0, 0, 0]), COVARIANCE, 66)
    assert not verdict.linear
    assert not verdict.radial
    np.testing.assert_array_equal(verdict.coefficients[[1, 2, 4, 5, 6]], 0.0)
    assert verdict.covariance[0, 0] < COVARIANCE[0, 0]
    np.testing.assert_array_equal(verdict.covariance[1], 0.0)


def test_conditional_estimates_are_honest():
    """Over 400 draws the offset given the lattice scatters as its covariance says."""
    rng, squares = np.random.default_rng(3), []
    for _ in range(400):
        kept, covariance = without_terms(drawn(TRUE_LATTICE, rng), COVARIANCE, np.array([1, 2, 4, 5, 6]))
        error = (kept - TRUE_LATTICE)[[0, 3]]
        squares.append(error @ np.linalg.solve(covariance[np.ix_([0, 3], [0, 3])], error) / 2)
    assert 0.85 < np.mean(squares) < 1.15


def test_p_value_is_uniform_where_there_is_nothing():
    """Half of the p-values lie under one half."""
    rng = np.random.default_rng(4)
    terms = np.array([1, 2, 4, 5])
    values = [wald_p_value(drawn(TRUE_LATTICE, rng), COVARIANCE, terms, 1e6) for _ in range(400)]
    assert np.mean(np.array(values) < 0.5) == pytest.approx(0.5, abs=0.07)
