"""Dating flips by onsets, and by the mean first event past a queue."""

import numpy as np
import pytest
from ideal_board import board_target

from hybridtrack.calibration.blink import Blink, find_blink
from hybridtrack.calibration.first_fire import at_mean_first_event, fired_share, measure_first_fire
from hybridtrack.calibration.kernels import first_fire_status
from hybridtrack.calibration.onset import fit_onsets, quantile_times, regress
from hybridtrack.calibration.views import View, ViewFold, find_views, fold_view
from hybridtrack.errors import NoBlinkError

SHAPE = (80, 120)


def test_blink_clock_of_a_recording(clean, clean_scene):
    """Frequency to a part in a million and phase to a few microseconds, although mean stamps lag by half a
    millisecond.
    """
    rough = find_blink(clean, SHAPE, clean_scene.target)
    views, _ = find_views(clean, rough, SHAPE)
    folds = [fold_view(clean, view, rough, SHAPE) for view in views]
    onset = fit_onsets(clean, rough, views, folds)
    assert onset.blink.hz == pytest.approx(clean_scene.true_blink_hz, rel=1e-6)
    onset = at_mean_first_event(onset, measure_first_fire(clean, views, folds, onset))
    blink = onset.blink
    late_ns = -((blink.phase(clean_scene.start_ns) + 0.5) % 1.0 - 0.5) * blink.period_ns
    assert late_ns == pytest.approx(clean_scene.latency_ns, abs=5e3)


def test_onset_ignores_background_before_the_burst():
    """A steady background ahead of the burst does not move the quantile."""
    quiet = np.zeros((1, 5000))
    quiet[0, 2500:3000] = 20.0
    noisy = quiet + 1.0
    assert quantile_times(noisy, (0.01,))[0, 0] == pytest.approx(quantile_times(quiet, (0.01,))[0, 0], abs=4e3)


def test_flips_without_events_are_not_dated():
    """Too small a burst gives NaN, not a date."""
    assert np.isnan(quantile_times(np.ones((1, 100)), (0.01,))[0, 0])


def test_regression_is_honest_about_shared_shifts():
    """Views that shift as a whole widen the deviation of the period to what repeated draws show."""
    rng = np.random.default_rng(2)
    number = np.concatenate([np.arange(30) + 40 * v for v in range(10)]).astype(float)
    view = np.repeat(np.arange(10), 30)
    errors = []
    for _ in range(120):
        onset = 1e7 * number + 2e3 * rng.standard_normal(10)[view] + 500.0 * rng.standard_normal(300)
        line, covariance, _ = regress(number, onset, view, 200.0)
        errors.append((line[1] - 1e7) / np.sqrt(covariance[1, 1]))
    assert np.std(errors) == pytest.approx(1.0, abs=0.3)


def test_few_views_that_line_up_by_chance_are_not_believed():
    """Of six views over two seconds some line up by chance; with the wander expected no error exceeds 4 deviations."""
    rng = np.random.default_rng(6)
    number = np.concatenate([np.arange(20) + 28 * v for v in range(6)]).astype(float)
    view = np.repeat(np.arange(6), 20)
    errors: dict[bool, list[float]] = {True: [], False: []}
    for _ in range(400):
        onset = 1.37e7 * number + 2e3 * rng.standard_normal(6)[view] + 500.0 * rng.standard_normal(120)
        for expected in errors:
            line, covariance, _ = regress(number, onset, view, 80.0, 2e3 if expected else None)
            errors[expected].append(abs(line[1] - 1.37e7) / np.sqrt(covariance[1, 1]))
    assert max(errors[True]) < 4.0 < max(errors[False])
    assert 0.6 < np.mean(np.square(errors[True])) < 1.3


def test_blinking_too_faint_to_date_is_refused(clean):
    """With no pixel inside set A no flip can be dated."""
    view = View(5_000_000_000, 5_400_000_000, 0.0, False)
    fold = ViewFold(np.zeros((4, *SHAPE), np.uint32), 20)
    with pytest.raises(NoBlinkError, match=r"at least 200 ON events a flip are required, and only 0 flips"):
        fit_onsets(clean, Blink(61.2, 1e-3, 5_000_000_000, 0.0, 0.5), [view], [fold])


def queued(fire_ns, row, event_ns):
    """Stamps of a row scan that reads what has fired: one event a pixel."""
    order = np.argsort(fire_ns)
    waiting = {}
    stamps, rows, pixels = [], [], []
    clock, pointer, k = 0.0, 0, 0
    count = int(row.max()) + 1
    while k < len(order) or waiting:
        while k < len(order) and fire_ns[order[k]] <= clock:
            waiting.setdefault(int(row[order[k]]), []).append(order[k])
            k += 1
        if not waiting:
            clock = fire_ns[order[k]]
            continue
        while pointer not in waiting:
            pointer = (pointer + 1) % count
        here = waiting.pop(pointer)
        clock += 100.0
        for pixel in here:
            stamps.append(clock)
            rows.append(pointer)
            pixels.append(pixel)
        clock += event_ns * len(here)
        pointer = (pointer + 1) % count
    return np.array(stamps), np.array(rows), np.array(pixels)


def test_mean_delay_is_seen_past_the_queue():
    """Firing times of 60 +- 25 us behind a queue of 0.2 ms: their mean comes out to 3 us, the mean stamp is far off."""
    rng = np.random.default_rng(3)
    rows, columns, flips = 100, 100, 8
    status = np.zeros((2, 1250))
    mean_stamp = []
    for _ in range(flips):
        fire = np.maximum(60e3 + 25e3 * rng.standard_normal(rows * columns), 5e3)
        row = np.repeat(np.arange(rows), columns)
        stamps, y, pixel = queued(fire, row, 20.0)
        mean_stamp.append(stamps.mean())
        first_fire_status(
            np.round(stamps).astype(np.int64),
            (pixel % columns).astype(np.uint16),
            y.astype(np.uint16),
            np.ones(len(y), np.uint8),
            np.zeros(1),
            1e5,
            2.4e6,
            2e3,
            np.ones((rows, columns), bool),
            np.full((rows, columns), -1, np.int64),
            np.zeros(rows, np.int64),
            np.zeros(rows, np.int64),
            status,
        )
    time, share = fired_share(status)
    edges, level = np.r_[-1e5, time, 2.4e6], np.r_[0.0, share, 1.0]
    mean = np.sum(np.diff(edges) * (1 - 0.5 * (level[1:] + level[:-1]))) - 1e5
    assert mean == pytest.approx(60e3, abs=3e3)
    assert np.mean(mean_stamp) > 100e3


def test_target_of_the_scene_is_the_one_calibrated(clean_scene):
    """The scene's true rate is off its target's nominal rate, as a real clock is."""
    assert clean_scene.target.blink_hz == board_target().blink_hz != clean_scene.true_blink_hz
