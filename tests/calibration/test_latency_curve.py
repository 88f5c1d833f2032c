"""Latency against light: its line, its deviation, and what a queue or a dull picture does to it."""

import numpy as np
import pytest
from test_onset import queued

from hybridtrack.calibration.latency_curve import (
    BEFORE_NS,
    BIN_NS,
    CLASSES,
    GROUPS,
    ClassStatus,
    common_line,
    fit_curve,
    light_classes,
    pixel_groups,
    trimmed_mean,
)
from hybridtrack.calibration.latency_kernels import status_by_class

ROWS, COLUMNS, FLIPS = 60, 90, 6
START_NS, FACTOR_NS_DN = 20e3, 60e3 * 120.0  # where delays start from, and delay times light


def firing(light, spread, rng):
    """Firing times (N,): a constant, and a part that falls with light, of a spread from pixel to pixel."""
    own = FACTOR_NS_DN * np.maximum(1.0 + spread * rng.standard_normal(light.shape), 0.2)
    return START_NS + own / light


def seen(fire_of_flips, kind, event_ns):
    """Status (classes, 2, bins) of flips (F, N) of firing times read by a row scan."""
    status = np.zeros((GROUPS * CLASSES, 2, 400))
    for fire in fire_of_flips:
        stamps, y, pixel = queued(fire, np.repeat(np.arange(ROWS), COLUMNS), event_ns)
        status_by_class(
            np.round(stamps).astype(np.int64),
            (pixel % COLUMNS).astype(np.uint16),
            y.astype(np.uint16),
            np.ones(len(y), np.uint8),
            1,
            np.zeros(1),
            BEFORE_NS,
            BIN_NS,
            kind,
            np.full((ROWS, COLUMNS), -1, np.int64),
            np.zeros((ROWS, len(status)), np.int64),
            np.zeros((ROWS, len(status)), np.int64),
            status,
        )
    return status


def view_of(rng, falloff=0.35, spread=0.2, event_ns=20.0, jitter=0.05, noise_dn=0.0):
    """One view of a panel whose light falls off across it."""
    light = np.tile(np.linspace(140.0, 140.0 * (1.0 - falloff), COLUMNS), (ROWS, 1)).ravel()
    mask = np.ones((ROWS, COLUMNS), bool)
    measured = light + noise_dn * rng.standard_normal(light.shape)
    kind = pixel_groups(mask.shape) * CLASSES + light_classes(mask, measured).reshape(mask.shape)
    fixed = firing(light, spread, rng)
    times = [fixed + jitter * (fixed - START_NS) * rng.standard_normal(len(fixed)) for _ in range(FLIPS)]
    status = seen(times, kind.astype(np.int64), event_ns)
    pixels = np.bincount(kind.ravel(), minlength=len(status)).astype(float)
    inverse = np.bincount(kind.ravel(), 1.0 / measured, minlength=len(status))
    parts = (GROUPS, CLASSES)
    return ClassStatus(status.reshape(*parts, 2, -1), pixels.reshape(parts), inverse.reshape(parts))


def test_points_on_a_line_give_it_exactly():
    """Views shifted as a whole do not bend a line that is exact within each of them."""
    rng = np.random.default_rng(0)
    inverse = rng.uniform(0.006, 0.012, (4, CLASSES))
    weight = rng.uniform(10, 90, (4, CLASSES))
    shift = np.array([3e3, -2e3, 0.0, 1e3])
    delay = 2e4 + 6e6 * inverse + shift[:, None]
    line = common_line(np.stack([inverse, delay, weight], axis=1))
    assert line.slope == pytest.approx(6e6, rel=1e-9)
    total = weight.sum(axis=1)
    assert line.intercept_ns == pytest.approx(2e4 + np.average(shift, weights=total), abs=1e-3)


def test_light_of_one_level_has_no_line():
    """No slope is made up where all classes have the same light."""
    flat = np.stack([np.full((2, CLASSES), 0.008), np.full((2, CLASSES), 7e4), np.ones((2, CLASSES))], axis=1)
    assert common_line(flat) is None


def test_trimmed_mean_of_an_even_spread():
    """Times spread evenly from 100 to 200 us average, between the quantiles 0.05 and 0.9, to 147.5 us."""
    time = (np.arange(400) + 0.5) * BIN_NS - BEFORE_NS
    share = np.clip((time - 100e3) / 100e3, 0.0, 1.0)
    assert trimmed_mean(np.array([1e6 * share, np.full(400, 1e6)])) == pytest.approx(147.5e3, abs=200.0)


def test_times_never_seen_have_no_mean():
    """A distribution of which only the end was inspected has none."""
    status = np.zeros((2, 400))
    status[:, 350:] = 10.0
    assert np.isnan(trimmed_mean(status))


def test_no_queue_and_no_spread_give_the_true_intercept():
    """Delays that follow light exactly: intercept to a microsecond, slope to 2 %."""
    curve = fit_curve([view_of(np.random.default_rng(1), spread=0.02, event_ns=2.0, jitter=0.02)])
    assert curve.intercept_ns == pytest.approx(START_NS, abs=1.5e3)
    assert curve.slope_ns_dn == pytest.approx(FACTOR_NS_DN, rel=0.02)


def test_errors_behind_a_queue_match_their_deviation():
    """Over 24 draws, with a queue longer than the delays and a mismatch of 20 %, errors are as large as is said."""
    errors = []
    for seed in range(24):
        rng = np.random.default_rng(50 + seed)
        curve = fit_curve([view_of(rng, noise_dn=1.0)])
        errors.append((curve.intercept_ns - START_NS) / np.hypot(curve.intercept_sigma_ns, 1e3))
    assert 0.5 < np.mean(np.square(errors)) < 1.9
    assert np.max(np.abs(errors)) < 3.5


def test_little_falloff_widens_the_deviation():
    """A panel lit within 4 % tells the intercept ten times worse than one that falls off by 35 %."""
    wide = fit_curve([view_of(np.random.default_rng(7))])
    narrow = fit_curve([view_of(np.random.default_rng(7), falloff=0.04)])
    assert narrow.intercept_sigma_ns > 4.0 * wide.intercept_sigma_ns
