"""Follow features from event to event: the loop over events, and the filter that each feature runs on them.

State of a feature: position p, velocity v (frame px, px/s) and log gain b of its patch. With the template T (log
light), the shape A of its warp W(x) = p + A (x - o) and an event pixel that looks at q, the light predicted at t is

    m(t) = T(o + A^-1 (q - p(t))) + b,   p(t - a) = p - a v                                   (1)

Every pixel is a level crossing: at the stamp of its last event, age a, its log light was L. The residual L - m(t - a)
has derivatives (grad, -a grad, -1) with respect to (p, v, b), where grad = A^-T slope of T (2). A pixel that stayed silent says only
that m has not left [L - theta_off, L + theta_on] (3). Gauss-Newton on these with the constant-velocity
prediction as prior is an iterated extended Kalman filter (Bell and Cathey 1993) on the brightness model of Gehrig et al. 2018.
"""

from typing import NamedTuple

import numpy as np

from hybridtrack.compiled import kernel
from hybridtrack.tracking.feature_table import HISTORY, STATE_SIZE, Features, Levels

Array = np.ndarray
FORGOTTEN = np.iinfo(np.int64).min


class Pace(NamedTuple):
    """Constants of the event filter."""

    radius: float  # half width of the patch, template px
    event_from_frame: Array  # float64 (2, 3): event-grid position from frame px, to find the pixels of a patch
    box: Array  # int64 (2,): half width of that search, event px
    acceleration_share: float  # 1/s, expected acceleration over speed
    acceleration_floor: float  # frame px/s^2
    acceleration_time_s: float
    gain_rate: float  # 1/sqrt(s), random walk of the log gain
    level_discount: float  # how much of an event's information is new; events of one pixel share errors
    slack: float  # thresholds that a silent pixel may have moved, for one that fired since the frame
    slack_fresh: float  # the same for one that did not
    output_ns: int
    history_ns: int
    base_ns: int  # longest time between updates; divides output_ns
    shortest_ns: int
    step_px: float  # movement between updates that is aimed at
    surprise: float  # squared deviations of an update from its prediction at which the velocity is doubted
    measuring: int  # 0: coast only


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
            w00 * template[i, j, k] + w01 * template[i, j + 1, k] + w10 * template[i + 1, j, k] + w11 * template[i + 1, j + 1, k]
        )
    return True


@kernel
def predict(f: int, features: Features, t_ns: int, pace: Pace) -> None:
    """Carry a feature's state and covariance to `t_ns` at constant velocity."""
    dt = (t_ns - features.t_ns[f]) * 1e-9
    if dt <= 0.0:
        return
    x, p = features.state[f], features.cov[f]
    x[0] += x[2] * dt
    x[1] += x[3] * dt
    # F P F^T with F = [[I, dt I, 0], [0, I, 0], [0, 0, 1]], in place: rows, then columns.
    for i in range(2):
        for k in range(STATE_SIZE):
            p[i, k] += dt * p[i + 2, k]
    for i in range(2):
        for k in range(STATE_SIZE):
            p[k, i] += dt * p[k, i + 2]
    speed = np.hypot(x[2], x[3])
    acceleration = pace.acceleration_share * speed + pace.acceleration_floor
    q = acceleration**2 * pace.acceleration_time_s
    for i in range(2):
        p[i, i] += q * dt**3 / 3.0
        p[i, i + 2] += 0.5 * q * dt**2
        p[i + 2, i] += 0.5 * q * dt**2
        p[i + 2, i + 2] += q * dt
    p[4, 4] += pace.gain_rate**2 * dt
    features.t_ns[f] = t_ns


class Scratch(NamedTuple):
    """Room for one feature's normal equations."""

    h: Array  # (5, 5)
    g: Array  # (5,)
    prior: Array  # (5,)
    prior_information: Array  # (5, 5)
    factor: Array  # (5, 5)
    step: Array  # (5,)
    jac: Array  # (5,)
    sampled: Array  # (3,)


@kernel
def new_scratch() -> Scratch:
    """Allocate the room once a call."""
    n = STATE_SIZE
    return Scratch(
        np.zeros((n, n)), np.zeros(n), np.zeros(n), np.zeros((n, n)), np.zeros((n, n)), np.zeros(n), np.zeros(n), np.zeros(3)
    )


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
    f: int, features: Features, levels: Levels, since_ns: int, pace: Pace, scratch: Scratch
) -> tuple[int, float, float]:
    """Write one iteration's normal equations over the pixels of a patch to `scratch.h` (lower triangle) and `scratch.g`.

    Returns how many pixels fired since `since_ns`, their weighted squared residuals and the sum of their weights.
    """
    h, g, jac, sampled = scratch.h, scratch.g, scratch.jac, scratch.sampled
    h[:], g[:] = 0.0, 0.0
    x, t_ns = features.state[f], features.t_ns[f]
    a = features.work_shape[f]
    determinant = a[0, 0] * a[1, 1] - a[0, 1] * a[1, 0]
    i00, i01 = a[1, 1] / determinant, -a[0, 1] / determinant
    i10, i11 = -a[1, 0] / determinant, a[0, 0] / determinant
    offset, template, sigma = features.work_offset[f], features.work[f], features.level_sigma[f]
    middle = 0.5 * (template.shape[0] - 1)
    m = pace.event_from_frame
    column = int(np.rint(m[0, 0] * x[0] + m[0, 1] * x[1] + m[0, 2]))
    row = int(np.rint(m[1, 0] * x[0] + m[1, 1] * x[1] + m[1, 2]))
    rows, columns = levels.level.shape
    fired, squares, weights = 0, 0.0, 0.0
    for r in range(max(row - pace.box[1], 0), min(row + pace.box[1] + 1, rows)):
        for c in range(max(column - pace.box[0], 0), min(column + pace.box[0] + 1, columns)):
            if not levels.usable[r, c]:
                continue
            anchor, fresh = levels.anchor_ns[r, c], levels.fresh[r, c] != 0
            new = not fresh and anchor > since_ns
            age = (t_ns - anchor) * 1e-9 if new else 0.0
            d_u = levels.frame_uv[r, c, 0] - x[0] + age * x[2]
            d_v = levels.frame_uv[r, c, 1] - x[1] + age * x[3]
            s_u, s_v = i00 * d_u + i01 * d_v + offset[0], i10 * d_u + i11 * d_v + offset[1]
            reach = max(abs(s_u - offset[0]), abs(s_v - offset[1]))
            if reach > pace.radius or not sample(template, s_u + middle, s_v + middle, sampled):
                continue
            residual, share = pixel_residual(
                levels.level[r, c] - sampled[0] - x[4], new, fresh, levels.theta_on[r, c], levels.theta_off[r, c], pace
            )
            if share == 0.0:
                continue
            taper = share * min(1.0, pace.radius - reach)
            # Huber's weight: an outlier is bounded, yet keeps pulling, so that a wrong velocity gives way.
            weight = taper / max(1.0, abs(residual) / (2.0 * sigma)) / (sigma * sigma)
            if new:
                fired += 1
                squares += taper * min(residual * residual, 9.0 * sigma * sigma)
                weights += taper
            grad_u, grad_v = i00 * sampled[1] + i10 * sampled[2], i01 * sampled[1] + i11 * sampled[2]  # (2)
            # Derivatives of the prediction m: the residual's with the sign turned.
            jac[0], jac[1], jac[2], jac[3], jac[4] = -grad_u, -grad_v, age * grad_u, age * grad_v, 1.0
            for i in range(STATE_SIZE):
                g[i] += weight * jac[i] * residual
                for k in range(i + 1):
                    h[i, k] += weight * jac[i] * jac[k]
    return fired, squares, weights


@kernel
def update(f: int, features: Features, levels: Levels, since_ns: int, pace: Pace, scratch: Scratch) -> None:
    """Bring a predicted feature into agreement with the pixels of its patch at its state's time."""
    h, g, prior, information, step = scratch.h, scratch.g, scratch.prior, scratch.prior_information, scratch.step
    for i in range(STATE_SIZE):
        prior[i] = features.state[f, i]
        for k in range(STATE_SIZE):
            scratch.factor[i, k] = features.cov[f, i, k]
    invert(scratch.factor, information, step)
    fired, squares, weights = 0, 0.0, 0.0
    for iteration in range(3):
        fired, squares, weights = accumulate(f, features, levels, since_ns, pace, scratch)
        if h[4, 4] == 0.0:
            return
        for i in range(STATE_SIZE):
            step[i] = pace.level_discount * g[i]
            for k in range(STATE_SIZE):
                low, high = max(i, k), min(i, k)
                scratch.factor[i, k] = pace.level_discount * h[low, high] + information[i, k]
                step[i] -= information[i, k] * (features.state[f, k] - prior[k])
        factorise(scratch.factor)
        substitute(scratch.factor, step)
        length = np.hypot(step[0], step[1])
        scale = min(1.0, 2.0 / (length + 1e-12))
        for i in range(STATE_SIZE):
            features.state[f, i] += scale * step[i]
        if length < 0.05:
            break
    for i in range(STATE_SIZE):
        step[:] = 0.0
        step[i] = 1.0
        substitute(scratch.factor, step)
        for k in range(STATE_SIZE):
            features.cov[f, k, i] = step[k]
    surprise = 0.0
    for i in range(STATE_SIZE):
        for k in range(STATE_SIZE):
            surprise += information[i, k] * (features.state[f, i] - prior[i]) * (features.state[f, k] - prior[k])
    if surprise > pace.surprise:
        # More than the prediction allowed for: the velocity is less certain than it was thought to be.
        for i in range(2, 4):
            features.cov[f, i, i] += (features.state[f, i] - prior[i]) ** 2 + 0.5 * features.cov[f, i, i]
    if weights > 3.0:
        share = min(0.2, 0.005 * weights)
        variance = (1.0 - share) * features.level_sigma[f] ** 2 + share * squares / weights
        features.level_sigma[f] = np.sqrt(variance)
    features.updates[f] += fired


@kernel
def covariance_now(f: int, features: Features, out: Array, line: int) -> None:
    """Position covariance uu, uv, vv (frame px^2) to columns 2 to 4 of a line of `out`: the filter's, and what levels that stay wrong add to it."""
    share = 1.0
    if features.from_frame[f]:
        # The last frame explains its own levels: their errors count only as the patch moves off its old pixels.
        moved = np.hypot(features.state[f, 0] - features.anchor_uv[f, 0], features.state[f, 1] - features.anchor_uv[f, 1])
        share = 1.0 - np.exp(-0.5 * moved * moved)
    out[line, 2] = features.cov[f, 0, 0] + share * features.static_cov[f, 0, 0]
    out[line, 3] = features.cov[f, 0, 1] + share * features.static_cov[f, 0, 1]
    out[line, 4] = features.cov[f, 1, 1] + share * features.static_cov[f, 1, 1]


@kernel
def remember(f: int, features: Features, pace: Pace) -> None:
    """Write the state into the ring of past states, no closer than `history_ns`."""
    slot = features.history_next[f]
    before = features.history_t[f, (slot - 1) % HISTORY]
    if before != FORGOTTEN and features.t_ns[f] - before < pace.history_ns:
        return
    features.history_t[f, slot] = features.t_ns[f]
    for i in range(STATE_SIZE):
        features.history[f, slot, i] = features.state[f, i]
        for k in range(STATE_SIZE):
            features.history_cov[f, slot, i, k] = features.cov[f, i, k]
    features.history_next[f] = (slot + 1) % HISTORY


@kernel
def tick(features: Features, levels: Levels, t_ns: int, pace: Pace) -> None:
    """Bring every feature to `t_ns`."""
    scratch = new_scratch()
    for f in range(len(features.active)):
        if not features.active[f] or features.t_ns[f] >= t_ns:
            continue
        since = features.t_ns[f]
        predict(f, features, t_ns, pace)
        if pace.measuring:
            update(f, features, levels, since, pace, scratch)
        remember(f, features, pace)


@kernel
def apply_event(levels: Levels, t_ns: int, r: int, c: int, on: int, ramp_ns: int) -> None:
    """Move one pixel's level by an event after the last frame's instant."""
    step = levels.theta_on[r, c] if on else -levels.theta_off[r, c]
    if levels.fresh[r, c]:
        # Part of the first step had been made when the frame was taken: the light ramps from event to event.
        begin = max(levels.last_ns[r, c], t_ns - ramp_ns)
        reference = levels.reference_ns[r, c]
        if reference > begin:
            step *= (t_ns - reference) / (t_ns - begin)
        levels.fresh[r, c] = 0
    levels.level[r, c] += step
    levels.anchor_ns[r, c] = t_ns
    levels.last_ns[r, c] = t_ns


@kernel
def suitable_tick(features: Features, pace: Pace) -> int:
    """Time between updates at which typical features move by at most `step_px`: `base_ns` halved as often as needed."""
    total, count = 0.0, 0
    for f in range(len(features.active)):
        if features.active[f]:
            total += np.hypot(features.state[f, 2], features.state[f, 3])
            count += 1
    tick_ns = pace.base_ns
    while count and tick_ns >= 2 * pace.shortest_ns and 1.5 * total / count * tick_ns * 1e-9 > pace.step_px:
        tick_ns //= 2
    return tick_ns


@kernel
def advance(
    t: Array, x: Array, y: Array, on: Array, until_ns: int, ramp_ns: int, levels: Levels, features: Features, pace: Pace,
    clock: Array, out_slot: Array, out_ns: Array, out: Array,
) -> tuple[int, int]:
    """Run over events (N,) and bring features up to `until_ns`, tick by tick.

    `clock` int64 (2,) holds the next tick and the time between ticks, which is chosen anew every `base_ns`. At
    multiples of `output_ns` each feature's slot, time and row (u, v, cov uu, uv, vv) go to the `out` arrays. Returns how
    many rows were written and how many events were used.
    """
    written, used, k, count = 0, 0, 0, len(t)
    while True:
        now = clock[0]
        while k < count and t[k] <= now:
            if t[k] > levels.reference_ns[y[k], x[k]]:
                apply_event(levels, t[k], y[k], x[k], on[k], ramp_ns)
                used += 1
            k += 1
        if now >= until_ns:
            return written, used
        tick(features, levels, now, pace)
        if now % pace.output_ns == 0:
            for f in range(len(features.active)):
                if features.active[f] and features.t_ns[f] == now and written < len(out_slot):
                    out_slot[written], out_ns[written] = f, now
                    out[written, 0], out[written, 1] = features.state[f, 0], features.state[f, 1]
                    covariance_now(f, features, out, written)
                    written += 1
        if now % pace.base_ns == 0:
            clock[1] = suitable_tick(features, pace)
        clock[0] = min(now + clock[1], (now // pace.base_ns + 1) * pace.base_ns)


@kernel
def rewind(f: int, features: Features, t_ns: int, pace: Pace) -> bool:
    """Take a feature back to its last remembered state at or before `t_ns`, and from there to `t_ns`.

    What was remembered after that is forgotten. Returns False, changing nothing, where nothing that old is left.
    """
    if features.t_ns[f] <= t_ns:
        predict(f, features, t_ns, pace)
        return True
    for back in range(1, HISTORY + 1):
        slot = (features.history_next[f] - back) % HISTORY
        if features.history_t[f, slot] == FORGOTTEN:
            return False
        if features.history_t[f, slot] <= t_ns:
            for i in range(STATE_SIZE):
                features.state[f, i] = features.history[f, slot, i]
                for k in range(STATE_SIZE):
                    features.cov[f, i, k] = features.history_cov[f, slot, i, k]
            features.t_ns[f] = features.history_t[f, slot]
            for later in range(1, back):
                features.history_t[f, (slot + later) % HISTORY] = FORGOTTEN
            features.history_next[f] = (slot + 1) % HISTORY
            predict(f, features, t_ns, pace)
            return True
    return False


@kernel
def trajectory(f: int, features: Features, times_ns: Array, out: Array) -> None:
    """Positions (K, 2) of a feature at `times_ns` (K,), ascending, to `out`.

    Interpolated between remembered states, carried on at constant velocity before the first and after the last.
    """
    slot = (features.history_next[f] - 1) % HISTORY
    later_t, later = features.t_ns[f], features.state[f]
    steps = 0
    for k in range(len(times_ns) - 1, -1, -1):
        t = times_ns[k]
        while features.history_t[f, slot] > t and steps < HISTORY:
            steps += 1
            later_t, later = features.history_t[f, slot], features.history[f, slot]
            slot = (slot - 1) % HISTORY
        earlier_t = features.history_t[f, slot]
        if earlier_t != FORGOTTEN and earlier_t <= t < later_t:
            share = (t - earlier_t) / (later_t - earlier_t)
            for i in range(2):
                out[k, i] = (1.0 - share) * features.history[f, slot, i] + share * later[i]
        else:
            for i in range(2):
                out[k, i] = later[i] + later[2 + i] * (t - later_t) * 1e-9


@kernel
def observe_position(f: int, features: Features, u: float, v: float, uu: float, uv: float, vv: float) -> None:
    """Kalman update of a feature by a position (u, v) with its covariance."""
    x, p = features.state[f], features.cov[f]
    s00, s01, s11 = p[0, 0] + uu, p[0, 1] + uv, p[1, 1] + vv
    determinant = s00 * s11 - s01 * s01
    i00, i01, i11 = s11 / determinant, -s01 / determinant, s00 / determinant
    e_u, e_v = u - x[0], v - x[1]
    gain, rows = np.zeros((STATE_SIZE, 2)), np.zeros((2, STATE_SIZE))
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
