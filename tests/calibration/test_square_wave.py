"""The bright share of an exposure against numerical integration and differences."""

from dataclasses import replace

import numpy as np
import pytest

from hybridtrack.calibration.square_wave import (
    CycleStrengths,
    Waveform,
    bright_share,
    bright_share_slopes,
    integral,
    level,
)

STEPPED = CycleStrengths(-1, np.array([0.3, 1.0, 0.1, 0.6, 0.6]))
WAVES = [
    Waveform(0.5),
    Waveform(0.35),
    Waveform(0.5, 0.04, 0.02),
    Waveform(0.6, 0.1, 0.15),
    Waveform(0.55, 0.03, 0.02, STEPPED),
]


@pytest.mark.parametrize("wave", WAVES)
def test_integral_is_the_area_under_the_level(wave):
    """A fine sum of levels gives the closed form to the sum's own error."""
    cycles = (np.arange(400_000) + 0.5) / 100_000 - 1.0
    summed = np.cumsum(level(cycles, wave)) / 100_000
    exact = integral(cycles + 0.5e-5, wave) - integral(np.array(-1.0), wave)
    assert np.abs(summed - exact).max() < 2e-5


@pytest.mark.parametrize("wave", WAVES)
@pytest.mark.parametrize("length", [0.2, 0.9, 1.7])
def test_slopes_match_differences(wave, length):
    """Derivatives by start, length and duty equal central differences away from the kinks."""
    start = np.random.default_rng(1).uniform(-3, 3, 400)
    step = 1e-6
    by_start, by_length, by_duty = bright_share_slopes(start, np.full(400, length), wave)
    longer, shorter = replace(wave, duty=wave.duty + step), replace(wave, duty=wave.duty - step)
    expected = [
        (bright_share(start + step, length, wave) - bright_share(start - step, length, wave)) / (2 * step),
        (bright_share(start, length + step, wave) - bright_share(start, length - step, wave)) / (2 * step),
        (bright_share(start, length, longer) - bright_share(start, length, shorter)) / (2 * step),
    ]
    for analytic, numeric in zip((by_start, by_length, by_duty), expected, strict=True):
        assert np.count_nonzero(np.abs(analytic - numeric) > 1e-4) <= 2


def test_whole_periods_see_the_duty():
    """An exposure of whole periods sees the duty wherever it begins."""
    start = np.linspace(-1, 1, 50)
    assert np.allclose(bright_share(start, 2.0, Waveform(0.3)), 0.3, atol=1e-12)


def test_cycles_count_with_their_strength():
    """An exposure over whole cycles sees the duty times their mean strength, also beyond those that are known."""
    wave = Waveform(0.5, strengths=STEPPED)
    assert bright_share(np.array([0.0]), 2.0, wave)[0] == pytest.approx(0.5 * (1.0 + 0.1) / 2)
    assert bright_share(np.array([-3.0]), 2.0, wave)[0] == pytest.approx(0.5 * 0.3)
    assert bright_share(np.array([4.25]), 1.0, wave)[0] == pytest.approx(0.5 * 0.6)
