"""The loop over events of the field check: log light of every event pixel, averaged over the exposures of frames.

At the instant of an event a stepping comparator's log light is exactly one threshold off that of its event before. In
between it is taken to run straight from one to the next, which leaves no lag of half a threshold as a sum of events
would. Where two events lie too far apart the light between them is not known, and neither is the mean of an exposure
that reaches into the gap.
"""

import numpy as np

from hybridtrack.compiled import kernel

Array = np.ndarray


@kernel
def average_levels(
    t: Array, x: Array, y: Array, on: Array, origin_ns: int, start_ns: Array, length_ns: Array, delay_ns: Array,
    on_step: Array, off_step: Array, longest_ns: float, last_ns: Array, level: Array, frame: Array, integral: Array,
    covered: Array,
) -> None:  # fmt: skip
    """Add events to the mean levels of F frames: `integral` and `covered` (F, rows, columns) of their exposures.

    `start_ns`, `length_ns` (F,) after `origin_ns`: the first row's exposure, rising; `delay_ns` (rows, columns): how
    much later that of each event pixel's row begins; steps of log light an event (rows, columns). `last_ns` (rows,
    columns) float, filled with -inf, `level` (rows, columns) and `frame` (rows, columns) int64, zeros, carry each
    pixel's last event, its level, and the first frame not over by then.
    """
    frames = len(start_ns)
    for k in range(len(t)):
        r, c = y[k], x[k]
        now, before, low = float(t[k] - origin_ns) - delay_ns[r, c], last_ns[r, c], level[r, c]
        high = low + (on_step[r, c] if on[k] == 1 else -off_step[r, c])
        f = frame[r, c]
        while f < frames and start_ns[f] + length_ns[f] <= before:
            f += 1
        frame[r, c] = f
        if now - before <= longest_ns:
            slope = (high - low) / max(now - before, 1.0)
            while f < frames and start_ns[f] < now:
                first, last = max(before, start_ns[f]), min(now, start_ns[f] + length_ns[f])
                if last > first:
                    middle = 0.5 * (first + last) - before
                    integral[f, r, c] += (low + slope * middle) * (last - first)
                    covered[f, r, c] += last - first
                f += 1
        last_ns[r, c], level[r, c] = now, high
