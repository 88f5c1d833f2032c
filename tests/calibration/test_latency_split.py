"""Latency taken out of the offset: values, joint covariance, and the reasons not to."""

from dataclasses import replace

import numpy as np
import pytest
from ideal_board import board_target

from hybridtrack.calibration.clock_triggers import EdgeOffset
from hybridtrack.calibration.first_fire import FirstFire
from hybridtrack.calibration.latency_curve import LatencyCurve
from hybridtrack.calibration.latency_split import CONSTANT_NS, CONSTANT_SIGMA_NS, with_latency
from hybridtrack.calibration.timing_result import LATENCY_FINDING, TimingResult
from hybridtrack.module import Timing

FIRST = FirstFire(np.zeros(1), np.zeros(1), 4e4, 5e3)
LIGHT = np.linspace(100.0, 120.0, 8)
CURVE = LatencyCurve(LIGHT, 7.2e6 / LIGHT - 6e4, np.full(8, 300.0), -6e4, 3e3, 7.2e6, 4e5, 6.0, 6, 110.0, 5.4e3)
RESULT = TimingResult(
    Timing(frame_offset_ns=1.09e6, drift_epoch_ns=0, line_time_ns=18e3),
    1,
    ("timing.frame_offset_ns", "timing.line_time_ns"),
    np.array([[5e3**2 + 2e3**2, 900.0], [900.0, 0.4]]),
    [LATENCY_FINDING],
)
EDGES = EdgeOffset(1.0e6, 1e3, 2, 1, "the first row's exposure", True)
AT = ("timing.frame_offset_ns", "timing.event_latency_ns")


def block(result):
    """Covariance of offset and latency."""
    index = [result.parameters.index(name) for name in AT]
    return result.covariance[np.ix_(index, index)]


def test_the_curve_splits_the_sum_and_keeps_it():
    """Offset and latency add up to the sum, whose deviation is what it was."""
    found = with_latency(RESULT, CURVE, FIRST, board_target())
    assert found.timing.event_latency_ns == pytest.approx(6e4 + CONSTANT_NS)
    assert found.timing.frame_offset_ns + found.timing.event_latency_ns == pytest.approx(1.09e6)
    assert found.timing.reference_light_dn == 110.0
    assert block(found).sum() == pytest.approx(RESULT.covariance[0, 0])
    assert np.linalg.eigvalsh(found.covariance).min() > 0
    assert LATENCY_FINDING not in found.findings
    assert "cannot be told from the frame offset, and is assumed" in found.findings[0]


def test_the_deviation_says_that_the_constant_is_assumed():
    """However sure the curve, the offset is not surer than the constant part."""
    sure = replace(CURVE, intercept_sigma_ns=10.0)
    found = with_latency(RESULT, sure, FIRST, board_target())
    assert np.sqrt(block(found).diagonal()).min() > CONSTANT_SIGMA_NS


def test_covariance_is_that_of_drawn_errors():
    """Errors of clocks, mean first event, intercept and constant, drawn: their scatter is the covariance stated."""
    rng = np.random.default_rng(4)
    # The curve errs by its scatter, a bin, and 6 % of the 60 us that follow light.
    clocks, first, own = (s * rng.standard_normal(200_000) for s in (2e3, 5e3, np.sqrt(3e3**2 + 2e3**2 + 3.6e3**2)))
    constant = CONSTANT_SIGMA_NS * rng.standard_normal(200_000)
    latency = first + own + constant
    drawn = np.cov(np.array([clocks + first - latency, latency]))
    assert block(with_latency(RESULT, CURVE, FIRST, board_target())) == pytest.approx(drawn, rel=0.03)


@pytest.mark.parametrize(
    ("change", "reason"),
    [
        ({"intercept_sigma_ns": 2e4}, "varies too little"),
        ({"slope_sigma_ns_dn": 4e6}, "does not fall with light"),
        ({"chi2": 90.0}, "does not follow a first-order photoreceptor"),
    ],
)
def test_a_curve_that_does_not_tell_leaves_the_latency_null(change, reason):
    """The sum stays, the finding stays, and the reason is added."""
    found = with_latency(RESULT, replace(CURVE, **change), FIRST, board_target())
    assert found.timing == RESULT.timing
    assert found.findings[0] == LATENCY_FINDING
    assert reason in found.findings[1]


def test_no_curve_and_slow_targets_leave_the_latency_null():
    """A screen, a lamp that rises slowly, and too few pixels."""
    assert "too few pixels" in with_latency(RESULT, None, FIRST, board_target()).findings[-1]
    slow = with_latency(RESULT, CURVE, FIRST, board_target(rise_s=0.002))
    assert "takes 2.00 ms to turn bright" in slow.findings[-1]
    screen = board_target(kind="counterphase_checker", steady_dark=[])
    assert "the target is a screen" in with_latency(RESULT, CURVE, FIRST, screen).findings[-1]


def test_edges_give_the_offset_and_the_whole_latency():
    """With hardware edges nothing is assumed: the offset is theirs, the deviations are small, the sum's is kept."""
    found = with_latency(RESULT, CURVE, FIRST, board_target(), EDGES)
    assert found.timing.frame_offset_ns == pytest.approx(1.0e6)
    assert found.timing.event_latency_ns == pytest.approx(9e4)
    assert np.sqrt(block(found).diagonal()) == pytest.approx([1e3, np.sqrt(29e6 + 1e6)])
    assert block(found).sum() == pytest.approx(RESULT.covariance[0, 0])
    assert np.linalg.eigvalsh(found.covariance).min() > 0


def test_edges_that_contradict_the_curve_are_not_used():
    """An edge 300 us early makes a latency that the curve excludes: said, and the curve is used."""
    found = with_latency(RESULT, CURVE, FIRST, board_target(), replace(EDGES, offset_ns=0.7e6))
    assert found.timing.event_latency_ns == pytest.approx(6e4 + CONSTANT_NS)
    assert any("disagree by +305 us" in finding for finding in found.findings)
