"""Log light at the event pixels, from events: kernels that loop over events.

A comparator that fires says that log light has moved by its threshold since the event before. Between two events of
one pixel the light is taken to have moved on a straight ramp, no longer than `ramp_ns`: a plain count of events lags
by half a threshold, the hysteresis of the comparator, and the ramp does not.
"""

import numpy as np

from hybridtrack.compiled import kernel
from hybridtrack.tracking.feature_table import NEVER

Array = np.ndarray


@kernel
def ramp_level(t: int, t_a: int, level_a: float, t_b: int, level_b: float, ramp_ns: int) -> float:
    """Log light at `t` between an event at `t_a` and the next at `t_b`."""
    start = max(t_a, t_b - ramp_ns)
    if t <= start:
        return level_a
    if t >= t_b:
        return level_b
    return level_a + (level_b - level_a) * (t - start) / (t_b - start)


@kernel
def mean_exp(level_a: float, level_b: float) -> float:
    """Mean of exp along a straight ramp between two levels."""
    step = level_b - level_a
    if abs(step) < 1e-4:
        return np.exp(0.5 * (level_a + level_b))
    return (np.exp(level_b) - np.exp(level_a)) / step


@kernel
def ramp_integral(t0: int, t1: int, t_a: int, level_a: float, t_b: int, level_b: float, ramp_ns: int) -> float:
    """Integral of exp(level) in ns over [t0, t1] cut to the segment between two events of a pixel."""
    low, high = max(t0, t_a), min(t1, t_b)
    if high <= low:
        return 0.0
    start = min(max(max(t_a, t_b - ramp_ns), low), high)
    flat = (start - low) * np.exp(level_a)
    from_level = ramp_level(start, t_a, level_a, t_b, level_b, ramp_ns)
    to_level = ramp_level(high, t_a, level_a, t_b, level_b, ramp_ns)
    return flat + (high - start) * mean_exp(from_level, to_level)


@kernel
def integrate_exposures(
    t: Array,
    x: Array,
    y: Array,
    on: Array,
    theta_on: Array,
    theta_off: Array,
    lag_ns: int,
    start_ns: Array,
    exposure_ns: int,
    instant_ns: Array,
    ramp_ns: int,
) -> tuple[Array, Array, Array]:
    """The double integral of events over each pixel's own exposure (Pan et al. 2019).

    Events (N,) in order, stamped `lag_ns` after their light; thresholds, exposure starts and instants on the grid
    (rows, columns). Returns on the grid: `correction` = log(mean over the exposure of exp(level)) - level at the
    instant, to be taken from the log of a blurred picture to have the sharp one at the instant; `count` of events
    inside the exposure; `last_ns` light time of the last event at or before the instant (NEVER where none).
    """
    rows, columns = start_ns.shape
    level = np.zeros((rows, columns))
    previous = np.full((rows, columns), NEVER, np.int64)
    integral = np.zeros((rows, columns))
    at_instant = np.full((rows, columns), np.nan)
    last = np.full((rows, columns), NEVER, np.int64)
    count = np.zeros((rows, columns), np.int32)
    for k in range(len(t)):
        r, c = y[k], x[k]
        t_b = t[k] - lag_ns
        t_a, level_a = previous[r, c], level[r, c]
        level_b = level_a + (theta_on[r, c] if on[k] else -theta_off[r, c])
        t0, when = start_ns[r, c], instant_ns[r, c]
        t1 = t0 + exposure_ns
        if t_b > t0 and t_a < t1:
            integral[r, c] += ramp_integral(t0, t1, t_a, level_a, t_b, level_b, ramp_ns)
            if t_b <= t1:
                count[r, c] += 1
        if t_a <= when and t_b > when:
            at_instant[r, c] = ramp_level(when, t_a, level_a, t_b, level_b, ramp_ns)
            last[r, c] = t_a
        previous[r, c], level[r, c] = t_b, level_b
    correction = np.zeros((rows, columns), np.float32)
    for r in range(rows):
        for c in range(columns):
            t0 = start_ns[r, c]
            t1 = t0 + exposure_ns
            held = max(previous[r, c], t0)
            if held < t1:
                integral[r, c] += (t1 - held) * np.exp(level[r, c])
            if np.isnan(at_instant[r, c]):
                at_instant[r, c] = level[r, c]
                last[r, c] = previous[r, c]
            correction[r, c] = np.log(integral[r, c] / exposure_ns) - at_instant[r, c]
    return correction, count, last
