"""Loops over events that the latency and the readout's skew are read from."""

import numpy as np

from hybridtrack.compiled import kernel

Array = np.ndarray


@kernel
def status_by_class(
    t: Array,
    x: Array,
    y: Array,
    on: Array,
    polarity: int,
    flips_ns: Array,
    before_ns: float,
    bin_ns: float,
    kind: Array,
    fired: Array,
    in_row: Array,
    seen: Array,
    status: Array,
) -> None:
    """As `first_fire_status`, for pixels of several classes at once: how many have fired at each read of their row.

    `kind` (rows, columns) int64: class of each pixel, -1 to leave it out. `status` (classes, 2, bins) gains, in the bin
    of the read's last stamp after the flip less `before_ns`, how many pixels of the row and class have fired an event
    of `polarity` since the flip, and how many will before the bins end. `t` and `flips_ns` from one origin. Work space:
    `fired` (rows, columns) int64, filled with -1; `in_row` and `seen` (rows, classes) int64.
    """
    start, classes, bins = 0, status.shape[0], status.shape[2]
    for k in range(len(flips_ns)):
        begin = flips_ns[k] - before_ns
        end = begin + bins * bin_ns
        while start < len(t) and t[start] < begin:
            start += 1
        stop = start
        in_row[:] = 0
        seen[:] = 0
        while stop < len(t) and t[stop] < end:
            r, c = y[stop], x[stop]
            if on[stop] == polarity and kind[r, c] >= 0 and fired[r, c] != 2 * k:
                fired[r, c] = 2 * k
                in_row[r, kind[r, c]] += 1
            stop += 1
        for n in range(start, stop):
            r, c = y[n], x[n]
            if on[n] == polarity and kind[r, c] >= 0 and fired[r, c] != 2 * k + 1:
                fired[r, c] = 2 * k + 1
                seen[r, kind[r, c]] += 1
            if n + 1 == stop or y[n + 1] != r:
                place = int((t[n] - begin) / bin_ns)
                if place < bins:
                    for j in range(classes):
                        status[j, 0, place] += seen[r, j]
                        status[j, 1, place] += in_row[r, j]


@kernel
def row_intervals(
    t: Array, y: Array, flips_ns: Array, width_ns: float, step: Array, interval: Array, size: Array
) -> int:
    """From the first stamp of a row's read to the first of the next row's, after flips.

    Fills `step` (N,) int64 with the rows between the two, `interval` (N,) with ns and `size` (N,) int64 with the events
    of the first; returns how many there are, at most N. Windows of `width_ns` start at `flips_ns`, from the origin of
    `t`.
    """
    start, count = 0, 0
    for k in range(len(flips_ns)):
        while start < len(t) and t[start] < flips_ns[k]:
            start += 1
        first, n = start, start
        while n + 1 < len(t) and t[n + 1] < flips_ns[k] + width_ns:
            if y[n + 1] != y[n]:
                if count == len(step):
                    return count
                # The first run of a window may have begun before it.
                if first > start:
                    step[count] = np.int64(y[n + 1]) - np.int64(y[n])
                    interval[count] = t[n + 1] - t[first]
                    size[count] = n + 1 - first
                    count += 1
                first = n + 1
            n += 1
    return count
