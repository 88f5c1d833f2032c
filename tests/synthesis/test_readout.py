"""The row-scanned readout: load-dependent lag, order, and what becomes of events that wait."""

import itertools

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from hybridtrack.errors import OptionError
from hybridtrack.recording import Events
from hybridtrack.synthesis.readout import ReadoutPhysics, RowScanReadout

SHAPE = (200, 320)


def read_all(readout: RowScanReadout, raw: Events) -> Events:
    """Read raw events and all that then still waits."""
    return Events.joined([readout.read(raw), readout.flush()])


def at_pixels(pixels: np.ndarray, t: np.ndarray | int, columns: int = 320) -> Events:
    """ON events of flat pixel numbers."""
    stamps = np.broadcast_to(np.asarray(t, np.int64), pixels.shape).copy()
    x, y = (pixels % columns).astype(np.uint16), (pixels // columns).astype(np.uint16)
    return Events(stamps, x, y, np.ones(len(pixels), np.uint8))


def test_many_simultaneous_events_lag_as_the_bandwidth_says() -> None:
    """41 000 simultaneous events at 50 million a second take 0.8 ms from first row to last."""
    pixels = np.sort(np.random.default_rng(0).permutation(64000)[:41000])
    readout = RowScanReadout(SHAPE, ReadoutPhysics(event_ns=20.0, row_ns=100.0))
    read = read_all(readout, at_pixels(pixels, 1_000_000))
    assert len(read) == 41000
    span = read.t[-1] - read.t[0]
    assert span == pytest.approx(0.8e6, rel=0.06)
    last_row = np.count_nonzero(read.y == 199)
    assert span == pytest.approx(20.0 * (41000 - last_row) + 100.0 * 199, abs=1.0)
    assert np.all(np.diff(read.y[np.argsort(read.t, kind="stable")].astype(int)) >= 0)


def test_single_event_waits_for_its_row_only() -> None:
    """An idle readout stamps an event one row time after it happened."""
    read = RowScanReadout(SHAPE, ReadoutPhysics(row_ns=250.0)).read(at_pixels(np.array([77777 % 64000]), 5_000))
    assert read.t.tolist() == [5_250]


def test_rows_share_one_stamp() -> None:
    """All events of a row read together bear one stamp."""
    read = read_all(RowScanReadout(SHAPE), at_pixels(np.arange(640), 9_000))
    assert len(np.unique(read.t)) == 2


@settings(max_examples=30, deadline=None)
@given(st.integers(0, 2**31), st.integers(1, 400), st.integers(1, 8))
def test_nothing_is_lost_or_read_early(seed: int, count: int, parts: int) -> None:
    """While waiting is allowed every event comes out once, late, in order, in however many calls it is read."""
    random = np.random.default_rng(seed)
    t = np.sort(random.integers(0, 20_000, count)).astype(np.int64)
    raw = Events(
        t,
        random.integers(0, 6, count).astype(np.uint16),
        random.integers(0, 4, count).astype(np.uint16),
        random.integers(0, 2, count).astype(np.uint8),
    )
    whole = read_all(RowScanReadout((4, 6)), raw)
    readout, out, edges = RowScanReadout((4, 6)), [], np.linspace(0, 20_000, parts + 1)
    for low, high in itertools.pairwise(edges):
        out.append(readout.read(raw[(t > low if low else t >= 0) & (t <= high)], high))
    out.append(readout.flush())
    split = Events.joined(out)
    # Events of one row and one stamp have no order among themselves.
    one, other = (part[np.lexsort((part.on, part.x, part.y, part.t))] for part in (split, whole))
    for name in ("t", "x", "y", "on"):
        np.testing.assert_array_equal(getattr(one, name), getattr(other, name))
    assert np.all(np.diff(split.t) >= 0)
    assert len(split) == count
    for pixel in range(24):
        raw_t = raw.t[raw.y * 6 + raw.x == pixel]
        read_t = split.t[split.y * 6 + split.x == pixel]
        assert np.all(read_t >= raw_t + 100)


def test_events_of_a_waiting_pixel_are_lost_where_told() -> None:
    """With `lose`, a pixel sends one event a turn of the scan, and the count of lost ones is kept."""
    pixels = np.concatenate([np.arange(320), [5, 6, 7]])
    raw = at_pixels(pixels, 1_000)
    waiting = RowScanReadout(SHAPE, ReadoutPhysics(while_waiting="wait"))
    losing = RowScanReadout(SHAPE, ReadoutPhysics(while_waiting="lose"))
    assert len(read_all(waiting, raw)) == 323
    assert len(read_all(losing, raw)) == 320
    assert losing.lost == 3
    assert losing.lost_ns == []


def test_overload_drops_and_says_when() -> None:
    """Events that waited longer than allowed are dropped, and the interval is reported."""
    raw = at_pixels(np.arange(64000), 2_000_000)
    readout = RowScanReadout(SHAPE, ReadoutPhysics(wait_max_ns=0.5e6))
    read = read_all(readout, raw)
    assert len(read) + readout.lost == 64000
    assert readout.lost > 30000
    assert read.t.max() - 2_000_000 <= 0.5e6
    assert readout.lost_ns == [(2_000_000, 2_000_001)]


def test_stamps_are_rounded_down() -> None:
    """Stamps are multiples of the resolution."""
    read = read_all(RowScanReadout(SHAPE, ReadoutPhysics(resolution_ns=1000)), at_pixels(np.arange(5000), 1_234_567))
    assert len(read) == 5000
    assert np.all(read.t % 1000 == 0)


def test_refusals() -> None:
    """Times and choices that make no sense are refused."""
    with pytest.raises(OptionError, match="must not be negative"):
        ReadoutPhysics(row_ns=-1.0)
    with pytest.raises(OptionError, match="resolution_ns at least 1"):
        ReadoutPhysics(resolution_ns=0)
    with pytest.raises(OptionError, match="while_waiting must be"):
        ReadoutPhysics(while_waiting="forget")  # type: ignore[arg-type]
