"""Loops over events. Each takes plain arrays, adds to its output arrays and is linear in the number of events.

Times are int64 ns. A *blink phase* is the time since `epoch_ns` in cycles; set A turns bright at whole numbers.
"""

import numpy as np

from hybridtrack.compiled import kernel

Array = np.ndarray

# Planes of a fold: what an event is, and in which part of the cycle it falls.
ON_BRIGHT, OFF_BRIGHT, ON_DARK, OFF_DARK = range(4)


@kernel
def tile_histogram(t: Array, x: Array, y: Array, on: Array, t0_ns: int, bin_ns: int, tile: int, out: Array) -> int:
    """Add signed polarities to `out` (bins, tile rows, tile columns) from `t0_ns` on.

    Returns how many events were used: it stops at the first stamp past the last bin.
    """
    end = t0_ns + bin_ns * out.shape[0]
    for k in range(len(t)):
        if t[k] >= end:
            return k
        if t[k] >= t0_ns and y[k] // tile < out.shape[1] and x[k] // tile < out.shape[2]:
            out[(t[k] - t0_ns) // bin_ns, y[k] // tile, x[k] // tile] += 2.0 * on[k] - 1.0
    return len(t)


@kernel
def fold_events(
    t: Array, x: Array, y: Array, on: Array, epoch_ns: int, epoch_phase: float, hz: float, duty: float, out: Array
) -> None:
    """Count events by pixel, polarity and half of the cycle into `out` (4, rows, columns)."""
    rate = hz * 1e-9
    for k in range(len(t)):
        phase = (t[k] - epoch_ns) * rate + epoch_phase
        dark = phase - np.floor(phase) >= duty
        out[2 * dark + (1 - on[k]), y[k], x[k]] += 1


@kernel
def count_by_cycle(
    t: Array, x: Array, y: Array, on: Array, epoch_ns: int, epoch_phase: float, hz: float, duty: float, sign: Array,
    first: int, out: Array,
) -> None:  # fmt: skip
    """Add to `out` (cycles,), from whole cycle `first` on, events that agree with the light, less those against it.

    `sign` (rows, columns) int8: 1 for pixels of set A, -1 for those that blink the other way, 0 for all others.
    """
    rate = hz * 1e-9
    for k in range(len(t)):
        s = sign[y[k], x[k]]
        if s == 0:
            continue
        phase = (t[k] - epoch_ns) * rate + epoch_phase
        cycle = int(np.floor(phase)) - first
        if 0 <= cycle < len(out):
            bright = phase - np.floor(phase) < duty
            out[cycle] += s if bright == (on[k] == 1) else -s


@kernel
def count_flips(
    t: Array, x: Array, y: Array, on: Array, epoch_ns: int, epoch_phase: float, hz: float, duty: float, first: int,
    out: Array,
) -> None:  # fmt: skip
    """Count events by flip into `out` (cycles, 2, rows, columns), from whole cycle `first` on: ON in the bright part
    of a cycle, OFF in its dark part."""
    rate = hz * 1e-9
    for k in range(len(t)):
        phase = (t[k] - epoch_ns) * rate + epoch_phase
        whole = np.floor(phase)
        cycle, off = int(whole) - first, 1 - on[k]
        if 0 <= cycle < out.shape[0] and (phase - whole >= duty) == (off == 1) and out[cycle, off, y[k], x[k]] < 255:
            out[cycle, off, y[k], x[k]] += 1


@kernel
def time_order(t: Array, bin_ns: int) -> Array:
    """Order (N,) that sorts stamps `t` (N,) int64 which span not too many bins: a bucket sort, then each bucket by
    insertion; linear where a bucket holds few."""
    count = len(t)
    order = np.empty(count, np.int64)
    if count == 0:
        return order
    first = t.min()
    start = np.zeros((t.max() - first) // bin_ns + 2, np.int64)
    for k in range(count):
        start[(t[k] - first) // bin_ns + 1] += 1
    for b in range(1, len(start)):
        start[b] += start[b - 1]
    fill = start.copy()
    for k in range(count):
        b = (t[k] - first) // bin_ns
        place = fill[b]
        fill[b] += 1
        while place > start[b] and t[order[place - 1]] > t[k]:
            order[place] = order[place - 1]
            place -= 1
        order[place] = k
    return order


@kernel
def fold_harmonic(
    t: Array, x: Array, y: Array, on: Array, epoch_ns: int, epoch_phase: float, hz: float, out: Array
) -> None:
    """Add signed polarity times exp(-2 pi i phase) of each event to its pixel of `out` (rows, columns), complex."""
    rate = hz * 1e-9
    for k in range(len(t)):
        turn = -2.0 * np.pi * ((t[k] - epoch_ns) * rate + epoch_phase)
        out[y[k], x[k]] += (2.0 * on[k] - 1.0) * complex(np.cos(turn), np.sin(turn))


@kernel
def fold_phase(
    t: Array, x: Array, y: Array, on: Array, epoch_ns: int, epoch_phase: float, hz: float, selected: Array, out: Array
) -> None:
    """Histogram over the blink phase, `out` (2, bins): ON and OFF events of the `selected` (rows, columns) pixels."""
    rate = hz * 1e-9
    bins = out.shape[1]
    for k in range(len(t)):
        if selected[y[k], x[k]]:
            phase = (t[k] - epoch_ns) * rate + epoch_phase
            out[1 - on[k], int((phase - np.floor(phase)) * bins) % bins] += 1


@kernel
def flip_histogram(
    t: Array,
    x: Array,
    y: Array,
    on: Array,
    polarity: int,
    flips_ns: Array,
    before_ns: float,
    bin_ns: float,
    selected: Array,
    out: Array,
) -> None:
    """Histogram of events around each flip, `out` (flips, bins), first bin `before_ns` before the flip.

    `flips_ns` (flips,) float, rising, relative to the same origin as `t`; windows of neighbours must not overlap.
    Counts events of one `polarity` at the `selected` (rows, columns) pixels.
    """
    flip = 0
    width = bin_ns * out.shape[1]
    for k in range(len(t)):
        if on[k] != polarity or not selected[y[k], x[k]]:
            continue
        while flip < len(flips_ns) and t[k] >= flips_ns[flip] - before_ns + width:
            flip += 1
        if flip == len(flips_ns):
            return
        since = t[k] - flips_ns[flip] + before_ns
        if since >= 0.0:
            out[flip, int(since / bin_ns)] += 1


@kernel
def count_events(x: Array, y: Array, out: Array) -> None:
    """Count events by pixel into `out` (rows, columns)."""
    for k in range(len(x)):
        out[y[k], x[k]] += 1


@kernel
def shortest_intervals(t: Array, x: Array, y: Array, last_ns: Array, shortest_ns: Array) -> None:
    """Carry the last stamp and the shortest interval between events of each pixel, both (rows, columns) int64."""
    for k in range(len(t)):
        interval = t[k] - last_ns[y[k], x[k]]
        if interval < shortest_ns[y[k], x[k]]:
            shortest_ns[y[k], x[k]] = interval
        last_ns[y[k], x[k]] = t[k]


@kernel
def count_quiet_events(
    t: Array,
    x: Array,
    y: Array,
    epoch_ns: int,
    epoch_phase: float,
    hz: float,
    first: float,
    last: float,
    anytime: Array,
    out: Array,
) -> None:
    """Count events by pixel into `out` (rows, columns): those between two phases of the cycle, or `anytime` there."""
    rate = hz * 1e-9
    for k in range(len(t)):
        if anytime[y[k], x[k]]:
            out[y[k], x[k]] += 1
        else:
            phase = (t[k] - epoch_ns) * rate + epoch_phase
            phase -= np.floor(phase)
            if first <= phase < last:
                out[y[k], x[k]] += 1


@kernel
def first_fire_status(
    t: Array,
    x: Array,
    y: Array,
    on: Array,
    flips_ns: Array,
    before_ns: float,
    after_ns: float,
    bin_ns: float,
    selected: Array,
    fired: Array,
    in_row: Array,
    seen: Array,
    status: Array,
) -> None:
    """How many pixels of a row have fired since a flip, each time the row is read.

    `t` and `flips_ns` (flips,) from one origin. A *read* is a run of events from one row. `status` (2, bins) gains,
    in the bin of the read's last stamp after the flip less `before_ns`, the number of the row's `selected` pixels
    that have fired ON, and of those that will before `after_ns` is over. Work space: `fired` (rows, columns) int64,
    filled with -1, `in_row` and `seen` (rows,).
    """
    start = 0
    for k in range(len(flips_ns)):
        begin, end = flips_ns[k] - before_ns, flips_ns[k] + after_ns
        while start < len(t) and t[start] < begin:
            start += 1
        stop = start
        in_row[:] = 0
        while stop < len(t) and t[stop] < end:
            r, c = y[stop], x[stop]
            if on[stop] == 1 and selected[r, c] and fired[r, c] != 2 * k:
                fired[r, c] = 2 * k
                in_row[r] += 1
            stop += 1
        seen[:] = 0
        for n in range(start, stop):
            r, c = y[n], x[n]
            if on[n] == 1 and selected[r, c] and fired[r, c] != 2 * k + 1:
                fired[r, c] = 2 * k + 1
                seen[r] += 1
            if (n + 1 == stop or y[n + 1] != r) and in_row[r] > 0:
                place = int((t[n] - begin) / bin_ns)
                if place < status.shape[1]:
                    status[0, place] += seen[r]
                    status[1, place] += in_row[r]
