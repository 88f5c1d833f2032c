"""The buffer of events, the gaps in them, and their lag."""

import numpy as np
import pytest

from hybridtrack.recording import Events
from hybridtrack.tracking.event_buffer import EventBuffer
from hybridtrack.tracking.event_gaps import EventGaps
from hybridtrack.tracking.event_lag import EventLag


def events(t: np.ndarray, on: np.ndarray | int = 1) -> Events:
    zeros = np.zeros(len(t), np.uint16)
    return Events(np.asarray(t, np.int64), zeros, zeros, np.broadcast_to(np.asarray(on, np.uint8), len(t)).copy())


def test_buffer_keeps_order_and_forgets() -> None:
    """What is appended in pieces comes back whole; what is dropped by time is gone."""
    buffer, every = EventBuffer(1_000_000), np.sort(np.random.default_rng(0).integers(0, 10**9, 300_000))
    for piece in np.array_split(every, 37):
        buffer.append(events(piece))
    np.testing.assert_array_equal(buffer.since(0).t, every)
    np.testing.assert_array_equal(buffer.since(500_000_000).t, every[every >= 500_000_000])
    buffer.drop_before(900_000_000)
    assert len(buffer) == np.sum(every >= 900_000_000)


def test_buffer_is_bounded_and_counts_what_it_drops() -> None:
    """Beyond its limit the oldest events go, and are counted; memory stays bounded however much passes."""
    buffer = EventBuffer(5000)
    for k in range(200):
        buffer.append(events(np.arange(1000) + 1000 * k))
    assert len(buffer) == 5000
    assert buffer.dropped == 195_000
    assert buffer.since(0).t[0] == 195_000
    assert len(buffer._columns[0]) <= 70_000
    buffer.append(events(np.arange(200_000, 212_000)))
    assert buffer.since(0).t[[0, -1]].tolist() == [207_000, 211_999]


def test_a_flash_is_found_and_flicker_is_not() -> None:
    """An array-wide rise of log light by 1 within 1 ms is a flash; 100 Hz of 30 % and balanced movement are not."""
    random, pixels, theta = np.random.default_rng(1), np.full((50, 80), 1.0), 0.2
    flash = EventGaps(0.6, theta * pixels, theta * pixels)
    flash.look_for_flashes(events(np.sort(random.integers(5_000_000, 5_900_000, 5 * pixels.size))))
    assert flash.intervals == [(5_000_000, 6_000_000, True)]
    assert flash.flashes == 1
    quiet = EventGaps(0.6, theta * pixels, theta * pixels)
    t = np.arange(0, 100_000_000, 1_000_000)
    step = np.diff(np.log(1 + 0.3 * np.sin(2 * np.pi * 100e-9 * np.append(t, 10**8))))
    counts = np.rint(np.abs(step) / theta * pixels.size).astype(int)
    flicker = events(np.repeat(t, counts), np.repeat(step > 0, counts))
    quiet.look_for_flashes(flicker)
    moving = np.sort(random.integers(200_000_000, 210_000_000, 50 * pixels.size))
    quiet.look_for_flashes(events(moving, random.integers(0, 2, len(moving))))
    assert quiet.intervals == []


def test_a_flash_split_between_calls_is_found_all_the_same() -> None:
    """What one call leaves of a millisecond counts with what the next one brings."""
    pixels = np.ones((10, 10))
    gaps = EventGaps(0.6, 0.2 * pixels, 0.2 * pixels)
    for piece in np.array_split(np.linspace(1_000_000, 1_900_000, 500), 3):
        gaps.look_for_flashes(events(piece))
    assert gaps.flashes == 1


def test_gaps_answer_what_they_touch() -> None:
    """An interval counts wherever it touches, and is forgotten when it is over."""
    gaps = EventGaps(0.6, np.ones((1, 1)), np.ones((1, 1)))
    gaps.add(100, 200)
    assert gaps.overlaps(150, 160)
    assert not gaps.overlaps(201, 300)
    assert gaps.first_in(50, 120) == (100, False)
    assert gaps.first_in(120, 300) == (120, False)
    assert gaps.first_in(0, 99) is None
    gaps.forget_before(201)
    assert not gaps.overlaps(0, 1000)


def test_lag_is_learned_and_outliers_bounded() -> None:
    """From noisy trails with a fifth of wrong ones, a lag of 0.4 ms is found within 0.05 ms; without any, none."""
    random, lag = np.random.default_rng(4), EventLag()
    for _ in range(40):
        trail = 4e-4 - lag.seconds + 1e-4 * random.standard_normal(60)
        trail[:12] = random.uniform(-5e-3, 5e-3, 12)
        lag.learn(trail, np.full(60, 3e-4))
    assert lag.seconds == pytest.approx(4e-4, abs=5e-5)
    assert EventLag().ns == 0
