"""Compiled loops of the event pixels and of their readout.

Event pixel (after Lichtsteiner, Posch and Delbruck 2008): the photoreceptor level p follows q = ln(light) by
dp/dt = (q - p) / tau, tau inversely proportional to light. While q runs linearly, q(t) = q0 + s t, and tau is constant,

    p(t) = q0 + s t - s tau + (p0 - q0 + s tau) exp(-t / tau)                                            (1)

so that a step needs no integration, and with s = 0 a threshold crossing has a closed form. The comparator compares
p - reference, plus one noise sample held for the decision, with the pixel's thresholds.

Random numbers: one splitmix64 stream a pixel (Steele, Lea and Flood 2014), so that results do not depend on threads.
"""

import math

import numba
import numpy as np

from hybridtrack.compiled import kernel

# Columns of the float state of a pixel.
TIME, LIGHT, LEVEL, REFERENCE, READY, NOISE, NEXT_BACKGROUND, DIRECTION, EXTREME, STATE_SIZE = range(10)
# Entries of the constants that all pixels share.
(TAU_REFERENCE, LIGHT_REFERENCE, TAU_MIN, TAU_MAX, REFRACTORY, NOISE_WIDTH, DELAY, DARK_LIGHT, RESETS,
 CONSTANTS_SIZE) = range(10)

LIGHT_FLOOR = 1e-4  # keeps the logarithm finite where a caller passes no light at all
LOG_STEP = 0.2  # light that changes by more than this (natural log) inside a step is followed in sub-steps
SUB_STEPS_MAX = 32
SETTLED = 1e-9
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
def normal(random, n):  # type: ignore[no-untyped-def]
    """Next standard normal number of stream `n` (Box and Muller 1958)."""
    radius = math.sqrt(-2.0 * math.log(1.0 - uniform(random, n)))
    return radius * math.cos(2.0 * math.pi * uniform(random, n))


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
def crossing(level, q, slope, tau, target, dt):  # type: ignore[no-untyped-def]
    """Time in [0, dt] at which the level passes `target`, known to lie between its ends."""
    if slope == 0.0:
        return min(dt, -tau * math.log((target - q) / (level - q)))
    low, high = 0.0, dt
    f_low, f_high = level - target, respond(level, q, slope, tau, dt) - target
    x = dt
    for _ in range(20):  # regula falsi with the Illinois halving
        x = high - f_high * (high - low) / (f_high - f_low)
        f = respond(level, q, slope, tau, x) - target
        if abs(f) < 1e-10 or abs(high - low) < 1e-3:
            break
        if (f > 0.0) == (f_high > 0.0):
            high, f_high = x, f
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
    noise, background = state[n, NOISE], state[n, NEXT_BACKGROUND]
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
            rise = max(on - noise, 0.2 * on)
            fall = max(off + noise, 0.2 * off)
            fired, target = 0, 0.0
            if level_end - reference_end >= rise or level - reference >= rise:
                fired, target = 1, reference_end + rise
            elif reference_end - level_end >= fall or reference - level >= fall:
                fired, target = -1, reference_end - fall
            if fired != 0:
                if (level >= target) == (fired > 0):
                    tc = ta
                else:
                    tc = ta + crossing(level, q, slope, tau, target, end - ta)
                level = respond(level, q, slope, tau, tc - ta)
                q += slope * (tc - ta)
                reference -= leak * (tc - ta)
                ta = tc
                count = emit(keys, count, tc + constants[DELAY], base, n, fired > 0, shift)
                if resets:
                    reference = level
                else:
                    reference += on if fired > 0 else -off
                ready = tc + constants[REFRACTORY] if constants[REFRACTORY] > 0.0 else -np.inf
                noise = constants[NOISE_WIDTH] * normal(random, n)
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
            noise = constants[NOISE_WIDTH] * normal(random, n)
        background = ta + exponential(random, n, rate)
        if ta >= t1:
            break
    state[n, LEVEL], state[n, REFERENCE], state[n, READY] = level, reference, ready
    state[n, NOISE], state[n, NEXT_BACKGROUND] = noise, background
    return count


@kernel
def turn(n, q, state, random, pixel, noise_width):  # type: ignore[no-untyped-def]
    """Draw the comparator's noise anew where log light has turned round by a part of the threshold."""
    extreme, direction = state[n, EXTREME], state[n, DIRECTION]
    if direction >= 0.0:
        if q > extreme:
            extreme = q
        elif q < extreme - REVERSAL * pixel[n, 1]:
            direction, extreme = -1.0, q
            state[n, NOISE] = noise_width * normal(random, n)
    elif q < extreme:
        extreme = q
    elif q > extreme + REVERSAL * pixel[n, 0]:
        direction, extreme = 1.0, q
        state[n, NOISE] = noise_width * normal(random, n)
    state[n, EXTREME], state[n, DIRECTION] = extreme, direction


@kernel
def step(n, t1, light, state, random, pixel, constants, keys, count, base, shift):  # type: ignore[no-untyped-def]
    """Carry pixel `n` to its next sample, light running linearly; returns the event count."""
    t0, before = state[n, TIME], state[n, LIGHT]
    if t1 <= t0:
        state[n, LIGHT] = light
        return count
    q = math.log(before)
    if light == before:
        tau = min(max(constants[TAU_REFERENCE] * constants[LIGHT_REFERENCE] / light, constants[TAU_MIN]),
                  constants[TAU_MAX])
        count = follow(n, t0, t1, q, 0.0, tau, state, random, pixel, constants, keys, count, base, shift)
    else:
        q_end = math.log(light)
        turn(n, q_end, state, random, pixel, constants[NOISE_WIDTH])
        parts = min(1 + int(abs(q_end - q) / LOG_STEP), SUB_STEPS_MAX)
        for part in range(1, parts + 1):
            ta = t0 + (t1 - t0) * (part - 1) / parts
            tb = t1 if part == parts else t0 + (t1 - t0) * part / parts
            now = before + (light - before) * part / parts
            q_next = q_end if part == parts else math.log(now)
            middle = now - 0.5 * (light - before) / parts
            tau = min(max(constants[TAU_REFERENCE] * constants[LIGHT_REFERENCE] / middle, constants[TAU_MIN]),
                      constants[TAU_MAX])
            count = follow(n, ta, tb, q, (q_next - q) / (tb - ta), tau, state, random, pixel, constants, keys, count,
                           base, shift)
            q = q_next
    state[n, TIME], state[n, LIGHT] = t1, light
    return count


@kernel
def settle(n, t, light, state, random, pixel, constants):  # type: ignore[no-untyped-def]
    """Start pixel `n` at rest under `light`."""
    q = math.log(light)
    state[n, TIME], state[n, LIGHT] = t, light
    state[n, LEVEL], state[n, REFERENCE], state[n, EXTREME] = q, q, q
    state[n, READY], state[n, DIRECTION] = -np.inf, 0.0
    state[n, NOISE] = constants[NOISE_WIDTH] * normal(random, n)
    state[n, NEXT_BACKGROUND] = t + exponential(random, n, pixel[n, 2])


@kernel
def expose_pixel(n, t, light, start, state, random, pixel, constants, keys, count, base, shift):  # type: ignore[no-untyped-def]
    """Run pixel `n` through samples `t` (T,) of `light` (T, N); returns the event count."""
    for k in range(t.shape[0]):
        now = max(light[k, n] + constants[DARK_LIGHT], LIGHT_FLOOR)
        if start and k == 0:
            settle(n, t[k], now, state, random, pixel, constants)
        elif (now == state[n, LIGHT] and pixel[n, 3] == 0.0 and state[n, NEXT_BACKGROUND] > t[k]
                and state[n, READY] == -np.inf and abs(state[n, LEVEL] - math.log(now)) < SETTLED):
            state[n, TIME] = t[k]  # at rest: nothing to do
        else:
            count = step(n, t[k], now, state, random, pixel, constants, keys, count, base, shift)
    return count


@kernel(parallel=True)
def expose_pixels(t, light, start, state, random, pixel, alive, constants, size, todo, keys, counts, base, shift):  # type: ignore[no-untyped-def]
    """Run the chunks `todo` (C,) of `size` pixels each through the samples; chunk c writes its keys to `keys[c]`.

    A chunk whose buffer is too small is put back where it was; its entry of `counts` says what it needs.
    `start`: settle at the first sample.
    """
    for chunk in numba.prange(keys.shape[0]):
        if todo[chunk]:
            first, last = chunk * size, min((chunk + 1) * size, state.shape[0])
            state_before, random_before = state[first:last].copy(), random[first:last].copy()
            count = 0
            for n in range(first, last):
                if alive[n]:
                    count = expose_pixel(n, t, light, start, state, random, pixel, constants, keys[chunk], count, base,
                                         shift)
            counts[chunk] = count
            if count > keys.shape[1]:
                state[first:last], random[first:last] = state_before, random_before


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
