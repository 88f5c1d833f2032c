"""Compiled loops of the event pixels and of their readout.

Event pixel (after Lichtsteiner, Posch and Delbruck 2008): the photoreceptor level p follows q = ln(light) by
dp/dt = (q - p) / tau, tau inversely proportional to light. While q runs linearly, q(t) = q0 + s t, and tau is constant,

    p(t) = q0 + s t - s tau + (p0 - q0 + s tau) exp(-t / tau)                                            (1)

so that a step needs no integration, and with s = 0 a threshold crossing has a closed form. The comparator compares
p - reference, plus a noise sample held for the decision, with the pixel's thresholds.

Random numbers: one splitmix64 stream a pixel (Steele, Lea and Flood 2014), so that results do not depend on threads.
"""

import math

import numba
import numpy as np

from hybridtrack.compiled import kernel

# Columns of the float state of a pixel.
(TIME, LIGHT, LEVEL, REFERENCE, READY, ON_NOISE, OFF_NOISE, NEXT_BACKGROUND, DIRECTION, EXTREME, STATE_SIZE) = range(11)
# Entries of the constants that all pixels share.
(
    TAU_REFERENCE,
    LIGHT_REFERENCE,
    TAU_MIN,
    TAU_MAX,
    REFRACTORY,
    NOISE_WIDTH,
    DELAY,
    DARK_LIGHT,
    RESETS,
    CONSTANTS_SIZE,
) = range(10)

LIGHT_FLOOR = 1e-4  # keeps the logarithm finite where a caller passes no light at all
LOG_STEP = 0.1  # light that changes by more than this (natural log) inside a step is followed in sub-steps
QUICK = 20.0  # but in no more of them than this number a time constant: a pixel is blind to the rest
SUB_STEPS_MAX = 32
SETTLED = 1e-9
LEAST_THRESHOLD = 0.2  # part of the threshold that noise always leaves
REVERSAL = 0.1  # a retreat by this part of a threshold ends a decision

GOLDEN = np.uint64(0x9E3779B97F4A7C15)
MIX_1 = np.uint64(0xBF58476D1CE4E5B9)
MIX_2 = np.uint64(0x94D049BB133111EB)
S11, S27, S30, S31 = np.uint64(11), np.uint64(27), np.uint64(30), np.uint64(31)
ONE = np.uint64(1)


@kernel
def mix(z):  # type: ignore[no-untyped-def]
    """Finaliser of splitmix64."""
    z = (z ^ (z >> S30)) * MIX_1
    z = (z ^ (z >> S27)) * MIX_2
    return z ^ (z >> S31)


@kernel
def uniform(random, n):  # type: ignore[no-untyped-def]
    """Next number in [0, 1) of stream `n`."""
    random[n] = random[n] + GOLDEN
    return np.float64(mix(random[n]) >> S11) * (1.0 / 9007199254740992.0)


@kernel
def draw_noise(n, width, state, random, up, down):  # type: ignore[no-untyped-def]
    """Draw the comparator's noise anew for the next ON decision (`up`) and the next OFF decision (`down`).

    Box and Muller 1958.
    """
    radius = width * math.sqrt(-2.0 * math.log(1.0 - uniform(random, n)))
    angle = 2.0 * math.pi * uniform(random, n)
    if up:
        state[n, ON_NOISE] = radius * math.cos(angle)
    if down:
        state[n, OFF_NOISE] = radius * math.sin(angle)


@kernel
def exponential(random, n, rate):  # type: ignore[no-untyped-def]
    """Next waiting time of a Poisson process of `rate`; infinite where the rate is zero."""
    if rate <= 0.0:
        return np.inf
    return -math.log(1.0 - uniform(random, n)) / rate


@kernel
def respond(level, q, slope, tau, dt):  # type: ignore[no-untyped-def]
    """Photoreceptor level after `dt`: equation (1)."""
    lag = slope * tau
    return q + slope * dt - lag + (level - q + lag) * math.exp(-dt / tau)


@kernel
def crossing(level, q, slope, tau, leak, target, dt):  # type: ignore[no-untyped-def]
    """Time in [0, dt] at which the level, plus what has leaked off the reference, passes `target`, as it does by dt."""
    if slope == 0.0 and leak == 0.0:
        return min(dt, -tau * math.log((target - q) / (level - q)))
    low, high = 0.0, dt
    f_low, f_high = level - target, respond(level, q, slope, tau, dt) + leak * dt - target
    x = dt
    for _ in range(20):  # regula falsi with the Illinois halving
        x = high - f_high * (high - low) / (f_high - f_low)
        f = respond(level, q, slope, tau, x) + leak * x - target
        if abs(f) < 1e-10 or abs(high - low) < 1e-3:
            break
        if (f > 0.0) == (f_high > 0.0):
            f_low *= 0.5
        else:
            low, f_low = high, f_high
        high, f_high = x, f
    return min(max(x, 0.0), dt)


@kernel
def emit(keys, count, t, base, n, on, shift):  # type: ignore[no-untyped-def]
    """Store one event as a sortable key (time, pixel, polarity); count it even where the buffer is full."""
    if count < keys.shape[0]:
        stamp = np.uint64(np.int64(math.floor(t - base)))
        keys[count] = (stamp << shift) | (np.uint64(n) << ONE) | np.uint64(on)
    return count + 1


@kernel
def follow(n, t0, t1, q, slope, tau, state, random, pixel, constants, keys, count, base, shift):  # type: ignore[no-untyped-def]
    """Carry pixel `n` from t0 to t1 while log light runs linearly from `q`; returns the event count.

    `pixel` holds ON threshold, OFF threshold, background rate and leak (log units / ns) of each pixel.
    """
    on, off, rate, leak = pixel[n, 0], pixel[n, 1], pixel[n, 2], pixel[n, 3]
    level, reference, ready = state[n, LEVEL], state[n, REFERENCE], state[n, READY]
    background = state[n, NEXT_BACKGROUND]
    resets = constants[RESETS] > 0.0
    ta = t0
    while True:
        end = min(t1, background)
        if ready > ta:
            stop = min(ready, end)
            level = respond(level, q, slope, tau, stop - ta)
            q += slope * (stop - ta)
            reference -= leak * (stop - ta)
            ta = stop
            if ready <= end:
                ready = -np.inf
                if resets:
                    reference = level
        if ready <= ta:
            reference_end = reference - leak * (end - ta)
            level_end = respond(level, q, slope, tau, end - ta)
            rise = max(on - state[n, ON_NOISE], LEAST_THRESHOLD * on)
            fall = max(off - state[n, OFF_NOISE], LEAST_THRESHOLD * off)
            fired, dt = 0, 0.0
            if level - reference >= rise:
                fired = 1
            elif reference - level >= fall:
                fired = -1
            elif level_end - reference_end >= rise:
                fired = 1
                dt = crossing(level, q, slope, tau, leak, reference + rise, end - ta)
                level = reference - leak * dt + rise
            elif reference_end - level_end >= fall:
                fired = -1
                dt = crossing(level, q, slope, tau, leak, reference - fall, end - ta)
                level = reference - leak * dt - fall
            if fired != 0:
                q += slope * dt
                reference -= leak * dt
                ta += dt
                count = emit(keys, count, ta + constants[DELAY], base, n, fired > 0, shift)
                if resets:
                    reference = level
                else:
                    reference += on if fired > 0 else -off
                ready = ta + constants[REFRACTORY] if constants[REFRACTORY] > 0.0 else -np.inf
                draw_noise(n, constants[NOISE_WIDTH], state, random, True, True)
                continue
            level, reference = level_end, reference_end
            q += slope * (end - ta)
            ta = end
        if background > t1:
            break
        if ready <= ta:
            count = emit(keys, count, ta + constants[DELAY], base, n, uniform(random, n) < 0.5, shift)
            reference = level
            ready = ta + constants[REFRACTORY] if constants[REFRACTORY] > 0.0 else -np.inf
            draw_noise(n, constants[NOISE_WIDTH], state, random, True, True)
        background = ta + exponential(random, n, rate)
        if ta >= t1:
            break
    state[n, LEVEL], state[n, REFERENCE], state[n, READY] = level, reference, ready
    state[n, NEXT_BACKGROUND] = background
    return count


@kernel
def turn(n, q, state, random, pixel, noise_width):  # type: ignore[no-untyped-def]
    """Where log light has turned round by a part of the threshold, draw noise for the decisions now ahead."""
    extreme, direction = state[n, EXTREME], state[n, DIRECTION]
    if direction >= 0.0:
        if q > extreme:
            extreme = q
        elif q < extreme - REVERSAL * pixel[n, 1]:
            direction, extreme = -1.0, q
            draw_noise(n, noise_width, state, random, False, True)
    elif q < extreme:
        extreme = q
    elif q > extreme + REVERSAL * pixel[n, 0]:
        direction, extreme = 1.0, q
        draw_noise(n, noise_width, state, random, True, False)
    state[n, EXTREME], state[n, DIRECTION] = extreme, direction


@kernel
def time_constant(light, constants):  # type: ignore[no-untyped-def]
    """Time constant of the photoreceptor under `light`."""
    tau = constants[TAU_REFERENCE] * constants[LIGHT_REFERENCE] / light
    return min(max(tau, constants[TAU_MIN]), constants[TAU_MAX])


@kernel
def step(n, t1, light, state, random, pixel, constants, keys, count, base, shift):  # type: ignore[no-untyped-def]
    """Carry pixel `n` to its next sample, light running linearly; returns the event count."""
    t0, before = state[n, TIME], state[n, LIGHT]
    state[n, LIGHT] = light
    if t1 <= t0:
        return count
    q, parts = math.log(before), 1
    q_end = q
    if light != before:
        q_end = math.log(light)
        turn(n, q_end, state, random, pixel, constants[NOISE_WIDTH])
        quick = 1 + int(QUICK * (t1 - t0) / time_constant(0.5 * (light + before), constants))
        parts = min(1 + int(abs(q_end - q) / LOG_STEP), quick, SUB_STEPS_MAX)
    for part in range(1, parts + 1):
        ta = t0 + (t1 - t0) * (part - 1) / parts
        tb = t1 if part == parts else t0 + (t1 - t0) * part / parts
        now = before + (light - before) * part / parts
        q_next = q_end if part == parts else math.log(now)
        tau = time_constant(now - 0.5 * (light - before) / parts, constants)
        count = follow(
            n, ta, tb, q, (q_next - q) / (tb - ta), tau, state, random, pixel, constants, keys, count, base, shift
        )
        q = q_next
    state[n, TIME] = t1
    return count


@kernel
def settle(n, t, light, state, random, pixel, constants):  # type: ignore[no-untyped-def]
    """Start pixel `n` at rest under `light`."""
    q = math.log(light)
    state[n, TIME], state[n, LIGHT] = t, light
    state[n, LEVEL], state[n, REFERENCE], state[n, EXTREME] = q, q, q
    state[n, READY], state[n, DIRECTION] = -np.inf, 0.0
    draw_noise(n, constants[NOISE_WIDTH], state, random, True, True)
    state[n, NEXT_BACKGROUND] = t + exponential(random, n, pixel[n, 2])


@kernel
def coast(n, k, t, light, state, pixel, constants):  # type: ignore[no-untyped-def]
    """Carry pixel `n` on from sample `k` for as long as it neither fires nor draws noise nor needs sub-steps.

    Returns the first sample left to `step`. Nearly all samples go this way: it does what `step` would, bit by bit, with
    the pixel's state at hand and one logarithm a sample.
    """
    before, t0, level, reference = state[n, LIGHT], state[n, TIME], state[n, LEVEL], state[n, REFERENCE]
    extreme, direction = state[n, EXTREME], state[n, DIRECTION]
    if state[n, READY] != -np.inf or pixel[n, 3] != 0.0:
        return k
    rise = max(pixel[n, 0] - state[n, ON_NOISE], LEAST_THRESHOLD * pixel[n, 0])
    fall = max(pixel[n, 1] - state[n, OFF_NOISE], LEAST_THRESHOLD * pixel[n, 1])
    q = math.log(before)
    while k < t.shape[0] and t[k] > t0 and state[n, NEXT_BACKGROUND] > t[k]:
        now = max(light[k, n] + constants[DARK_LIGHT], LIGHT_FLOOR)
        dt = t[k] - t0
        if now == before:
            if abs(level - q) < SETTLED:
                t0, k = t[k], k + 1
                continue
            q_end = q
        else:
            q_end = math.log(now)
            sub_steps = 1 + int(QUICK * dt / time_constant(0.5 * (now + before), constants))
            if abs(q_end - q) >= LOG_STEP and sub_steps > 1:
                break
            if direction >= 0.0:
                if q_end < extreme - REVERSAL * pixel[n, 1]:
                    break
                extreme = max(extreme, q_end)
            else:
                if q_end > extreme + REVERSAL * pixel[n, 0]:
                    break
                extreme = min(extreme, q_end)
        tau = time_constant(now - 0.5 * (now - before), constants)
        level_end = respond(level, q, (q_end - q) / dt, tau, dt)
        if max(level, level_end) - reference >= rise or reference - min(level, level_end) >= fall:
            break
        level, q, before, t0, k = level_end, q_end, now, t[k], k + 1
    state[n, LIGHT], state[n, TIME], state[n, LEVEL], state[n, EXTREME] = before, t0, level, extreme
    return k


@kernel
def expose_pixel(n, t, light, start, state, random, pixel, constants, keys, count, base, shift):  # type: ignore[no-untyped-def]
    """Run pixel `n` through samples `t` (T,) of `light` (T, N); returns the event count."""
    k = 0
    if start:
        settle(n, t[0], max(light[0, n] + constants[DARK_LIGHT], LIGHT_FLOOR), state, random, pixel, constants)
        k = 1
    while k < t.shape[0]:
        k = coast(n, k, t, light, state, pixel, constants)
        if k < t.shape[0]:
            now = max(light[k, n] + constants[DARK_LIGHT], LIGHT_FLOOR)
            count = step(n, t[k], now, state, random, pixel, constants, keys, count, base, shift)
            k += 1
    return count


@kernel
def copy_state(state, random, first, state_to, random_to, first_to, size):  # type: ignore[no-untyped-def]
    """Copy the state of `size` pixels. (Assigned slices would double the time it takes to compile.)"""
    for n in range(size):
        for column in range(STATE_SIZE):
            state_to[first_to + n, column] = state[first + n, column]
        random_to[first_to + n] = random[first + n]


@kernel
def expose_chunk(first, last, t, light, start, state, random, pixel, alive, constants, keys, base, shift):  # type: ignore[no-untyped-def]
    """Run pixels first..last - 1 through the samples; returns the event count.

    Where the events do not fit into `keys`, the pixels are put back where they were.
    """
    state_before, random_before = np.empty((last - first, STATE_SIZE)), np.empty(last - first, np.uint64)
    copy_state(state, random, first, state_before, random_before, 0, last - first)
    count = 0
    for n in range(first, last):
        if alive[n]:
            count = expose_pixel(n, t, light, start, state, random, pixel, constants, keys, count, base, shift)
    if count > keys.shape[0]:
        copy_state(state_before, random_before, 0, state, random, first, last - first)
    return count


@kernel(parallel=True)
def expose_pixels(t, light, start, state, random, pixel, alive, constants, size, todo, keys, counts, base, shift):  # type: ignore[no-untyped-def]
    """Run the chunks `todo` (C,) of `size` pixels each through samples `t` (T,) of `light` (T, N).

    Chunk c writes its keys to `keys[c]` and their number to `counts[c]`; a chunk that does not fit has not been run.
    `start`: settle at the first sample.
    """
    for chunk in numba.prange(keys.shape[0]):
        if todo[chunk]:
            last = min((chunk + 1) * size, state.shape[0])
            counts[chunk] = expose_chunk(
                chunk * size, last, t, light, start, state, random, pixel, alive, constants, keys[chunk], base, shift
            )


@kernel
def unpack(keys, base, shift, width, t, x, y, on):  # type: ignore[no-untyped-def]
    """Take sorted keys apart into stamps, columns, rows and polarities."""
    mask = (ONE << (shift - ONE)) - ONE
    for i in range(keys.shape[0]):
        key = keys[i]
        n = np.int64((key >> ONE) & mask)
        t[i] = base + np.int64(key >> shift)
        y[i] = n // width
        x[i] = n - (n // width) * width
        on[i] = key & ONE


WAITS, READ, LOST = 0, 1, 2


@kernel
def lowest_row(flags, start):  # type: ignore[no-untyped-def]
    """First row at or after `start` whose flag is set, round the end; -1 where none is."""
    rows = flags.shape[0]
    for row in range(start, rows):
        if flags[row] > 0:
            return row
    for row in range(start):
        if flags[row] > 0:
            return row
    return -1


@kernel
def read_rows(t, x, y, until, clock, pointer, shape, event_ns, row_ns, queue, wait_max, verdict, out_t, out_index):  # type: ignore[no-untyped-def]
    """Scan rows round and round over events sorted by time; returns events read, clock and row pointer.

    `verdict` (n,) tells of every event whether it still waits, was read or was lost. `queue`: a pixel whose event
    waits holds its next ones back; otherwise they are lost.
    """
    rows, columns = shape
    waiting = np.zeros(rows, np.int64)
    in_row = np.empty((rows, columns), np.int64)
    holder = np.full(rows * columns, -1, np.int64)  # last event of the pixel that waits
    follower = np.full(t.shape[0], -1, np.int64)  # next event of the same pixel
    pending, read, i = 0, 0, 0
    while True:
        while i < t.shape[0] and t[i] <= clock and t[i] <= until:
            n = y[i] * columns + x[i]
            if holder[n] < 0:
                in_row[y[i], waiting[y[i]]] = i
                waiting[y[i]] += 1
                pending += 1
                holder[n] = i
            elif queue:
                follower[holder[n]] = i
                holder[n] = i
            else:
                verdict[i] = LOST
            i += 1
        if pending == 0:
            if i >= t.shape[0] or t[i] > until:
                break
            clock = max(clock, np.float64(t[i]))
            continue
        if clock > until:
            break
        row = lowest_row(waiting, pointer)
        clock += row_ns
        sent, kept = 0, 0
        for k in range(waiting[row]):
            event = in_row[row, k]
            n = row * columns + x[event]
            if clock - t[event] > wait_max:
                verdict[event] = LOST
            else:
                verdict[event] = READ
                out_t[read], out_index[read] = clock, event
                read += 1
                sent += 1
            if follower[event] >= 0:
                in_row[row, kept] = follower[event]
                kept += 1
            else:
                holder[n] = -1
        pending -= waiting[row] - kept
        waiting[row] = kept
        clock += sent * event_ns
        pointer = row + 1 if row + 1 < rows else 0
    return read, clock, pointer
