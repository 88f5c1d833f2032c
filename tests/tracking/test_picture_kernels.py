"""Levels from events sorted by pixel: the inner integral against closed forms, levels at any instant."""

from collections.abc import Callable

import numpy as np
import pytest

from hybridtrack.tracking.picture_kernels import (
    exposure_levels,
    levels_at,
    light_times,
    mean_exp,
    ramp_area,
    same_sign_intervals,
    sort_by_pixel,
)

Array = np.ndarray
THETA = 0.02
START_NS, EXPOSURE_NS, RAMP_NS = 10_000_000, 8_000_000, 5_000_000
FOREVER = 1 << 62


def ideal(level: Callable[[float], float], end_ns: int, place: tuple[int, int] = (0, 0)) -> list[tuple[int, ...]]:
    """Events (t, x, y, on) of one ideal comparator that starts settled, by fine sampling."""
    events, memory = [], level(0.0)
    for t in range(0, end_ns, 1000):
        value = level(t * 1e-9)
        while abs(value - memory) >= THETA:
            up = value > memory
            memory += THETA if up else -THETA
            events.append((t, *place, int(up)))
    return events


def in_order(events: list[tuple[int, ...]], rows: int = 1, lag_ns: int = 0) -> tuple[Array, ...]:
    """What most kernels take first: events sorted by pixel, and when their light was."""
    table = np.array(sorted(events), np.int64).reshape(-1, 4)
    grid = np.full((rows, 1), THETA)
    columns = (table[:, 1].astype(np.uint16), table[:, 2].astype(np.uint16), table[:, 3].astype(np.uint8))
    pixels = sort_by_pixel(table[:, 0] + lag_ns, *columns, grid, grid)
    return *pixels, light_times(*pixels, np.zeros((rows, 1)), float(lag_ns), 0.0, 1e9)


def bracket(level: Callable[[float], float], at_ns: int, lag_ns: int = 0, ramp_ns: int = RAMP_NS) -> float:
    """Log of the mean of light over the exposure, less log light at an instant, as events have it."""
    pixels = in_order(ideal(level, START_NS + EXPOSURE_NS + 6_000_000), lag_ns=lag_ns)
    start = np.full((1, 1), START_NS, np.int64)
    mean = exposure_levels(*pixels, start, EXPOSURE_NS, ramp_ns, FOREVER)
    there = levels_at(*pixels, pixels[0][:-1].copy(), np.full((1, 1), at_ns, np.int64), ramp_ns, FOREVER)[0]
    return float(mean[0, 0] - there[0, 0])


@pytest.mark.parametrize("share", [-0.4, 0.0, 0.3, 1.0, 1.4])
def test_a_slope_at_constant_speed_has_the_closed_form(share: float) -> None:
    """An exponential edge that moves at constant speed: log light rises by s, whose mean of exp is sinh(s/2) / (s/2)
    about the middle; at an instant before, within or after the exposure."""
    s = 1.2
    expected = np.log(np.sinh(s / 2) / (s / 2)) - s * (share - 0.5)
    found = bracket(lambda t: s * t / (EXPOSURE_NS * 1e-9), START_NS + int(share * EXPOSURE_NS))
    assert found == pytest.approx(expected, abs=0.003)


@pytest.mark.parametrize("share", [0.2, 0.5, 0.9])
def test_a_sharp_edge_has_the_closed_form(share: float) -> None:
    """An edge of height h that passes when `share` s of the exposure is over: the mean of light is s + (1 - s) e^h."""
    h, passes_s = 40.001 * THETA, (START_NS + share * EXPOSURE_NS) * 1e-9
    expected = np.log(share + (1 - share) * np.exp(h))
    found = bracket(lambda t: h * float(t >= passes_s), START_NS - 3_000_000, ramp_ns=10_000)
    assert found == pytest.approx(expected, abs=0.003)


def test_a_known_lag_changes_nothing() -> None:
    """Late stamps with their lag stated give what punctual ones give."""

    def level(t: float) -> float:
        return float(np.tanh((t - 13.3e-3) / 1.5e-3))

    assert bracket(level, START_NS, lag_ns=700_000) == pytest.approx(bracket(level, START_NS), abs=1e-9)


def test_each_row_has_its_own_exposure() -> None:
    """The same events in two rows, one exposed before the edge and one after: means differ by its height."""
    pixels = in_order(
        [event for row in (0, 1) for event in ideal(lambda t: 0.4 * float(t > 20e-3), 30_000_000, (0, row))],
        rows=2,
    )
    start = np.array([[5_000_000], [22_000_000]], np.int64)
    mean = exposure_levels(*pixels, start, 4_000_000, 1_000_000, FOREVER)
    assert mean[1, 0] - mean[0, 0] == pytest.approx(0.4, abs=THETA)


def test_levels_go_on_a_ramp_to_the_next_event_unless_it_is_in_the_future() -> None:
    """Half way along the ramp half a threshold; flat where the next event must not be known."""
    pixels = in_order([(1_000, 0, 0, 1), (9_000, 0, 0, 1)])
    cursor = pixels[0][:-1].copy()
    for t, expected, until in ((500, 0.5, FOREVER), (1_000, 1, FOREVER), (6_000, 1.25, FOREVER), (9_500, 2, FOREVER)):
        level, count = levels_at(*pixels, cursor, np.full((1, 1), t), 4_000 if t > 1_000 else 1_000, until)
        assert level[0, 0] == pytest.approx(expected * THETA, abs=1e-6)
        assert count[0, 0] == int(expected)
    level, count = levels_at(*pixels, pixels[0][:-1].copy(), np.full((1, 1), 8_000), 4_000, 8_000)
    assert (level[0, 0], count[0, 0]) == (pytest.approx(THETA), 1)


def test_intervals_of_one_sign() -> None:
    """Only neighbours of one pixel and one sign count."""
    events = [(0, 0, 0, 1), (5, 0, 1, 1), (10, 0, 0, 1), (30, 0, 0, 0), (36, 0, 1, 0), (70, 0, 0, 0)]
    assert sorted(same_sign_intervals(*in_order(events, rows=2)[:3]).tolist()) == [10, 40]


def test_area_under_a_straight_line() -> None:
    """Against the antiderivative, cut on either side."""
    exact = (np.exp(0.5) - np.exp(0.1)) / 0.4 * 100
    assert ramp_area(-10, 200, 0, 0.1, 100, 0.5) == pytest.approx(exact)
    assert ramp_area(-10, 50, 0, 0.1, 100, 0.5) + ramp_area(50, 200, 0, 0.1, 100, 0.5) == pytest.approx(exact)
    assert ramp_area(100, 200, 0, 0.1, 100, 0.5) == 0.0
    assert mean_exp(0.3, 0.3) == pytest.approx(np.exp(0.3))


def test_lateness_follows_light_and_never_turns_events_about() -> None:
    """A constant and a part inverse to light: e times as long one natural-log unit darker, at most the longest."""
    steps = 50
    events = [(1_000_000 * k, 0, 0, 0) for k in range(1, steps + 1)]
    begin, stamp_ns, level, _ = in_order(events)
    light_ns = light_times(begin, stamp_ns, level, np.array([[-0.5]]), 2_000.0, 100_000.0, 1e9)
    np.testing.assert_allclose(stamp_ns - light_ns, 2_000 + 100_000 * np.exp(0.5 + THETA * np.arange(1, 51)), atol=1)
    limited = light_times(begin, stamp_ns, level, np.array([[-0.5]]), 2_000.0, 100_000.0, 300_000.0)
    assert (stamp_ns - limited).max() == 300_000
    close = in_order([(10, 0, 0, 0), (11, 0, 0, 0), (12, 0, 0, 0)])[:3]
    assert np.all(np.diff(light_times(*close, np.array([[-5.0]]), 0.0, 1_000.0, 1e9)) >= 0)
