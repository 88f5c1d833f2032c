"""Thresholds of single pixels whose reference moves by one threshold an event, from every flip's count.

With counts known, so is the reference: after A ON and B OFF events it is r0 + a A - b B. A flip up to log step S with N
events says that S - r - N a was above the comparator's noise, and S - r - (N + 1) a below it; a flip down with M events
the same of r - M b and r - (M + 1) b. Each is a normal probability of a linear function of a, b and r0: the
likelihood has one hill, which Newton's method climbs. r0 is anew for every few flips, for a count that is off by one
shifts all after it.
"""

import math

import numba
import numpy as np

from hybridtrack.compiled import kernel

Array = np.ndarray

SEGMENT = 8  # cycles that share r0
STRAY = 0.02  # share of flips that follow no model


@kernel
def add_term(side, value, ca, cb, cr, sigma, sums):  # type: ignore[no-untyped-def]
    """Add one probability's gradient and curvature to `sums`: g_a, g_b, g_r, h_aa, h_ab, h_bb, h_ra, h_rb, h_rr."""
    z = side * value / sigma
    below = 0.5 * math.erfc(-z / math.sqrt(2.0))
    density = math.exp(-0.5 * z * z) / math.sqrt(2.0 * math.pi)
    slope = (1.0 - 2.0 * STRAY) * density / (STRAY + (1.0 - 2.0 * STRAY) * below)
    bend = max(slope * (slope + z), 0.0)
    if slope < 1e-9:
        return
    g, h = side * slope / sigma, bend / (sigma * sigma)
    sums[0] += g * ca
    sums[1] += g * cb
    sums[2] += g * cr
    sums[3] += h * ca * ca
    sums[4] += h * ca * cb
    sums[5] += h * cb * cb
    sums[6] += h * cr * ca
    sums[7] += h * cr * cb
    sums[8] += h * cr * cr


@kernel
def add_segment(m, first, last, start, swing, strength, ups, downs, a, b, r0, sigma, noise_of_step, sums):  # type: ignore[no-untyped-def]
    """Add the terms of cycles [first, last) of one observation, whose reference was `r0` before them."""
    total_on, total_off = 0.0, 0.0
    for c in range(first, last):
        step = math.log(1.0 + strength[start + c] * swing)
        own = math.sqrt(sigma * sigma + (noise_of_step * step) ** 2)
        up, down = float(ups[m, c]), float(downs[m, c])
        left = step - r0 - a * (total_on + up) + b * total_off
        if up > 0.0:
            add_term(1.0, left, -(total_on + up), total_off, -1.0, own, sums)
        add_term(-1.0, left - a, -(total_on + up + 1.0), total_off, -1.0, own, sums)
        total_on += up
        left = r0 + a * total_on - b * (total_off + down)
        if down > 0.0:
            add_term(1.0, left, total_on, -(total_off + down), 1.0, sigma, sums)
        add_term(-1.0, left - b, total_on, -(total_off + down + 1.0), 1.0, sigma, sums)
        total_off += down


@kernel
def first_reference(m, first, last, start, swing, strength, ups, downs, a, b):  # type: ignore[no-untyped-def]
    """The reference before a segment that leaves every burst half a threshold short, on average."""
    total, count, total_on, total_off = 0.0, 0, 0.0, 0.0
    for c in range(first, last):
        step = math.log(1.0 + strength[start + c] * swing)
        total_on += ups[m, c]
        if ups[m, c] > 0:
            total += step - 0.5 * a - a * total_on + b * total_off
            count += 1
        total_off += downs[m, c]
        if downs[m, c] > 0:
            total += 0.5 * b - a * total_on + b * total_off
            count += 1
    return total / count if count > 0 else 0.5 * b


@kernel(parallel=True)
def climb(
    begin: Array, swing: Array, view: Array, start: Array, length: Array, strength: Array, ups: Array, downs: Array,
    median: Array, prior: Array, sigmas: Array, noise_of_step: float, found: Array, covariance: Array,
) -> None:  # fmt: skip
    """Thresholds `found` (P, 2) of pixels, whose observations are begin[p] to begin[p + 1], and `covariance` (P, 2, 2).

    `ups`, `downs` (M, C) uint8: events of each flip of a view's cycles; `median` (2,), `prior` (2,): the thresholds'
    median and standard deviation over pixels; `sigmas`: noise that narrows round by round to the comparator's own;
    `noise_of_step`: relative deviation of a step of light. Other arguments as in `play_steps`.
    """
    most = (ups.shape[1] + SEGMENT - 1) // SEGMENT
    for p in numba.prange(len(begin) - 1):
        count = begin[p + 1] - begin[p]
        reference, kept, sums = np.zeros((count, most)), np.zeros((count, most, 4)), np.zeros(9)
        a, b = median[0], median[1]
        for i in range(count):
            m = begin[p] + i
            cycles = length[view[m]]
            for s in range((cycles + SEGMENT - 1) // SEGMENT):
                last = min((s + 1) * SEGMENT, cycles)
                reference[i, s] = first_reference(
                    m, s * SEGMENT, last, start[view[m]], swing[m], strength, ups, downs, a, b
                )
        haa = hab = hbb = 0.0
        for sigma in sigmas:
            ga, gb = (median[0] - a) / prior[0] ** 2, (median[1] - b) / prior[1] ** 2
            haa, hab, hbb = 1.0 / prior[0] ** 2, 0.0, 1.0 / prior[1] ** 2
            for i in range(count):
                m = begin[p] + i
                cycles = length[view[m]]
                for s in range((cycles + SEGMENT - 1) // SEGMENT):
                    sums[:] = 0.0
                    last = min((s + 1) * SEGMENT, cycles)
                    add_segment(
                        m, s * SEGMENT, last, start[view[m]], swing[m], strength, ups, downs, a, b, reference[i, s],
                        sigma, noise_of_step, sums,
                    )  # fmt: skip
                    hrr = sums[8] + 1e-3 / (median[0] * median[0])
                    # The segment's own reference is eliminated (Schur complement).
                    ga += sums[0] - sums[6] * sums[2] / hrr
                    gb += sums[1] - sums[7] * sums[2] / hrr
                    haa += sums[3] - sums[6] * sums[6] / hrr
                    hab += sums[4] - sums[6] * sums[7] / hrr
                    hbb += sums[5] - sums[7] * sums[7] / hrr
                    kept[i, s, 0], kept[i, s, 1], kept[i, s, 2], kept[i, s, 3] = sums[2], sums[6], sums[7], hrr
            determinant = haa * hbb - hab * hab
            da, db = (hbb * ga - hab * gb) / determinant, (haa * gb - hab * ga) / determinant
            shrink = min(1.0, 0.1 * median[0] / max(abs(da), 1e-12), 0.1 * median[1] / max(abs(db), 1e-12))
            da, db = da * shrink, db * shrink
            a, b = a + da, b + db
            for i in range(count):
                cycles = length[view[begin[p] + i]]
                for s in range((cycles + SEGMENT - 1) // SEGMENT):
                    step = (kept[i, s, 0] - kept[i, s, 1] * da - kept[i, s, 2] * db) / kept[i, s, 3]
                    reference[i, s] += min(max(step, -median[0]), median[0])
        determinant = haa * hbb - hab * hab
        found[p, 0], found[p, 1] = a, b
        covariance[p, 0, 0], covariance[p, 1, 1] = hbb / determinant, haa / determinant
        covariance[p, 0, 1] = covariance[p, 1, 0] = -hab / determinant
