"""Hardware edges against frames: matched, named, and not believed without reason."""

import numpy as np
import pytest

from hybridtrack.calibration.clock_completion import compared_with_edges
from hybridtrack.calibration.clock_triggers import match_edges, meaning_of, offset_by_edges
from hybridtrack.calibration.timing_result import LATENCY_FINDING, PERIODS_FINDING, TimingResult
from hybridtrack.module import Timing
from hybridtrack.recording import FrameTable, Triggers

HEIGHT, LINE_NS, EXPOSURE_NS = 400, 18e3, 4_000_000
OFFSET_NS = 1.4e6
READOUT_NS = (HEIGHT - 1) * LINE_NS
TIMING = Timing(frame_offset_ns=OFFSET_NS + 9e4, drift_epoch_ns=0, frame_drift_ppm=0.0, line_time_ns=LINE_NS)


def frames(gaps=True):
    """Four bursts of twelve frames, or one row of frames without a gap."""
    starts = np.concatenate([k * 0.71e9 + np.arange(12) * 1e9 / 60 for k in range(4)])
    stamps = starts if gaps else np.arange(48) * 1e9 / 60
    count = len(stamps)
    exposure = np.full(count, EXPOSURE_NS, np.int64)
    return FrameTable(np.round(stamps).astype(np.int64), exposure, None, None, (HEIGHT, 640), np.dtype(np.uint8))


def pulses(table, start_ns, width_ns, jitter_ns=0.0, seed=0, channel=3, low=False):
    """One pulse a frame; `low`: active low."""
    rng = np.random.default_rng(seed)
    opens = table.t_start_ns + start_ns + jitter_ns * rng.standard_normal(len(table))
    t = np.concatenate([opens, opens + width_ns])
    edge = np.repeat(np.array([-1, 1] if low else [1, -1], np.int8), len(table))
    order = np.argsort(t)
    count = len(t)
    return Triggers(np.round(t[order]).astype(np.int64), np.full(count, channel, np.uint8), edge[order])


@pytest.mark.parametrize("low", [False, True])
def test_exposure_pulses_give_the_offset_exactly(low):
    """Whichever way the line is driven."""
    table = frames()
    edges = offset_by_edges(pulses(table, OFFSET_NS, EXPOSURE_NS, low=low), table, TIMING, HEIGHT)
    assert edges.offset_ns == pytest.approx(OFFSET_NS, abs=2.0)
    assert (edges.channel, edges.edge, edges.is_certain) == (3, -1 if low else 1, True)


def test_strobe_pulses_are_put_back_by_the_readout():
    """A pulse while all rows are exposed opens with the last row's exposure."""
    table = frames()
    long = FrameTable(table.t_start_ns, table.exposure_ns + 6_000_000, None, None, table.shape, table.dtype)
    width = 10_000_000 - READOUT_NS
    edges = offset_by_edges(pulses(table, OFFSET_NS + READOUT_NS, width), long, TIMING, HEIGHT)
    assert edges.meaning == "the exposure of all rows at once"
    assert edges.offset_ns == pytest.approx(OFFSET_NS, abs=2.0)


def test_errors_of_jittered_edges_match_their_deviation():
    """Edges that jitter by 8 us: errors over draws are as large as is said."""
    table, errors = frames(), []
    for seed in range(60):
        edges = offset_by_edges(pulses(table, OFFSET_NS, EXPOSURE_NS, 8e3, seed), table, TIMING, HEIGHT)
        errors.append((edges.offset_ns - OFFSET_NS) / edges.sigma_ns)
    assert 0.5 < np.mean(np.square(errors)) < 2.0


def test_an_even_row_of_frames_leaves_the_shift_open():
    """With an edge too many at each end several shifts do as well: the one nearest is taken and not called certain."""
    stamp = frames(gaps=False).t_start_ns.astype(float)
    more = np.concatenate([[stamp[0] - 1e9 / 60], stamp, [stamp[-1] + 1e9 / 60]]) + OFFSET_NS
    match = match_edges(stamp, more, OFFSET_NS + 1e5)
    assert match.delay_ns == pytest.approx(OFFSET_NS, abs=2.0)
    assert not match.is_only


def test_edges_of_something_else_are_not_matched():
    """A channel of another rate has no shift that explains nine frames of ten; so have too few frames."""
    stamp = frames().t_start_ns.astype(float)
    assert match_edges(stamp, np.arange(0, 3e9, 1e9 / 47)) is None
    assert match_edges(stamp[:5], stamp[:5]) is None
    assert offset_by_edges(None, frames(), TIMING, HEIGHT) is None


def test_a_width_that_says_nothing_is_an_assumption():
    """A short pulse may mark anything."""
    meaning, late, certain = meaning_of(5e4, 4e6, 7.2e6)
    assert (meaning, late, certain) == ("the first row's exposure, as is assumed", 0.0, False)


def result_of(offset_ns):
    """A timing by light alone."""
    findings = [LATENCY_FINDING, f"{PERIODS_FINDING} of 16.393 ms"]
    timing = TIMING.model_copy(update={"frame_offset_ns": offset_ns})
    return TimingResult(timing, 1, ("timing.frame_offset_ns",), np.array([[25e6]]), findings)


def test_whole_periods_are_settled_by_edges():
    """An offset off by two blink periods is put right, and is no longer said to be open."""
    period, table = 1e9 / 61, frames()
    edges = offset_by_edges(pulses(table, OFFSET_NS, EXPOSURE_NS), table, TIMING, HEIGHT)
    found, used = compared_with_edges(result_of(OFFSET_NS + 9e4 - 2 * period), edges, period)
    assert used
    assert found.timing.frame_offset_ns == pytest.approx(OFFSET_NS + 9e4, abs=2.0)
    assert not any(finding.startswith(PERIODS_FINDING) for finding in found.findings)
    assert "channel 3" in found.findings[-1]
    assert "90.0 us later" in found.findings[-1]


def test_edges_far_from_the_light_are_named_and_left():
    """4 ms off is no latency."""
    table = frames()
    edges = offset_by_edges(pulses(table, OFFSET_NS - 4e6, EXPOSURE_NS), table, TIMING, HEIGHT)
    found, used = compared_with_edges(result_of(OFFSET_NS + 9e4), edges, 1e9 / 61)
    assert not used
    assert found.timing.frame_offset_ns == OFFSET_NS + 9e4
    assert "marks something else and is not used" in found.findings[-1]
