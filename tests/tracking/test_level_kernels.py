"""The double integral of events over an exposure, against closed forms."""

from collections.abc import Callable

import numpy as np
import pytest
from scipy.integrate import quad
from scipy.special import i0

from hybridtrack.tracking.level_kernels import integrate_exposures, mean_exp, ramp_integral

Array = np.ndarray
ON, OFF = 0.05, 0.06
START_NS, EXPOSURE_NS = 10_000_000, 8_000_000


def ideal_events(level: Callable[[Array], Array], end_ns: int) -> tuple[Array, Array]:
    """Stamps and signs of one ideal comparator that starts settled, by fine sampling."""
    t = np.arange(0, end_ns, 500)
    values = level(t * 1e-9)
    memory, stamps, signs = values[0], [], []
    for when, value in zip(t, values, strict=True):
        while value - memory >= ON or memory - value >= OFF:
            up = value > memory
            memory += ON if up else -OFF
            stamps.append(when)
            signs.append(int(up))
    return np.array(stamps, np.int64), np.array(signs, np.uint8)


def bracket(level: Callable[[Array], Array], lag_ns: int = 0, share: float = 0.5) -> float:
    t, on = ideal_events(level, START_NS + EXPOSURE_NS + 6_000_000)
    zeros, grid = np.zeros(len(t), np.uint16), np.ones((1, 1), np.float32)
    start = np.full((1, 1), START_NS, np.int64)
    instant = start + np.int64(share * EXPOSURE_NS)
    args = (t + lag_ns, zeros, zeros, on, grid * ON, grid * OFF, lag_ns)
    return float(integrate_exposures(*args, start, EXPOSURE_NS, instant, 5_000_000)[0][0, 0])


def test_linear_rise_has_the_closed_form() -> None:
    """Log light that rises by s in an exposure has mean exp of sinh(s/2) / (s/2) about the middle's."""
    s = 1.2
    expected = np.log(np.sinh(s / 2) / (s / 2))
    assert bracket(lambda t: s / (EXPOSURE_NS * 1e-9) * t) == pytest.approx(expected, abs=0.006)


def test_sinusoid_has_the_closed_form() -> None:
    """Over whole cycles the mean of exp(A sin) is I0(A), the modified Bessel function."""
    amplitude, cycle_s = 0.6, EXPOSURE_NS * 1e-9 / 2
    middle = amplitude * np.sin(2 * np.pi * (START_NS + EXPOSURE_NS / 2) * 1e-9 / cycle_s)
    found = bracket(lambda t: amplitude * np.sin(2 * np.pi * t / cycle_s))
    assert found == pytest.approx(np.log(i0(amplitude)) - middle, abs=0.03)


def test_moving_edge_agrees_with_quadrature_at_any_instant() -> None:
    """A blurred edge that passes during the exposure: the bracket at several instants, against numerical quadrature."""

    def level(t: Array) -> Array:
        return np.tanh((np.asarray(t) - 13.3e-3) / 1.5e-3)

    mean = quad(lambda t: float(np.exp(level(t))), START_NS * 1e-9, (START_NS + EXPOSURE_NS) * 1e-9)[0]
    mean /= EXPOSURE_NS * 1e-9
    for share in (0.1, 0.5, 0.9):
        truth = np.log(mean) - float(level((START_NS + share * EXPOSURE_NS) * 1e-9))
        assert bracket(level, share=share) == pytest.approx(truth, abs=0.04)


def test_a_known_lag_changes_nothing() -> None:
    """Late stamps with their lag stated give the bracket of punctual ones."""

    def level(t: Array) -> Array:
        return np.tanh((np.asarray(t) - 13.3e-3) / 1.5e-3)

    assert bracket(level, lag_ns=700_000) == pytest.approx(bracket(level), abs=1e-9)


def test_without_events_nothing_is_corrected() -> None:
    """A silent pixel has no bracket."""
    assert bracket(lambda t: 0.0 * t) == 0.0


def test_ramp_integral_is_the_integral_of_the_ramp() -> None:
    """Flat, then a straight ramp: against quadrature, for windows before, over and after the ramp's start."""

    def value(t: float) -> float:
        return float(np.exp(0.3 + (0.0 if t < 40 else 0.2 * (t - 40) / 60)))

    for low, high in ((0, 30), (10, 70), (50, 100), (0, 100)):
        expected = quad(value, low, high, points=[40])[0] if low < 40 < high else quad(value, low, high)[0]
        assert ramp_integral(low, high, 0, 0.3, 100, 0.5, 60) == pytest.approx(expected, rel=1e-9)
    assert mean_exp(0.7, 0.7) == pytest.approx(np.exp(0.7))
