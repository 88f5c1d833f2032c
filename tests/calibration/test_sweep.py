"""A screen's sweep: where it has gone, how events are put back, and how its ramp is read from phases."""

import numpy as np
import pytest

from hybridtrack.calibration.blink import Blink
from hybridtrack.calibration.kernels import fold_harmonic, time_order
from hybridtrack.calibration.row_signals import banded_row_signals, weighted_row_signals
from hybridtrack.calibration.sweep import SweptRecording, gone_by, shortened
from hybridtrack.calibration.sweep_ramp import fit_ramp, require_no_sweep
from hybridtrack.calibration.views import View
from hybridtrack.errors import DegenerateDataError
from hybridtrack.module import Target
from hybridtrack.recording import Recording, RecordingWriter

BLINK = Blink(72.0, 1e-3, 0, 0.0, 0.5)


def screen(**parts):
    """A screen of 12x9 squares."""
    values = {"columns": 12, "rows": 9, "square_m": 0.03, "blink_hz": 72.0, "steady_dark": []}
    return Target(kind="counterphase_checker", **(values | parts))


@pytest.mark.parametrize(("direction", "wanted"), [("down", 1 / 3), ("up", 2 / 3), ("right", 0.25), ("left", 0.75)])
def test_the_way_gone_follows_the_direction(direction, wanted):
    """A quarter across and a third down the board."""
    assert gone_by(screen(scan_direction=direction), np.array([0.09, 0.09])) == pytest.approx(wanted)
    beyond = gone_by(screen(scan_direction=direction), np.array([[9.0, 9.0], [-9.0, -9.0], [np.nan, np.nan]]))
    assert np.all((beyond >= 0) & (beyond <= 1))


def test_stamps_are_sorted_as_numpy_sorts_them():
    """Ties stay in order."""
    t = np.random.default_rng(0).integers(0, 100_000, 5000)
    np.testing.assert_array_equal(time_order(t, 1000), np.argsort(t, kind="stable"))
    assert len(time_order(t[:0], 1000)) == 0


def test_events_are_put_back_by_their_pixels_delay(tmp_path):
    """Within the view, in order, none lost that belongs there; outside it nothing is touched."""
    rng = np.random.default_rng(1)
    t = np.sort(rng.integers(0, 2_000_000, 4000))
    x, y = rng.integers(0, 20, 4000), rng.integers(0, 10, 4000)
    with RecordingWriter(tmp_path / "a.h5") as writer:
        writer.append_events(t, x, y, np.ones(4000, np.uint8))
    delay = 40_000.0 * np.tile(np.arange(10.0)[:, None], (1, 20))
    view = View(200_000, 1_200_000, 0.0, False)
    with Recording.open(tmp_path / "a.h5") as recording:
        swept = SweptRecording(recording, [view], [delay])
        (events,) = swept.event_blocks(view.t0_ns, view.t1_ns)
        wanted = t - delay[y, x].astype(int)
        inside = (wanted >= view.t0_ns) & (wanted < view.t1_ns)
        np.testing.assert_array_equal(events.t, np.sort(wanted[inside]))
        (plain,) = swept.event_blocks()
        np.testing.assert_array_equal(plain.t, t)


def test_views_leave_room_for_the_sweep_in_whole_cycles():
    """So that every pixel has as many flips to bright as to dark."""
    view = View(0, round(20 * BLINK.period_ns), 0.0, False)
    (short,) = shortened([view], 0.4 * BLINK.period_ns, BLINK.period_ns)
    assert short.t1_ns == pytest.approx(19 * BLINK.period_ns, abs=2)


def phases(ramp, kinds, rng, noise=0.02):
    """z of pixels that flip at `ramp` cycles, set B (-1) half a cycle later."""
    cycles = ramp + np.where(kinds < 0, 0.5, 0.0) + noise * rng.normal(size=ramp.shape)
    return np.where(kinds == 0, 0.0, np.exp(-2j * np.pi * cycles) * 2.0)


def test_a_ramp_is_read_from_both_sets():
    """A sweep of 0.6 cycle, a little curved, is found to a hundredth of a cycle, modulo half a turn."""
    rng = np.random.default_rng(2)
    x, y = np.meshgrid(np.arange(160.0), np.arange(100.0))
    ramp = 0.3 + 0.002 * x + 0.004 * y + 4e-6 * x * y
    kinds = rng.choice([1, -1], ramp.shape)
    kinds[:10] = 0
    found = fit_ramp(phases(ramp, kinds, rng), True, 0.5)
    # It is held to the range that nearly all pixels have.
    inner = (kinds != 0) & (ramp > np.quantile(ramp, 0.12)) & (ramp < np.quantile(ramp, 0.98))
    error = 2.0 * (found.cycles(np.stack([x, y], axis=-1)) - ramp)[inner]
    assert np.ptp(error - np.rint(error)) < 0.06
    assert np.sqrt(np.mean((error - np.rint(error)) ** 2)) < 0.02
    assert found.concentration > 0.95


def test_phases_without_a_ramp_are_refused():
    """Noise alone."""
    rng = np.random.default_rng(3)
    with pytest.raises(DegenerateDataError, match="follow no sweep"):
        fit_ramp(np.exp(2j * np.pi * rng.uniform(size=(60, 80))), True, 0.5)


def test_a_sweep_that_is_not_stated_is_refused():
    """Clocks and thresholds would be wrong; a screen that flips at once passes."""
    rng, kinds = np.random.default_rng(4), np.random.default_rng(5).choice([1, -1], (100, 160))
    down = np.tile(np.linspace(0.1, 0.6, 100)[:, None], (1, 160))
    require_no_sweep([phases(0.0 * down + 0.1, kinds, rng)] * 3, BLINK)
    with pytest.raises(DegenerateDataError, match="state scanout_s and scan_direction"):
        require_no_sweep([phases(down, kinds, rng)] * 3, BLINK)


def test_the_harmonic_is_the_sum_over_events():
    """Against numpy, with polarity as sign."""
    rng = np.random.default_rng(6)
    t, x, on = rng.integers(0, 10**9, 300), np.zeros(300, np.uint16), rng.integers(0, 2, 300).astype(np.uint8)
    out = np.zeros((1, 1), np.complex128)
    fold_harmonic(t, x, x, on, 0, 0.25, 72.0, out)
    wanted = np.sum((2.0 * on - 1) * np.exp(-2j * np.pi * (t * 72e-9 + 0.25)))
    assert out[0, 0] == pytest.approx(wanted)


def test_one_band_is_the_plain_signal():
    """Where no pixel is delayed more than another, parts of rows are whole rows."""
    rng = np.random.default_rng(7)
    light, swing = rng.normal(50, 5, (6, 8, 30)).astype(np.float32), rng.normal(0, 40, (8, 30))
    sigma = np.full((8, 30), 1.5)
    signal, deviation, delay = banded_row_signals(light, swing, sigma, np.full((8, 30), 3.0), 10.0)
    plain, plain_deviation = weighted_row_signals(light, swing, sigma)
    np.testing.assert_allclose(signal, plain, rtol=1e-5)
    np.testing.assert_allclose(deviation, plain_deviation, rtol=1e-6)
    np.testing.assert_allclose(delay, 3.0)
