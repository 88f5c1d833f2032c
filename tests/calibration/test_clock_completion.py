"""Latency, edges and skew from a recording, its light being known."""

import numpy as np
import pytest
from ideal_board import board_light

from hybridtrack.calibration.blink import Blink
from hybridtrack.calibration.clock_completion import POWER_FINDING, complete_timing, with_row_skew
from hybridtrack.calibration.clock_row_skew import RowSkew
from hybridtrack.calibration.event_light import EventSteps, SquareHits
from hybridtrack.calibration.first_fire import FirstFire
from hybridtrack.calibration.timing_result import LATENCY_FINDING, TimingResult
from hybridtrack.calibration.views import View
from hybridtrack.module import Timing

RESULT = TimingResult(
    Timing(frame_offset_ns=1.24e6, drift_epoch_ns=0, line_time_ns=30e3),
    1,
    ("timing.frame_offset_ns",),
    np.array([[25e6]]),
    [LATENCY_FINDING],
)


def placed(scene):
    """Views of a scene with the light of their event pixels, as rendered."""
    uv, found = scene.module.event_pixel_positions(), []
    for k, pose in enumerate(scene.poses):
        bright, dark = board_light(scene, pose, uv)[0], np.full(uv.shape[:2], scene.dark)
        kind = np.where(bright > 0.4 * scene.bright, 1, 0)
        step = np.where(kind == 1, np.log(bright / dark), np.nan)
        zero = np.zeros(kind.shape, int)
        hits = SquareHits(zero, zero, kind, np.full(kind.shape, 9.0))
        t0 = scene.start_ns + round(k * (scene.view_s + scene.gap_s) * 1e9)
        view = View(t0, t0 + round(scene.view_s * 1e9), 0.0, False)
        found.append((view, EventSteps(step, bright, dark, np.full(kind.shape, np.nan), hits)))
    return found


def test_a_latency_that_light_does_not_change_stays_in_the_offset(clean, clean_scene):
    """All pixels are 40 us late whatever their light, from 90 to 180 DN: null, said so, and a power cycle's effects."""
    blink = Blink(clean_scene.true_blink_hz, 1e-4, clean_scene.start_ns, 0.0, 0.5)
    first = FirstFire(np.zeros(1), np.zeros(1), 4e4, 5e3)
    done = complete_timing(RESULT, clean, placed(clean_scene), (blink, first), clean_scene.module, clean_scene.target)
    assert done.timing.timing.event_latency_ns is None
    assert done.timing.timing.frame_offset_ns == RESULT.timing.frame_offset_ns
    assert LATENCY_FINDING in done.timing.findings
    assert any("event latency cannot be separated" in finding for finding in done.timing.findings)
    assert done.timing.findings[-1] == POWER_FINDING
    assert done.edges is None


def test_row_skew_stands_in_the_file_with_its_deviation():
    """Value, parameter and finding; without one the field is null and a finding says so."""
    found = with_row_skew(RESULT, RowSkew(1.3e3, 60.0, 60.0, -1))
    assert found.timing.row_skew_ns == 1.3e3
    assert found.parameters[-1] == "timing.row_skew_ns"
    assert np.sqrt(found.covariance[-1, -1]) == pytest.approx(60.0)
    assert "downwards" in found.findings[-1]
    none = with_row_skew(RESULT, None)
    assert none.timing.row_skew_ns is None
    assert "not determined" in none.findings[-1]
