"""Compiled picture of a blinking board, and its light over time at event pixels and in frame rows.

Pixel aperture and point spread together are one Gaussian (see `board_optics`). Within its reach a board is taken as
flat and straight, and at most one grid line of each direction passes. The share of light that each square beside an
edge sends is then a normal distribution function of the distance in px, and at a corner a bivariate one, computed by
the single integral of Drezner and Wesolowsky (1990):

    P(X < h, Y < k; rho) = Phi(h) Phi(k)
        + 1 / (2 pi) integral_0^asin(rho) exp(-(h^2 - 2 h k sin a + k^2) / (2 cos^2 a)) da             (1)
"""

import math

import numba
import numpy as np

from hybridtrack.compiled import kernel

REACH = 4.5  # in standard deviations; beyond it an edge is not seen
NODES, WEIGHTS = np.polynomial.legendre.leggauss(10)

SET_A, SET_B, DARK, MOUNT, BACKGROUND = 0, 1, 2, 3, 4
# Pictures of a board: light that does not blink, light per DN of set A and of set B, and the sweep's part of its way.
STILL, COVER_A, COVER_B, SWEEP, PICTURES = range(5)
EPOCH, PERIOD, ON_TIME, RISE, FALL, PULSE_SIZE = range(6)
FLICKER_RATE, FLICKER_DEPTH, FLICKER_PHASE = range(3)


@kernel
def phi(x):  # type: ignore[no-untyped-def]
    """Standard normal distribution function."""
    return 0.5 * math.erfc(-x * math.sqrt(0.5))


@kernel
def bivariate(h, k, rho):  # type: ignore[no-untyped-def]
    """P(X < h, Y < k) of standard normal variables with correlation `rho`: equation (1), good for |rho| under 0.95."""
    end = 0.5 * math.asin(rho)
    total = 0.0
    for i in range(NODES.shape[0]):
        angle = end * (1.0 + NODES[i])
        sine, cosine = math.sin(angle), math.cos(angle)
        total += WEIGHTS[i] * math.exp(-(h * h - 2.0 * h * k * sine + k * k) / (2.0 * cosine * cosine))
    return phi(h) * phi(k) + end * total / (2.0 * math.pi)


@kernel
def class_of(sets, column, row):  # type: ignore[no-untyped-def]
    """What lies in a cell of the board's grid: a square's class, the mount round it, or the background."""
    rows, columns = sets.shape
    if 0 <= column < columns and 0 <= row < rows:
        return sets[row, column]
    if -1 <= column <= columns and -1 <= row <= rows:
        return MOUNT
    return BACKGROUND


@kernel
def background_light(waves, x, y, xu, xv, yu, yv, sigma):  # type: ignore[no-untyped-def]
    """Relative light of the background at (x, y) metres: waves (amplitude, kx, ky, phase), blurred by the Gaussian."""
    total = 1.0
    for i in range(waves.shape[0]):
        gu = waves[i, 1] * xu + waves[i, 2] * yu
        gv = waves[i, 1] * xv + waves[i, 2] * yv
        blur = 0.5 * sigma * sigma * (gu * gu + gv * gv)
        if blur < 20.0:
            seen = math.exp(-blur) if blur > 1e-4 else 1.0
            total += waves[i, 0] * seen * math.sin(waves[i, 1] * x + waves[i, 2] * y + waves[i, 3])
    return total


@kernel
def add_cell(out, n, kind, share, levels, background):  # type: ignore[no-untyped-def]
    """Add `share` of one cell's light to pixel `n`."""
    if kind == BACKGROUND:
        out[STILL, n] += share * levels[BACKGROUND] * background
    else:
        out[STILL, n] += share * levels[kind]
        if kind == SET_A:
            out[COVER_A, n] += share
        elif kind == SET_B:
            out[COVER_B, n] += share


@kernel
def picture_pixel(n, rays, rays_u, rays_v, poses, p, square, sets, sigma, levels, waves, sweep, out):  # type: ignore[no-untyped-def]
    """Write the pictures of pixel `n`, seen from `poses[p]` (P, 3, 4), board from camera. See `picture_board`."""
    for picture in range(PICTURES):
        out[picture, n] = 0.0
    r20, r21, r22 = poses[p, 2, 0], poses[p, 2, 1], poses[p, 2, 2]
    dx, dy, dz = rays[n, 0], rays[n, 1], rays[n, 2]
    rz = r20 * dx + r21 * dy + r22 * dz
    by_rz = 1.0 / rz
    scale = -poses[p, 2, 3] * by_rz
    if not (scale > 0.0):  # the ray misses the board's plane, or the lens has no ray here
        out[STILL, n] = levels[BACKGROUND]
        return
    r00, r01, r02 = poses[p, 0, 0], poses[p, 0, 1], poses[p, 0, 2]
    r10, r11, r12 = poses[p, 1, 0], poses[p, 1, 1], poses[p, 1, 2]
    rx, ry = r00 * dx + r01 * dy + r02 * dz, r10 * dx + r11 * dy + r12 * dz
    x, y = poses[p, 0, 3] + scale * rx, poses[p, 1, 3] + scale * ry
    ux, uy, uz, vx, vy, vz = rays_u[n, 0], rays_u[n, 1], rays_u[n, 2], rays_v[n, 0], rays_v[n, 1], rays_v[n, 2]
    zu, zv = (r20 * ux + r21 * uy + r22 * uz) * by_rz, (r20 * vx + r21 * vy + r22 * vz) * by_rz
    xu, xv = scale * (r00 * ux + r01 * uy + r02 * uz - rx * zu), scale * (r00 * vx + r01 * vy + r02 * vz - rx * zv)
    yu, yv = scale * (r10 * ux + r11 * uy + r12 * uz - ry * zu), scale * (r10 * vx + r11 * vy + r12 * vz - ry * zv)
    out[SWEEP, n] = min(max(sweep[0] + sweep[1] * x + sweep[2] * y, 0.0), 1.0)

    rows, columns = sets.shape
    a, b = x / square[0], y / square[1]
    line_a = min(max(math.floor(a + 0.5), -1.0), columns + 1.0)
    line_b = min(max(math.floor(b + 0.5), -1.0), rows + 1.0)
    slope_x, slope_y = math.sqrt(xu * xu + xv * xv), math.sqrt(yu * yu + yv * yv)
    h = (a - line_a) * square[0] / (slope_x * sigma)  # signed distance from the nearest lines, in sigmas
    k = (b - line_b) * square[1] / (slope_y * sigma)
    near_a, near_b = abs(h) < REACH, abs(k) < REACH
    column, row = math.floor(min(max(a, -2.0), columns + 2.0)), math.floor(min(max(b, -2.0), rows + 2.0))
    right, below = int(line_a), int(line_b)
    background = 0.0
    if not (0.0 <= a <= columns and 0.0 <= b <= rows):
        background = background_light(waves, x, y, xu, xv, yu, yv, sigma)
    if near_a and near_b:
        rho = (xu * yu + xv * yv) / (slope_x * slope_y)
        both, past_a, past_b = bivariate(h, k, rho), phi(h), phi(k)
        add_cell(out, n, class_of(sets, right, below), both, levels, background)
        add_cell(out, n, class_of(sets, right, below - 1), past_a - both, levels, background)
        add_cell(out, n, class_of(sets, right - 1, below), past_b - both, levels, background)
        add_cell(out, n, class_of(sets, right - 1, below - 1), 1.0 - past_a - past_b + both, levels, background)
    elif near_a:
        add_cell(out, n, class_of(sets, right, row), phi(h), levels, background)
        add_cell(out, n, class_of(sets, right - 1, row), phi(-h), levels, background)
    elif near_b:
        add_cell(out, n, class_of(sets, column, below), phi(k), levels, background)
        add_cell(out, n, class_of(sets, column, below - 1), phi(-k), levels, background)
    else:
        add_cell(out, n, class_of(sets, column, row), 1.0, levels, background)


@kernel
def picture_row(first, size, rays, rays_u, rays_v, gain, poses, p, square, sets, sigma, levels, waves, sweep, out):  # type: ignore[no-untyped-def]
    """Write the pictures of `size` pixels from `first` on. See `picture_board`."""
    for n in range(first, first + size):
        picture_pixel(n, rays, rays_u, rays_v, poses, p, square, sets, sigma, levels, waves, sweep, out)
        for picture in range(SWEEP):
            out[picture, n] *= gain[n]


@kernel(parallel=True)
def picture_board(rays, rays_u, rays_v, gain, poses, pose_rows, width, square, sets, sigma, levels, waves, sweep, out):  # type: ignore[no-untyped-def]
    """Pictures `out` (PICTURES, N) of the board at N = rows * width pixels.

    `rays`, `rays_u`, `rays_v` (N, 3): directions and their change per colour px. Pixel row r sees pose
    `poses[pose_rows[r]]` (P, 3, 4). `gain` (N,) is the fall-off of the lens. `square` (2,) m; `sets` (rows, columns)
    classes; `levels` (5,) DN of classes when not lit; `waves` (W, 4); `sweep` (3,): part of its way as 1, x, y.
    """
    for r in numba.prange(pose_rows.shape[0]):
        picture_row(
            r * width,
            width,
            rays,
            rays_u,
            rays_v,
            gain,
            poses,
            pose_rows[r],
            square,
            sets,
            sigma,
            levels,
            waves,
            sweep,
            out,
        )


@kernel
def pulse_value(t, pulse, amplitude, first_cycle):  # type: ignore[no-untyped-def]
    """Light of a pulse train at `t`: linear rise, full, linear fall; `amplitude[n - first_cycle]` of cycle n."""
    cycle = math.floor((t - pulse[EPOCH]) / pulse[PERIOD])
    into = t - pulse[EPOCH] - cycle * pulse[PERIOD]
    full = amplitude[min(max(int(cycle) - first_cycle, 0), amplitude.shape[0] - 1)]
    if into < pulse[RISE]:
        return full * into / pulse[RISE]
    if into <= pulse[ON_TIME]:
        return full
    if into < pulse[ON_TIME] + pulse[FALL]:
        return full * (1.0 - (into - pulse[ON_TIME]) / pulse[FALL])
    return 0.0


@kernel
def pulse_area(into, pulse):  # type: ignore[no-untyped-def]
    """Integral of one pulse of height 1 from its start to `into`."""
    area = 0.0
    if pulse[RISE] > 0.0:
        part = min(into, pulse[RISE])
        area += 0.5 * part * part / pulse[RISE]
    if into > pulse[RISE]:
        area += min(into, pulse[ON_TIME]) - pulse[RISE]
    if into > pulse[ON_TIME] and pulse[FALL] > 0.0:
        part = min(into - pulse[ON_TIME], pulse[FALL])
        area += part - 0.5 * part * part / pulse[FALL]
    return area


@kernel
def pulse_integral(t, pulse, amplitude, before, first_cycle):  # type: ignore[no-untyped-def]
    """Integral of the train up to `t`; `before[n]` is the sum of amplitudes of the cycles ahead of the n-th stored."""
    cycle = math.floor((t - pulse[EPOCH]) / pulse[PERIOD])
    into = t - pulse[EPOCH] - cycle * pulse[PERIOD]
    place = min(max(int(cycle) - first_cycle, 0), amplitude.shape[0] - 1)
    return before[place] * pulse_area(pulse[PERIOD], pulse) + amplitude[place] * pulse_area(into, pulse)


@kernel
def flicker_integral(t0, t1, flicker):  # type: ignore[no-untyped-def]
    """Integral of 1 + depth sin(rate t + phase) from t0 to t1."""
    area = t1 - t0
    if flicker[FLICKER_DEPTH] > 0.0:
        rate, phase = flicker[FLICKER_RATE], flicker[FLICKER_PHASE]
        area += flicker[FLICKER_DEPTH] * (math.cos(rate * t0 + phase) - math.cos(rate * t1 + phase)) / rate
    return area


@kernel(parallel=True)
def light_over_time(t, weight, here, there, scanout, pulse_a, pulse_b, amplitude, first_cycle, flicker, out):  # type: ignore[no-untyped-def]
    """Light `out` (T, N) at times `t` (T,): pictures `here` (PICTURES, N) mixed with `there` by `weight` (T,)."""
    for k in numba.prange(t.shape[0]):
        w = np.float32(weight[k])
        ambient = np.float32(1.0)
        if flicker[FLICKER_DEPTH] > 0.0:
            ambient = np.float32(
                1.0 + flicker[FLICKER_DEPTH] * math.sin(flicker[FLICKER_RATE] * t[k] + flicker[FLICKER_PHASE])
            )
        a = np.float32(pulse_value(t[k], pulse_a, amplitude, first_cycle))
        b = np.float32(pulse_value(t[k], pulse_b, amplitude, first_cycle))
        for n in range(out.shape[1]):
            if scanout > 0.0:
                delayed = t[k] - scanout * here[SWEEP, n]
                a = np.float32(pulse_value(delayed, pulse_a, amplitude, first_cycle))
                b = np.float32(pulse_value(delayed, pulse_b, amplitude, first_cycle))
            value = ambient * here[STILL, n] + a * here[COVER_A, n] + b * here[COVER_B, n]
            if w > 0.0:
                later = ambient * there[STILL, n] + a * there[COVER_A, n] + b * there[COVER_B, n]
                value += w * (later - value)
            out[k, n] = value


@kernel(parallel=True)
def add_exposure(  # type: ignore[no-untyped-def]
    start,
    duration,
    share,
    pictures,
    scanout,
    pulse_a,
    pulse_b,
    amplitude,
    before,
    first_cycle,
    flicker,
    out,
):
    """Add the light of rows that expose from `start` (rows,) for `duration` to `out` (rows, columns), times `share`.

    `pictures` (PICTURES, rows, columns). The blink is integrated exactly.
    """
    rows, columns = out.shape
    for row in numba.prange(rows):
        t0, t1 = start[row], start[row] + duration
        ambient = share * flicker_integral(t0, t1, flicker)
        a, b = 0.0, 0.0
        for column in range(columns):
            if scanout > 0.0 or column == 0:
                delay = scanout * pictures[SWEEP, row, column] if scanout > 0.0 else 0.0
                a = share * (
                    pulse_integral(t1 - delay, pulse_a, amplitude, before, first_cycle)
                    - pulse_integral(t0 - delay, pulse_a, amplitude, before, first_cycle)
                )
                b = share * (
                    pulse_integral(t1 - delay, pulse_b, amplitude, before, first_cycle)
                    - pulse_integral(t0 - delay, pulse_b, amplitude, before, first_cycle)
                )
            out[row, column] += (
                ambient * pictures[STILL, row, column]
                + a * pictures[COVER_A, row, column]
                + b * pictures[COVER_B, row, column]
            )
