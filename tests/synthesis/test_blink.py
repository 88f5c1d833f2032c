"""The blinking light: values, exact integrals, levels and flips."""

import itertools

import numpy as np
import pytest
from scipy.integrate import quad

from hybridtrack.errors import OptionError
from hybridtrack.synthesis.blink import Blink
from hybridtrack.synthesis.board_kernels import flicker_integral, pulse_integral, pulse_value


def make(**fields: object) -> Blink:
    """A blink of 50 Hz with slow edges; `fields` override."""
    known = {
        "blink_hz": 50.0,
        "duty": 0.4,
        "epoch_ns": 3e6,
        "steps_dn": (80.0,),
        "rise_ns": 1e6,
        "fall_ns": 2e6,
        "span_ns": (0.0, 1e9),
    }
    return Blink(**{**known, **fields})  # type: ignore[arg-type]


def value(blink: Blink, t: float, which: int = 0) -> float:
    """Light of set A (0) or B (1) at `t`."""
    return pulse_value(t, blink.pulses[which], blink.amplitude_dn, blink.first_cycle)


def integral(blink: Blink, t0: float, t1: float, which: int = 0) -> float:
    """Integral of that light from t0 to t1."""
    train = (blink.pulses[which], blink.amplitude_dn, blink.before_dn, blink.first_cycle)
    return pulse_integral(t1, *train) - pulse_integral(t0, *train)


@pytest.mark.parametrize("levels", [(80.0,), (20.0, 50.0, 90.0)])
@pytest.mark.parametrize("which", [0, 1])
def test_integral_is_that_of_the_value(levels: tuple[float, ...], which: int) -> None:
    """The closed form equals numerical integration across flips and levels."""
    blink = make(steps_dn=levels, cycles_per_level=2)
    for t0, t1 in ((3.2e6, 4.5e6), (1e6, 9e6), (10.5e6, 24e6), (0.0, 173e6)):
        kinks = blink.kinks_ns(t0, t1)
        kinks = np.unique(np.concatenate([kinks, make(steps_dn=levels, counterphase=True).kinks_ns(t0, t1)]))
        edges = [t0, *kinks, t1]
        parts = [quad(lambda t: value(blink, t, which), a, b)[0] for a, b in itertools.pairwise(edges)]
        numeric = sum(parts)
        assert integral(blink, t0, t1, which) == pytest.approx(numeric, rel=1e-9, abs=1e-3)


def test_value_runs_through_the_cycle() -> None:
    """Dark before the epoch, half way up at half the rise, full, half way down, dark."""
    blink = make()
    times = [2.9e6, 3.5e6, 4.5e6, 10.9e6, 12e6, 15e6, 22.9e6, 23.5e6]
    np.testing.assert_allclose([value(blink, t) for t in times], [0, 40, 80, 80, 40, 0, 0, 40])


def test_counterphase_sets_share_the_cycle() -> None:
    """With equal rise and fall one set goes up as the other goes down, and their sum is constant."""
    blink = make(fall_ns=1e6, counterphase=True)
    for t in np.linspace(0, 60e6, 977):
        assert value(blink, t) + value(blink, t, 1) == pytest.approx(80.0)


def test_levels_follow_one_another() -> None:
    """Cycles step through the levels, each for as many cycles as told, over and over."""
    blink = make(steps_dn=(10.0, 20.0), cycles_per_level=3)
    cycle = (np.arange(12) + 0.2) * 20e6 + 3e6
    assert [value(blink, t) for t in cycle] == [10.0] * 3 + [20.0] * 3 + [10.0] * 3 + [20.0] * 3


def test_flips_and_kinks_lie_where_light_bends() -> None:
    """Flips are one period apart; between kinks light is linear."""
    blink = make()
    bright, dark = blink.flips_ns(0.0, 100e6)
    np.testing.assert_allclose(bright, 3e6 + 20e6 * np.arange(5))
    np.testing.assert_allclose(dark, 11e6 + 20e6 * np.arange(5))
    edges = np.concatenate([[0.0], blink.kinks_ns(0.0, 100e6), [100e6]])
    for t0, t1 in itertools.pairwise(edges):
        inner = t0 + (t1 - t0) * np.array([0.01, 0.5, 0.99])
        v = [value(blink, t) for t in inner]
        assert v[1] - v[0] == pytest.approx(v[2] - v[1], abs=1e-6)


def test_flicker_integral_is_that_of_the_sine() -> None:
    """The lamps' flicker integrates to its closed form."""
    flicker = np.array([2e-9 * np.pi * 100.0, 0.3, 0.7])
    numeric = quad(lambda t: 1 + 0.3 * np.sin(flicker[0] * t + 0.7), 2e6, 9e6)[0]
    assert flicker_integral(2e6, 9e6, flicker) == pytest.approx(numeric)


def test_refusals() -> None:
    """Edges longer than a phase, and rates that are none, are refused."""
    with pytest.raises(OptionError, match="less than each phase of the blink"):
        make(rise_ns=9e6)
    with pytest.raises(OptionError, match="blink_hz must be positive"):
        make(blink_hz=0.0)
