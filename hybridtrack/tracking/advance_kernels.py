"""Follow features from event to event: the loop over events, and the filter that each feature runs on them.

State of a feature: position p, velocity v (frame px, px/s) and log gain b of its patch. With the template T (log
light), the shape A of its warp W(x) = p + A (x - o) and an event pixel that looks at q, the light predicted at t is

    m(t) = T(o + A^-1 (q - p(t))) + b,   p(t - a) = p - a v                                   (1)

Every pixel is a level crossing: at the stamp of its last event, age a, its log light was L. The residual L - m(t - a)
has derivatives (grad, -a grad, -1) with respect to (p, v, b), where grad = A^-T slope of T (2). A pixel that stayed
silent says only that m has not left [L - theta_off, L + theta_on] (3). Gauss-Newton on these with the
constant-velocity prediction as prior is an iterated extended Kalman filter (Bell and Cathey 1993) on the brightness
model of Gehrig et al. 2018.
"""

from typing import Any

import numpy as np

from hybridtrack.compiled import kernel
from hybridtrack.tracking.feature_table import FORGOTTEN, HISTORY, STATE_SIZE, Pace

Array = np.ndarray
Record = Any  # one record of FEATURE or PIXEL, whose fields no type checker knows
Table = np.recarray
FEWEST_IN_FIELD = 8
PUSH_TIME_S = 0.003  # over which the common acceleration is learned


@kernel
def factorise(a: Array) -> None:
    """Cholesky factor of a symmetric positive definite (N, N) matrix, in place, in its lower triangle."""
    for i in range(len(a)):
        for j in range(i + 1):
            total = a[i, j]
            for k in range(j):
                total -= a[i, k] * a[j, k]
            a[i, j] = np.sqrt(max(total, 1e-18)) if i == j else total / a[j, j]


@kernel
def substitute(factor: Array, b: Array) -> None:
    """Solve with a Cholesky factor, in place of the right side `b` (N,)."""
    for i in range(len(b)):
        for k in range(i):
            b[i] -= factor[i, k] * b[k]
        b[i] /= factor[i, i]
    for i in range(len(b) - 1, -1, -1):
        for k in range(i + 1, len(b)):
            b[i] -= factor[k, i] * b[k]
        b[i] /= factor[i, i]


@kernel
def invert(a: Array, inverse: Array, column: Array) -> None:
    """Inverse (N, N) of a symmetric positive definite matrix, which is overwritten by its factor."""
    factorise(a)
    for i in range(len(a)):
        column[:] = 0.0
        column[i] = 1.0
        substitute(a, column)
        for k in range(len(a)):
            inverse[k, i] = column[k]


@kernel
def sample(template: Array, s_u: float, s_v: float, out: Array) -> bool:
    """Bilinear value and slopes of a (S, S, 3) template at column `s_u`, row `s_v`; False outside."""
    size = template.shape[0]
    i, j = int(np.floor(s_v)), int(np.floor(s_u))
    if i < 0 or j < 0 or i >= size - 1 or j >= size - 1:
        return False
    a, b = s_v - i, s_u - j
    w00, w01, w10, w11 = (1 - a) * (1 - b), (1 - a) * b, a * (1 - b), a * b
    for k in range(3):
        out[k] = (
            w00 * template[i, j, k]
            + w01 * template[i, j + 1, k]
            + w10 * template[i + 1, j, k]
            + w11 * template[i + 1, j + 1, k]
        )
    return True


@kernel
def predict(feature: Record, t_ns: int, pace: Pace) -> None:
    """Carry a feature's state and covariance to `t_ns` at constant velocity."""
    dt = (t_ns - feature.t_ns) * 1e-9
    if dt <= 0.0:
        return
    x, p = feature.state, feature.cov
    x[0] += x[2] * dt
    x[1] += x[3] * dt
    # F P F^T with F = [[I, dt I, 0], [0, I, 0], [0, 0, 1]], in place: rows, then columns.
    for i in range(2):
        for k in range(STATE_SIZE):
            p[i, k] += dt * p[i + 2, k]
    for i in range(2):
        for k in range(STATE_SIZE):
            p[k, i] += dt * p[k, i + 2]
    # What reverses is as quick to slow down as it was fast a moment ago.
    speed = np.sqrt(x[2] * x[2] + x[3] * x[3])
    feature.recent_speed = max(speed, feature.recent_speed * (1.0 - min(1.0, dt / pace.speed_memory_s)))
    acceleration = pace.acceleration_share * feature.recent_speed + pace.acceleration_floor
    q = acceleration * acceleration * pace.acceleration_time_s
    for i in range(2):
        p[i, i] += q * dt * dt * dt / 3.0
        p[i, i + 2] += 0.5 * q * dt * dt
        p[i + 2, i] += 0.5 * q * dt * dt
        p[i + 2, i + 2] += q * dt
    p[4, 4] += pace.gain_rate * pace.gain_rate * dt
    feature.t_ns = t_ns


@kernel
def pixel_residual(
    residual: float, new: bool, fresh: bool, theta_on: float, theta_off: float, pace: Pace
) -> tuple[float, float]:
    """Residual and weight share of a pixel: its level where it fired, its silence (3) where it did not."""
    if new:
        return residual, 1.0
    slack = pace.slack_fresh if fresh else pace.slack
    if residual > slack * theta_off:
        return residual - slack * theta_off, 0.25
    if residual < -slack * theta_on:
        return residual + slack * theta_on, 0.25
    return 0.0, 0.0


@kernel
def accumulate(
    feature: Record, template: Array, levels: Table, since_ns: int, pace: Pace, jac: Array, sampled: Array
) -> tuple[int, float, float]:
    """Write one iteration's normal equations over the pixels of a patch to the feature's `h` (lower triangle) and `g`.

    Returns how many pixels fired since `since_ns`, their weighted squared residuals and the sum of their weights.
    """
    h, g, x, t_ns, a = feature.h, feature.g, feature.state, feature.t_ns, feature.work_warp
    for i in range(STATE_SIZE):
        g[i] = 0.0
        for k in range(STATE_SIZE):
            h[i, k] = 0.0
    determinant = a[0, 0] * a[1, 1] - a[0, 1] * a[1, 0]
    i00, i01 = a[1, 1] / determinant, -a[0, 1] / determinant
    i10, i11 = -a[1, 0] / determinant, a[0, 0] / determinant
    sigma = feature.level_sigma
    middle = 0.5 * (template.shape[0] - 1)
    middle_u, middle_v = middle + feature.work_offset[0], middle + feature.work_offset[1]
    column = int(np.rint(pace.x_u * x[0] + pace.x_v * x[1] + pace.x_0))
    row = int(np.rint(pace.y_u * x[0] + pace.y_v * x[1] + pace.y_0))
    fired, squares, weights = 0, 0.0, 0.0
    for r in range(max(row - pace.reach_y, 0), min(row + pace.reach_y + 1, levels.shape[0])):
        for c in range(max(column - pace.reach_x, 0), min(column + pace.reach_x + 1, levels.shape[1])):
            pixel = levels[r, c]
            if not pixel.usable:
                continue
            fresh = pixel.fresh != 0
            new = not fresh and pixel.last_ns > since_ns
            # What a silent pixel has not reported yet is light of one lag ago.
            age = (t_ns - pixel.anchor_ns if new else pace.lag_ns) * 1e-9
            d_u, d_v = pixel.u - x[0] + age * x[2], pixel.v - x[1] + age * x[3]
            s_u, s_v = i00 * d_u + i01 * d_v, i10 * d_u + i11 * d_v
            reach = max(abs(s_u), abs(s_v))
            if reach > pace.radius or not sample(template, s_u + middle_u, s_v + middle_v, sampled):
                continue
            residual, share = pixel_residual(
                pixel.level - sampled[0] - x[4], new, fresh, pixel.theta_on, pixel.theta_off, pace
            )
            if share == 0.0:
                continue
            taper = share * min(1.0, pace.radius - reach)
            grad_u, grad_v = i00 * sampled[1] + i10 * sampled[2], i01 * sampled[1] + i11 * sampled[2]  # (2)
            # Huber's weight: an outlier is bounded, yet keeps pulling, so that a wrong velocity gives way.
            weight = taper / max(1.0, abs(residual) / (2.0 * sigma)) / (sigma * sigma)
            if new:
                fired += 1
                squares += taper * min(residual * residual, 9.0 * sigma * sigma)
                weights += taper
            # Derivatives of the prediction m: the residual's with the sign turned.
            jac[0], jac[1], jac[2], jac[3], jac[4] = -grad_u, -grad_v, age * grad_u, age * grad_v, 1.0
            for i in range(STATE_SIZE):
                g[i] += weight * jac[i] * residual
                for k in range(i + 1):
                    h[i, k] += weight * jac[i] * jac[k]
    return fired, squares, weights


@kernel
def newton_step(feature: Record, pace: Pace) -> float:
    """One Gauss-Newton step of the state with the prediction as prior; returns how far the position went, px."""
    h, g, x, step, factor = feature.h, feature.g, feature.state, feature.step, feature.factor
    for i in range(STATE_SIZE):
        step[i] = pace.level_discount * g[i]
        for k in range(STATE_SIZE):
            factor[i, k] = pace.level_discount * h[max(i, k), min(i, k)] + feature.information[i, k]
            step[i] -= feature.information[i, k] * (x[k] - feature.prior[k])
    factorise(factor)
    substitute(factor, step)
    length = np.sqrt(step[0] * step[0] + step[1] * step[1])
    scale = min(1.0, 2.0 / (length + 1e-12))
    for i in range(STATE_SIZE):
        x[i] += scale * step[i]
    return length


@kernel
def doubt_velocity(feature: Record, pace: Pace) -> None:
    """Widen the velocity's deviation where an update went further than its prediction allowed for."""
    surprise = 0.0
    for i in range(STATE_SIZE):
        for k in range(STATE_SIZE):
            moved = (feature.state[i] - feature.prior[i]) * (feature.state[k] - feature.prior[k])
            surprise += feature.information[i, k] * moved
    if surprise > pace.surprise:
        for i in range(2, 4):
            feature.cov[i, i] += (feature.state[i] - feature.prior[i]) ** 2 + 0.5 * feature.cov[i, i]


@kernel
def update(
    feature: Record, template: Array, levels: Table, since_ns: int, pace: Pace, jac: Array, sampled: Array
) -> None:
    """Bring a predicted feature into agreement with the pixels of its patch at its state's time."""
    factor, step = feature.factor, feature.step
    for i in range(STATE_SIZE):
        feature.prior[i] = feature.state[i]
        for k in range(STATE_SIZE):
            factor[i, k] = feature.cov[i, k]
    invert(factor, feature.information, step)
    fired, squares, weights = 0, 0.0, 0.0
    for _ in range(3):
        fired, squares, weights = accumulate(feature, template, levels, since_ns, pace, jac, sampled)
        if feature.h[4, 4] == 0.0:
            return
        if newton_step(feature, pace) < 0.05:
            break
    for i in range(STATE_SIZE):
        for k in range(STATE_SIZE):
            step[k] = 1.0 if k == i else 0.0
        substitute(factor, step)
        for k in range(STATE_SIZE):
            feature.cov[k, i] = step[k]
    doubt_velocity(feature, pace)
    if weights > 3.0:
        share = min(0.2, 0.005 * weights)
        feature.level_sigma = np.sqrt((1.0 - share) * feature.level_sigma**2 + share * squares / weights)
    feature.updates += fired


@kernel
def velocity_field(table: Table, pace: Pace, field: Array) -> bool:
    """Fit an affine field of velocities to the features: `field` (2, 3) of 1, and u and v about the picture's middle in
    units of its width. Reweighted by Cauchy's function (Holland and Welsch 1977), so that strays count little. False
    where there are too few."""
    count, speed = 0, 0.0
    for f in range(len(table)):
        if table[f].active:
            count += 1
            speed += np.hypot(table[f].state[2], table[f].state[3])
    if count < FEWEST_IN_FIELD:
        return False
    scale = pace.common_share * speed / count + pace.common_floor
    normal, right, row = np.zeros((3, 3)), np.zeros((2, 3)), np.ones(3)
    field[:] = 0.0
    for iteration in range(6):
        normal[:] = 0.0
        right[:] = 0.0
        for f in range(len(table)):
            if not table[f].active:
                continue
            x, p = table[f].state, table[f].cov
            row[1], row[2] = (x[0] - 0.5 * pace.width) / pace.width, (x[1] - 0.5 * pace.height) / pace.width
            weight = 1.0 / (p[2, 2] + p[3, 3] + scale * scale)
            if iteration > 0:
                e_u, e_v = x[2], x[3]
                for k in range(3):
                    e_u -= field[0, k] * row[k]
                    e_v -= field[1, k] * row[k]
                weight /= 1.0 + (e_u * e_u + e_v * e_v) / (scale * scale)
            for i in range(3):
                right[0, i] += weight * row[i] * x[2]
                right[1, i] += weight * row[i] * x[3]
                for k in range(i + 1):
                    normal[i, k] += weight * row[i] * row[k]
        # A weak pull of the slopes to zero keeps few features from turning strays into a field.
        for i in range(3):
            normal[i, i] += 1e-12 if i == 0 else 0.02 * normal[0, 0]
            for k in range(i):
                normal[k, i] = normal[i, k]
        factorise(normal)
        for axis in range(2):
            for k in range(3):
                field[axis, k] = right[axis, k]
            substitute(normal, field[axis])
    return True


@kernel
def pull_velocity(feature: Record, field: Array, dt_s: float, pace: Pace) -> None:
    """Kalman update of a feature's velocity by the common field, as far as one tick's share of it is news."""
    x, p, gain = feature.state, feature.cov, feature.step
    u, v = (x[0] - 0.5 * pace.width) / pace.width, (x[1] - 0.5 * pace.height) / pace.width
    mean_u = field[0, 0] + field[0, 1] * u + field[0, 2] * v
    mean_v = field[1, 0] + field[1, 1] * u + field[1, 2] * v
    sigma = pace.common_share * np.hypot(mean_u, mean_v) + pace.common_floor
    variance = sigma * sigma * max(1.0, pace.common_time_s / dt_s)
    for axis in range(2):
        c = 2 + axis
        error = (mean_u if axis == 0 else mean_v) - x[c]
        # A feature that moves by itself is believed in the end: its pull is bounded.
        total = p[c, c] + variance * max(1.0, abs(error) / (2.0 * sigma))
        for i in range(STATE_SIZE):
            gain[i] = p[i, c] / total
        for i in range(STATE_SIZE):
            x[i] += gain[i] * error
        for i in range(STATE_SIZE):
            for k in range(STATE_SIZE):
                feature.h[i, k] = p[c, k]
        for i in range(STATE_SIZE):
            for k in range(STATE_SIZE):
                p[i, k] -= gain[i] * feature.h[i, k]


@kernel
def remember(feature: Record, pace: Pace) -> None:
    """Write the state into the ring of past states, no closer than `history_ns`."""
    slot = feature.history_next
    before = feature.history_t[(slot - 1) % HISTORY]
    if before != FORGOTTEN and feature.t_ns - before < pace.history_ns:
        return
    feature.history_t[slot] = feature.t_ns
    for i in range(STATE_SIZE):
        feature.history[slot, i] = feature.state[i]
        for k in range(STATE_SIZE):
            feature.history_cov[slot, i, k] = feature.cov[i, k]
    feature.history_next = (slot + 1) % HISTORY


@kernel
def write_line(feature: Record, out: Array, line: int) -> None:
    """Position and its covariance uu, uv, vv (frame px^2) to a line of `out`: the filter's, and what levels that stay
    wrong add to it."""
    share = 1.0
    if feature.from_frame:
        # The last frame explains its own levels: their errors count only as the patch moves off its old pixels.
        away_u, away_v = feature.state[0] - feature.anchor_uv[0], feature.state[1] - feature.anchor_uv[1]
        share = 1.0 - np.exp(-0.5 * (away_u * away_u + away_v * away_v))
    out[line, 0], out[line, 1] = feature.state[0], feature.state[1]
    out[line, 2] = feature.cov[0, 0] + share * feature.static_cov[0, 0]
    out[line, 3] = feature.cov[0, 1] + share * feature.static_cov[0, 1]
    out[line, 4] = feature.cov[1, 1] + share * feature.static_cov[1, 1]


@kernel
def in_picture(feature: Record, pace: Pace) -> bool:
    """Whether a feature lies within the picture."""
    u, v = feature.state[0], feature.state[1]
    return u > -0.5 and v > -0.5 and u < pace.width - 0.5 and v < pace.height - 0.5


@kernel
def apply_event(pixel: Record, t_ns: int, on: int, ramp_ns: int, pace: Pace) -> None:
    """Move one pixel's level by an event after the last frame's instant."""
    light_ns = t_ns - pace.lag_ns
    step = float(pixel.theta_on) if on else -float(pixel.theta_off)
    if pixel.fresh:
        # Part of the first step had been made when the frame was taken: the light ramps from event to event.
        begin = max(pixel.last_ns - pace.lag_ns, light_ns - ramp_ns)
        if pixel.reference_ns > begin:
            step *= (light_ns - pixel.reference_ns) / (light_ns - begin)
        pixel.fresh = 0
    pixel.level += step
    pixel.anchor_ns = light_ns
    pixel.last_ns = t_ns


@kernel
def suitable_tick(table: Table, pace: Pace) -> int:
    """Time between updates at which typical features move by at most `step_px`: `base_ns` halved as often as needed."""
    total, count = 0.0, 0
    for f in range(len(table)):
        if table[f].active:
            total += np.hypot(table[f].state[2], table[f].state[3])
            count += 1
    tick_ns = pace.base_ns
    while count and tick_ns >= 2 * pace.shortest_ns and 1.5 * total / count * tick_ns * 1e-9 > pace.step_px:
        tick_ns //= 2
    return tick_ns


@kernel
def advance(
    t: Array,
    x: Array,
    y: Array,
    on: Array,
    until_ns: int,
    ramp_ns: int,
    levels: Table,
    table: Table,
    work: Array,
    pace: Pace,
    clock: Array,
    push: Array,
    out_slot: Array,
    out_ns: Array,
    out: Array,
) -> tuple[int, int]:
    """Run over events (N,) and bring features up to `until_ns`, tick by tick.

    `levels` (rows, columns) of PIXEL, `table` (M,) of FEATURE, `work` their templates. `clock` int64 (2,) holds the
    next tick and the time between ticks, which is chosen anew every `base_ns`. `push` (2,) is the acceleration that
    features have in common, frame px/s^2, learned as it goes. At multiples of `output_ns` each
    feature's slot, time and row (u, v, cov uu, uv, vv) go to the `out` arrays, and one that has left the picture is no
    longer active. Returns how many rows were written and how many events were used.
    """
    written, used, k, count = 0, 0, 0, len(t)
    jac, sampled, field = np.zeros(STATE_SIZE), np.zeros(3), np.zeros((2, 3))
    while True:
        now = clock[0]
        while k < count and t[k] <= now:
            pixel = levels[y[k], x[k]]
            if t[k] - pace.lag_ns > pixel.reference_ns:
                apply_event(pixel, t[k], on[k], ramp_ns, pace)
                used += 1
            k += 1
        if now >= until_ns:
            return written, used
        in_common = pace.measuring != 0 and velocity_field(table, pace, field)
        before_u, before_v, tick_s = field[0, 0], field[1, 0], 0.0
        for f in range(len(table)):
            feature = table[f]
            if not feature.active or feature.t_ns >= now:
                continue
            since = feature.t_ns
            if in_common:
                tick_s = (now - since) * 1e-9
                feature.recent_speed = max(
                    feature.recent_speed, 0.5 * np.hypot(push[0], push[1]) / pace.acceleration_share
                )
            predict(feature, now, pace)
            if in_common:
                feature.state[2] += push[0] * tick_s
                feature.state[3] += push[1] * tick_s
                field[0, 0], field[1, 0] = before_u + push[0] * tick_s, before_v + push[1] * tick_s
                pull_velocity(feature, field, tick_s, pace)
            if pace.measuring:
                update(feature, work[f], levels, since, pace, jac, sampled)
            remember(feature, pace)
            if now % pace.output_ns == 0 and written < len(out_slot):
                out_slot[written], out_ns[written] = f, now
                write_line(feature, out, written)
                written += 1
                if not in_picture(feature, pace):
                    feature.active = 0  # that line was its last
        if in_common and tick_s > 0.0 and velocity_field(table, pace, field):
            share = min(0.5, tick_s / PUSH_TIME_S)
            push[0] += share * ((field[0, 0] - before_u) / tick_s - push[0])
            push[1] += share * ((field[1, 0] - before_v) / tick_s - push[1])
        if now % pace.base_ns == 0:
            clock[1] = suitable_tick(table, pace)
        clock[0] = min(now + clock[1], (now // pace.base_ns + 1) * pace.base_ns)


@kernel
def rewind(feature: Record, t_ns: int, pace: Pace) -> bool:
    """Take a feature back to its last remembered state at or before `t_ns`, and from there to `t_ns`.

    What was remembered after that is forgotten. Returns False, changing nothing, where nothing that old is left.
    """
    if feature.t_ns <= t_ns:
        predict(feature, t_ns, pace)
        return True
    for back in range(1, HISTORY + 1):
        slot = (feature.history_next - back) % HISTORY
        if feature.history_t[slot] == FORGOTTEN:
            return False
        if feature.history_t[slot] <= t_ns:
            for i in range(STATE_SIZE):
                feature.state[i] = feature.history[slot, i]
                for k in range(STATE_SIZE):
                    feature.cov[i, k] = feature.history_cov[slot, i, k]
            feature.t_ns = feature.history_t[slot]
            for later in range(1, back):
                feature.history_t[(slot + later) % HISTORY] = FORGOTTEN
            feature.history_next = (slot + 1) % HISTORY
            predict(feature, t_ns, pace)
            return True
    return False


@kernel
def trajectory(feature: Record, times_ns: Array, out: Array) -> None:
    """Positions (K, 2) of a feature at `times_ns` (K,), ascending, to `out`.

    Interpolated between remembered states, carried on at constant velocity before the first and after the last.
    """
    slot, steps = (feature.history_next - 1) % HISTORY, 0
    later_t, x = feature.t_ns, feature.state
    u, v, speed_u, speed_v = x[0], x[1], x[2], x[3]
    past = feature.history
    for k in range(len(times_ns) - 1, -1, -1):
        t = times_ns[k]
        while feature.history_t[slot] > t and steps < HISTORY:
            steps += 1
            later_t = feature.history_t[slot]
            u, v, speed_u, speed_v = past[slot, 0], past[slot, 1], past[slot, 2], past[slot, 3]
            slot = (slot - 1) % HISTORY
        earlier_t = feature.history_t[slot]
        if earlier_t != FORGOTTEN and earlier_t <= t < later_t:
            share = (t - earlier_t) / (later_t - earlier_t)
            out[k, 0] = (1.0 - share) * past[slot, 0] + share * u
            out[k, 1] = (1.0 - share) * past[slot, 1] + share * v
        else:
            out[k, 0] = u + speed_u * (t - later_t) * 1e-9
            out[k, 1] = v + speed_v * (t - later_t) * 1e-9


@kernel
def observe_position(feature: Record, u: float, v: float, uu: float, uv: float, vv: float) -> None:
    """Kalman update of a feature by a position (u, v) with its covariance."""
    x, p, gain, rows = feature.state, feature.cov, feature.h, feature.factor
    s00, s01, s11 = p[0, 0] + uu, p[0, 1] + uv, p[1, 1] + vv
    determinant = s00 * s11 - s01 * s01
    i00, i01, i11 = s11 / determinant, -s01 / determinant, s00 / determinant
    e_u, e_v = u - x[0], v - x[1]
    for i in range(STATE_SIZE):
        gain[i, 0] = p[i, 0] * i00 + p[i, 1] * i01
        gain[i, 1] = p[i, 0] * i01 + p[i, 1] * i11
        rows[0, i], rows[1, i] = p[0, i], p[1, i]
    for i in range(STATE_SIZE):
        x[i] += gain[i, 0] * e_u + gain[i, 1] * e_v
        for k in range(STATE_SIZE):
            p[i, k] -= gain[i, 0] * rows[0, k] + gain[i, 1] * rows[1, k]
    for i in range(STATE_SIZE):
        for k in range(i):
            p[i, k] = p[k, i] = 0.5 * (p[i, k] + p[k, i])
