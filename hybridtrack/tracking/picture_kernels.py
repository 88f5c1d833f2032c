"""Levels of the event pixels over time, from events sorted by pixel: kernels that loop over events.

A comparator that fires says that log light has moved by its threshold since the event before. Between two events of
one pixel the light is taken to have moved on a straight ramp, no longer than `ramp_ns`: a plain count of events lags
by half a threshold. Pixels are numbered row by row; the events of pixel p stand at `begin[p]` to `begin[p + 1]`.
"""

import numpy as np

from hybridtrack.compiled import kernel

Array = np.ndarray


@kernel
def sort_by_pixel(t: Array, x: Array, y: Array, on: Array, theta_on: Array, theta_off: Array) -> tuple[Array, ...]:
    """Events (N,) in order of time, thresholds (rows, columns).

    Returns `begin` (pixels + 1,) int64; `stamp_ns` (N,) int64; and `level` (N,) float64, log light after the event,
    zero before a pixel's first one.
    """
    rows, columns = theta_on.shape
    begin = np.zeros(rows * columns + 1, np.int64)
    for k in range(len(t)):
        begin[np.int64(y[k]) * columns + x[k] + 1] += 1
    for p in range(rows * columns):
        begin[p + 1] += begin[p]
    place = begin[:-1].copy()
    stamp_ns, level = np.empty(len(t), np.int64), np.empty(len(t))
    for k in range(len(t)):
        r, c = np.int64(y[k]), np.int64(x[k])
        p = r * columns + c
        at = place[p]
        before = level[at - 1] if at > begin[p] else 0.0
        level[at] = before + (theta_on[r, c] if on[k] else -theta_off[r, c])
        stamp_ns[at] = t[k]
        place[p] = at + 1
    return begin, stamp_ns, level


@kernel
def light_times(
    begin: Array, stamp_ns: Array, level: Array, base: Array, constant_ns: float, at_white_ns: float, longest_ns: float
) -> Array:
    """When light was at each event's level, int64 ns (N,): stamps less a constant and a part inverse to light.

    `base` (rows, columns) is log light, as a share of white, at level zero; `at_white_ns` the part at white; the whole
    is at most `longest_ns`. Times of a pixel never run backwards.
    """
    light_ns = np.empty(len(stamp_ns), np.int64)
    columns = base.shape[1]
    for p in range(len(begin) - 1):
        for k in range(begin[p], begin[p + 1]):
            lag = constant_ns
            if at_white_ns > 0.0:
                lag = min(constant_ns + at_white_ns * np.exp(-base[p // columns, p % columns] - level[k]), longest_ns)
            light_ns[k] = stamp_ns[k] - np.int64(np.rint(lag))
            if k > begin[p]:
                light_ns[k] = max(light_ns[k], light_ns[k - 1])
    return light_ns


@kernel
def mean_exp(level_a: float, level_b: float) -> float:
    """Mean of exp along a straight ramp between two levels."""
    step = level_b - level_a
    if abs(step) < 1e-4:
        return np.exp(0.5 * (level_a + level_b))
    return (np.exp(level_b) - np.exp(level_a)) / step


@kernel
def ramp_area(t0: int, t1: int, t_a: int, level_a: float, t_b: int, level_b: float) -> float:
    """Integral of exp(level) in ns over [t0, t1] cut to the straight line from (t_a, level_a) to (t_b, level_b)."""
    low, high = max(t0, t_a), min(t1, t_b)
    if high <= low:
        return 0.0
    slope = (level_b - level_a) / (t_b - t_a)
    return (high - low) * mean_exp(level_a + slope * (low - t_a), level_a + slope * (high - t_a))


@kernel
def exposure_levels(
    begin: Array,
    stamp_ns: Array,
    level: Array,
    light_ns: Array,
    start_ns: Array,
    exposure_ns: int,
    ramp_ns: int,
    until_ns: int,
) -> Array:
    """Inner integral of Pan et al. 2019: log of the mean of exp(level) over each pixel's own exposure.

    Start of exposure `start_ns` (rows, columns). Events stamped after `until_ns` are not used. Returns the log means
    (rows, columns).
    """
    rows, columns = start_ns.shape
    mean = np.zeros((rows, columns))
    for r in range(rows):
        for c in range(columns):
            p = r * columns + c
            t0 = start_ns[r, c]
            t1 = t0 + exposure_ns
            area, covered = 0.0, t0
            before, t_a = 0.0, t0 - ramp_ns
            for k in range(begin[p], begin[p + 1]):
                t_b, after = light_ns[k], level[k]
                if stamp_ns[k] > until_ns:
                    break
                if t_b > t0:
                    rise = max(t_a, t_b - ramp_ns)
                    flat = min(max(rise, t0), t1) - covered
                    area += flat * np.exp(before) + ramp_area(t0, t1, rise, before, t_b, after)
                    covered = min(t_b, t1)
                before, t_a = after, t_b
                if t_b >= t1:
                    break
            if covered < t1:
                area += (t1 - covered) * np.exp(before)
            mean[r, c] = np.log(area / exposure_ns)
    return mean


@kernel
def levels_at(
    begin: Array,
    stamp_ns: Array,
    level: Array,
    light_ns: Array,
    cursor: Array,
    when_ns: Array,
    ramp_ns: int,
    until_ns: int,
) -> tuple[Array, Array]:
    """Level at `when_ns` (rows, columns), and how many events of each pixel came up to then.

    `cursor` (pixels,) is where each pixel was at an earlier time, `begin[:-1]` at first; it is moved on. Events stamped
    after `until_ns` are not used, not even as the end of a ramp.
    """
    rows, columns = when_ns.shape
    out = np.zeros((rows, columns), np.float32)
    count = np.zeros((rows, columns), np.int32)
    for r in range(rows):
        for c in range(columns):
            p = r * columns + c
            when, k, stop = when_ns[r, c], cursor[p], begin[p + 1]
            while k < stop and light_ns[k] <= when and stamp_ns[k] <= until_ns:
                k += 1
            cursor[p] = k
            count[r, c] = k - begin[p]
            before = level[k - 1] if k > begin[p] else 0.0
            out[r, c] = before
            if k < stop and stamp_ns[k] <= until_ns:
                rise = light_ns[k] - ramp_ns
                if k > begin[p]:
                    rise = max(rise, light_ns[k - 1])
                if when > rise:
                    out[r, c] = before + (level[k] - before) * (when - rise) / (light_ns[k] - rise)
    return out, count


@kernel
def same_sign_intervals(begin: Array, stamp_ns: Array, level: Array) -> Array:
    """Times in ns between events of one pixel that follow each other with the same sign."""
    out = np.empty(len(stamp_ns), np.int64)
    found = 0
    for p in range(len(begin) - 1):
        for k in range(begin[p] + 1, begin[p + 1]):
            before = level[k - 2] if k - 2 >= begin[p] else 0.0
            if (level[k] > level[k - 1]) == (level[k - 1] > before):
                out[found] = stamp_ns[k] - stamp_ns[k - 1]
                found += 1
    return out[:found]
