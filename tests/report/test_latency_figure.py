"""The latency figure: drawn from a curve, left out without one."""

from dataclasses import replace
from types import SimpleNamespace

import numpy as np

from hybridtrack.calibration.clock_completion import CompletedTiming
from hybridtrack.calibration.latency_curve import LatencyCurve
from hybridtrack.calibration.timing_result import TimingResult
from hybridtrack.module import Timing
from hybridtrack.report.latency_figure import latency_figure

LIGHT = np.linspace(100.0, 120.0, 8)
CURVE = LatencyCurve(LIGHT, 7.2e6 / LIGHT - 6e4, np.full(8, 300.0), -6e4, 3.2e3, 7.2e6, 4e5, 6.0, 6, 110.0, 5.4e3)
TIMING = Timing(frame_offset_ns=1e6, event_latency_ns=8.5e4, reference_light_dn=110.0)


def result(curve, timing=TIMING):
    """The parts of a calibration that the figure looks at."""
    found = TimingResult(timing, 1, (), np.zeros((0, 0)), [])
    return SimpleNamespace(module=SimpleNamespace(timing=timing), completed=CompletedTiming(found, curve, None, None))


def test_a_curve_is_drawn_and_says_how_sure_it_is():
    """The caption names the deviation and whether the latency rests on it."""
    figure = latency_figure(result(CURVE))
    assert "<svg" in figure.svg
    assert "uncertain by 3.2 us: the latency is separated by it" in figure.caption
    wide = replace(CURVE, intercept_sigma_ns=3e4)
    held = latency_figure(result(wide, TIMING.model_copy(update={"event_latency_ns": None})))
    assert "uncertain by 30.0 us: too much" in held.caption


def test_without_a_curve_there_is_no_figure():
    """A screen has none."""
    assert latency_figure(result(None)) is None
    assert latency_figure(SimpleNamespace(module=None, completed=None)) is None
