"""The one loop over all events that the health check needs."""

import numpy as np

from hybridtrack.compiled import kernel


@kernel
def tally(
    t: np.ndarray,
    x: np.ndarray,
    y: np.ndarray,
    on: np.ndarray,
    t0: int,
    bin_ns: int,
    on_rate: np.ndarray,
    off_rate: np.ndarray,
    pixels: np.ndarray,
    last: np.ndarray,
    totals: np.ndarray,
) -> None:
    """Count one block of events.

    `on_rate`, `off_rate` int64 (bins,); `pixels` int64 (rows, columns); `last` int64 (4,): stamp, x, y and polarity
    of the event before. `totals` int64 (4,): events outside the grid, steps back in time, exact duplicates of the
    event before, longest gap in ns.
    """
    rows, columns = pixels.shape
    for i in range(len(t)):
        if x[i] >= columns or y[i] >= rows:
            totals[0] += 1
        else:
            pixels[y[i], x[i]] += 1
        step = t[i] - last[0]
        if step < 0:
            totals[1] += 1
        elif step == 0 and x[i] == last[1] and y[i] == last[2] and on[i] == last[3]:
            totals[2] += 1
        elif step > totals[3] and last[1] >= 0:
            totals[3] = step
        last[0], last[1], last[2], last[3] = t[i], x[i], y[i], on[i]
        index = (t[i] - t0) // bin_ns
        if 0 <= index < len(on_rate):
            if on[i]:
                on_rate[index] += 1
            else:
                off_rate[index] += 1
