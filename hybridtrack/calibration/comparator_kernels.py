"""A blinking event pixel, step by step: what a comparator of given thresholds makes of a sequence of light steps.

Photoreceptor: log light p goes to its new level q by p = q + (p0 - q) exp(-t / tau), tau that of the light reached and
inversely proportional to it. Comparator: an ON event when p - reference reaches a - n, an OFF event when reference - p
reaches b - n, n a normal sample drawn anew for every decision; then the pixel is dead for its refractory time
(Lichtsteiner, Posch and Delbruck 2008). What the reference does meanwhile is one of three models:

    STEPS     it moves by one threshold an event
    LEAPS     as STEPS within a burst, after which it is at the level that p has reached
    RESETS    it follows p until the dead time of each event ends
"""

import math

import numpy as np

from hybridtrack.compiled import kernel

STEPS, LEAPS, RESETS = range(3)
# Columns of what is counted a step of light and polarity.
EVENTS, FIRED, SQUARES = range(3)

GOLDEN = np.uint64(0x9E3779B97F4A7C15)
MIX_1, MIX_2 = np.uint64(0xBF58476D1CE4E5B9), np.uint64(0x94D049BB133111EB)
S11, S27, S30, S31 = np.uint64(11), np.uint64(27), np.uint64(30), np.uint64(31)
AHEAD = 6  # cycles after which a reference has forgotten where it began
MOST_EVENTS = 400  # a half cycle: thresholds near zero must end, too


@kernel
def mixed(z):  # type: ignore[no-untyped-def]
    """Finaliser of splitmix64 (Steele, Lea and Flood 2014)."""
    z = (z ^ (z >> S30)) * MIX_1
    z = (z ^ (z >> S27)) * MIX_2
    return z ^ (z >> S31)


@kernel
def normal_at(seed, number):  # type: ignore[no-untyped-def]
    """The `number`-th normal sample of a stream (Box and Muller 1958)."""
    z = np.uint64(seed) + GOLDEN * (np.uint64(2) * np.uint64(number) + np.uint64(1))
    u = np.float64(mixed(z) >> S11) * (1.0 / 9007199254740992.0)
    v = np.float64(mixed(z + GOLDEN) >> S11) * (1.0 / 9007199254740992.0)
    return math.sqrt(-2.0 * math.log(1.0 - u)) * math.cos(2.0 * math.pi * v)


@kernel
def half_cycle(p, reference, q, tau, length, up, threshold, noise, model, dead, seed, drawn):  # type: ignore[no-untyped-def]
    """Let light stay at log level `q` for `length`; events of one polarity only, `up` or down.

    Returns level, reference, events and samples drawn.
    """
    sign = 1.0 if up else -1.0
    t, count = 0.0, 0
    while count < MOST_EVENTS:
        rise = max(threshold - noise * normal_at(seed, drawn), 0.2 * threshold)
        drawn += 1
        goal = reference + sign * rise
        wait = 0.0
        if sign * (p - goal) < 0.0:
            if sign * (q - goal) <= 0.0:
                break
            wait = -tau * math.log((goal - q) / (p - q)) if tau > 0.0 else 0.0
            if t + wait >= length:
                break
            p = goal
        t += wait
        count += 1
        if model != RESETS:
            reference += sign * threshold
        rest = min(dead, length - t)
        p = q + (p - q) * math.exp(-rest / tau) if tau > 0.0 else q
        t += rest
        if model == RESETS:
            reference = p
        if t >= length:
            break
    left = max(length - t, 0.0)
    p = q + (p - q) * math.exp(-left / tau) if tau > 0.0 else q
    if model == LEAPS and count > 0:
        reference = p
    return p, reference, count, drawn


@kernel
def play_steps(swing, view, start, length, strength, step, on, off, noise, model, dead, tau_dark, halves, seed, out):  # type: ignore[no-untyped-def]
    """Play to each observation the steps of its view, the last few of them ahead, which are not counted.

    `swing` (M,): light of the strongest step over dark light, `view` (M,); `start`, `length` (V,): where a view's
    cycles lie in `strength` and `step` (C,), step -1 not counted; thresholds `on`, `off` (M,); times in ns: `dead`,
    `tau_dark` of the photoreceptor in dark light, `halves` (2,) bright and dark. `out` (M, steps, 2, 3) gains
    events, flips with any, and sums of squares.
    """
    for m in range(len(swing)):
        p, reference, drawn = 0.0, 0.0, 0
        own = mixed(np.uint64(seed) + GOLDEN * np.uint64(m + 1))
        first, cycles = start[view[m]], length[view[m]]
        for turn in range(-min(AHEAD, cycles), cycles):
            c = first + turn % cycles
            light = 1.0 + strength[c] * swing[m]
            p, reference, ups, drawn = half_cycle(
                p, reference, math.log(light), tau_dark / light, halves[0], True, on[m], noise, model, dead, own, drawn
            )
            p, reference, downs, drawn = half_cycle(
                p, reference, 0.0, tau_dark, halves[1], False, off[m], noise, model, dead, own, drawn
            )
            if turn >= 0 and step[c] >= 0:
                cell = out[m, step[c]]
                for polarity, count in ((0, ups), (1, downs)):
                    cell[polarity, EVENTS] += count
                    cell[polarity, FIRED] += count > 0
                    cell[polarity, SQUARES] += count * count
