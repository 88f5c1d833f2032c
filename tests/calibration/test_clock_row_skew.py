"""The time between rows of a scanned readout under load."""

import numpy as np
import pytest

from hybridtrack.calibration.clock_row_skew import skew_of_intervals
from hybridtrack.calibration.latency_kernels import row_intervals


def test_a_scan_of_rows_has_its_skew():
    """Rows 2 us apart, four views: exactly that, upwards."""
    view = np.repeat(np.arange(4), 100)
    found = skew_of_intervals(view, np.ones(400, int), np.full(400, 2e3), np.full(400, 30))
    assert found.skew_ns == pytest.approx(2e3)
    assert found.sigma_ns == pytest.approx(0.0, abs=1e-6)
    assert (found.direction, found.events_a_row) == (1, 30.0)


def test_errors_of_views_under_different_load_match_their_deviation():
    """Views whose load differs: the error of the mean is as large as is said, pauses left out."""
    rng, errors = np.random.default_rng(3), []
    for _ in range(80):
        load = 1e3 + 200.0 * rng.standard_normal(8)
        interval = np.repeat(load, 100) + 50.0 * rng.standard_normal(800)
        interval[::40] = 5e4
        found = skew_of_intervals(np.repeat(np.arange(8), 100), -np.ones(800, int), interval, np.full(800, 20))
        errors.append((found.skew_ns - 1e3) / found.sigma_ns)
    assert 0.6 < np.mean(np.square(errors)) < 2.0


def test_rows_without_order_have_no_skew():
    """An arbiter that jumps about, a single view, and too few reads."""
    rng = np.random.default_rng(5)
    view, interval, size = np.repeat(np.arange(4), 100), np.full(400, 1e3), np.full(400, 5)
    assert skew_of_intervals(view, rng.integers(-50, 50, 400), interval, size) is None
    assert skew_of_intervals(np.zeros(400, int), np.ones(400, int), interval, size) is None
    assert skew_of_intervals(view[:50], np.ones(50, int), interval[:50], size[:50]) is None


def test_intervals_are_from_read_to_read():
    """Reads of rows 3, 4, 7 within the window; the first run, perhaps begun before it, does not count."""
    t = np.array([100, 110, 200, 200, 205, 330, 500, 900])
    y = np.array([2, 2, 3, 3, 3, 4, 7, 8], np.uint16)
    step, size, interval = np.zeros(8, np.int64), np.zeros(8, np.int64), np.zeros(8)
    count = row_intervals(t, y, np.array([50.0]), 600.0, step, interval, size)
    assert count == 2
    assert step[:2].tolist() == [1, 3]
    assert interval[:2].tolist() == [130.0, 170.0]
    assert size[:2].tolist() == [3, 1]
