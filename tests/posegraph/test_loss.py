"""Robust losses: weights are derivatives of costs."""

import numpy as np
import pytest

from hybridtrack.errors import OptionError
from hybridtrack.posegraph import GemanMcClure, Huber, Quadratic


@pytest.mark.parametrize("loss", [Quadratic(), Huber(2.0), GemanMcClure(2.0)])
def test_weight_is_the_derivative_of_the_cost(loss):
    """And bend the derivative of the weight: checked by differences inside, outside and far outside the width."""
    s = np.array([0.1, 1.0, 3.9, 4.1, 50.0, 1e4])
    step = 1e-5 * s
    slope = (loss.cost(s + step) - loss.cost(s - step)) / (2.0 * step)
    assert np.allclose(loss.weight(s), slope, rtol=1e-5, atol=1e-9)
    change = (loss.weight(s + step) - loss.weight(s - step)) / (2.0 * step)
    assert np.allclose(loss.bend(s), 2.0 * s * change / loss.weight(s), rtol=1e-5, atol=1e-5)


@pytest.mark.parametrize("loss", [Quadratic(), Huber(2.0), GemanMcClure(2.0)])
def test_small_residuals_count_in_full(loss):
    """Every loss is chi-square itself near zero, with weight one."""
    assert loss.cost(np.array([1e-8]))[0] == pytest.approx(1e-8, rel=1e-6)
    assert loss.weight(np.array([0.0]))[0] == 1.0


@pytest.mark.parametrize("kind", [Huber, GemanMcClure])
@pytest.mark.parametrize("width", [0.0, -1.0, np.nan])
def test_refuses_a_width_that_is_not_positive(kind, width):
    """A loss without a width is meaningless."""
    with pytest.raises(OptionError, match="expected a positive number of standard deviations"):
        kind(width)
