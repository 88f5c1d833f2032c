"""Compiled loops over rays: residuals, normal equations, and the Schur complement (Triggs et al. 2000, section 6.1)."""

import numpy as np

from hybridtrack.compiled import kernel

Array = np.ndarray


@kernel
def _residual(
    turn: Array,
    centre: Array,
    point: Array,
    own_turn: Array,
    own_shift: Array,
    whitening: Array,
    q: Array,
    n: Array,
    r: Array,
) -> float:
    """Fill q (frame axes), n (unit, at the ray's time) and r = whitening n; return the distance."""
    for i in range(3):
        q[i] = 0.0
        for j in range(3):
            q[i] += turn[j, i] * (point[j] - centre[j])
    square = 0.0
    for i in range(3):
        n[i] = own_shift[i]
        for j in range(3):
            n[i] += own_turn[i, j] * q[j]
        square += n[i] * n[i]
    distance = max(np.sqrt(square), 1e-12)
    for i in range(3):
        n[i] /= distance
    for k in range(2):
        r[k] = whitening[k, 0] * n[0] + whitening[k, 1] * n[1] + whitening[k, 2] * n[2]
    return distance


@kernel
def residual_norms(
    turns: Array,
    centres: Array,
    points: Array,
    pose_of: Array,
    point_of: Array,
    own_turns: Array,
    own_shifts: Array,
    rays: Array,
    whitening: Array,
    norms: Array,
) -> None:
    """Fill `norms` (M,) with |r| of every ray, infinite where the point lies behind it."""
    q, n, r = np.empty(3), np.empty(3), np.empty(2)
    for m in range(len(pose_of)):
        k, g = pose_of[m], point_of[m]
        _residual(turns[k], centres[k], points[g], own_turns[m], own_shifts[m], whitening[m], q, n, r)
        ahead = n[0] * rays[m, 0] + n[1] * rays[m, 1] + n[2] * rays[m, 2]
        norms[m] = np.sqrt(r[0] * r[0] + r[1] * r[1]) if ahead > 0.0 else np.inf


@kernel
def normal_equations(
    turns: Array,
    centres: Array,
    points: Array,
    pose_of: Array,
    point_of: Array,
    own_turns: Array,
    own_shifts: Array,
    whitening: Array,
    weights: Array,
    H_pose: Array,
    g_pose: Array,
    H_point: Array,
    g_point: Array,
    H_cross: Array,
) -> None:
    """Add J'WJ and J'Wr of all rays: pose blocks (K, 6, 6), (K, 6), point blocks (P, 3, 3), (P, 3), cross (M, 6, 3)."""
    q, n, r = np.empty(3), np.empty(3), np.empty(2)
    A, B = np.empty((2, 3)), np.empty((2, 3))
    J = np.empty((2, 6))
    for m in range(len(pose_of)):
        w = weights[m]
        H_cross[m] = 0.0
        if w <= 0.0:
            continue
        k, g = pose_of[m], point_of[m]
        d = _residual(turns[k], centres[k], points[g], own_turns[m], own_shifts[m], whitening[m], q, n, r)
        for a in range(2):
            for i in range(3):  # A = W (I - n n') / d, by the point in axes of the ray's time
                A[a, i] = (whitening[m, a, i] - r[a] * n[i]) / d
            for i in range(3):  # J: by the point in frame axes, and minus its cross product for the rotation
                J[a, i] = -(A[a, 0] * own_turns[m, 0, i] + A[a, 1] * own_turns[m, 1, i] + A[a, 2] * own_turns[m, 2, i])
            J[a, 3] = J[a, 2] * q[1] - J[a, 1] * q[2]
            J[a, 4] = J[a, 0] * q[2] - J[a, 2] * q[0]
            J[a, 5] = J[a, 1] * q[0] - J[a, 0] * q[1]
            for i in range(3):
                B[a, i] = -(J[a, 0] * turns[k, i, 0] + J[a, 1] * turns[k, i, 1] + J[a, 2] * turns[k, i, 2])
        for i in range(6):
            g_pose[k, i] += w * (J[0, i] * r[0] + J[1, i] * r[1])
            for j in range(6):
                H_pose[k, i, j] += w * (J[0, i] * J[0, j] + J[1, i] * J[1, j])
            for j in range(3):
                H_cross[m, i, j] = w * (J[0, i] * B[0, j] + J[1, i] * B[1, j])
        for i in range(3):
            g_point[g, i] += w * (B[0, i] * r[0] + B[1, i] * r[1])
            for j in range(3):
                H_point[g, i, j] += w * (B[0, i] * B[0, j] + B[1, i] * B[1, j])


@kernel
def pose_equations(
    turn: Array,
    centre: Array,
    points: Array,
    own_turns: Array,
    own_shifts: Array,
    rays: Array,
    whitening: Array,
    growth: Array,
    cauchy_width: float,
    H: Array,
    g: Array,
    norms: Array,
) -> None:
    """Fill H (6, 6), g (6,) of one pose over known points (N, 3) under Cauchy's cost, and |r| (N,) as `residual_norms`.

    `growth` (N,): how much further than the frame's pose the pose at the ray's time moves. A `cauchy_width` of zero
    counts rays alike, but not those whose `norms` are infinite on entry.
    """
    q, n, r = np.empty(3), np.empty(3), np.empty(2)
    A, J = np.empty((2, 3)), np.empty((2, 6))
    H[:] = 0.0
    g[:] = 0.0
    for m in range(len(points)):
        skipped = cauchy_width == 0.0 and np.isinf(norms[m])
        d = _residual(turn, centre, points[m], own_turns[m], own_shifts[m], whitening[m], q, n, r)
        square = r[0] * r[0] + r[1] * r[1]
        ahead = n[0] * rays[m, 0] + n[1] * rays[m, 1] + n[2] * rays[m, 2] > 0.0
        norms[m] = np.sqrt(square) if ahead and not skipped else np.inf
        if not ahead or skipped:
            continue
        w = 1.0 if cauchy_width == 0.0 else 1.0 / (1.0 + square / (cauchy_width * cauchy_width))
        for a in range(2):
            for i in range(3):
                A[a, i] = (whitening[m, a, i] - r[a] * n[i]) / d
            for i in range(3):
                J[a, i] = -(A[a, 0] * own_turns[m, 0, i] + A[a, 1] * own_turns[m, 1, i] + A[a, 2] * own_turns[m, 2, i])
            J[a, 3] = J[a, 2] * q[1] - J[a, 1] * q[2]
            J[a, 4] = J[a, 0] * q[2] - J[a, 2] * q[0]
            J[a, 5] = J[a, 1] * q[0] - J[a, 0] * q[1]
            for i in range(6):
                J[a, i] *= growth[m]
        for i in range(6):
            g[i] += w * (J[0, i] * r[0] + J[1, i] * r[1])
            for j in range(6):
                H[i, j] += w * (J[0, i] * J[0, j] + J[1, i] * J[1, j])


@kernel
def reduce_points(
    starts: Array, slot_of: Array, H_point_inverse: Array, g_point: Array, H_cross: Array, S: Array, g: Array
) -> None:
    """Subtract the points' share from the reduced system S (6F, 6F), g (6F,).

    Rays are sorted by point, those of point p are `starts[p]` to `starts[p + 1]`; `slot_of` (M,) is the free pose of a
    ray, -1 where it is held.
    """
    Y = np.empty((6, 3))
    for p in range(len(starts) - 1):
        for a in range(starts[p], starts[p + 1]):
            ka = slot_of[a]
            if ka < 0:
                continue
            for i in range(6):
                for j in range(3):
                    Y[i, j] = (
                        H_cross[a, i, 0] * H_point_inverse[p, 0, j]
                        + H_cross[a, i, 1] * H_point_inverse[p, 1, j]
                        + H_cross[a, i, 2] * H_point_inverse[p, 2, j]
                    )
                g[6 * ka + i] -= Y[i, 0] * g_point[p, 0] + Y[i, 1] * g_point[p, 1] + Y[i, 2] * g_point[p, 2]
            for b in range(starts[p], starts[p + 1]):
                kb = slot_of[b]
                if kb < 0:
                    continue
                for i in range(6):
                    for j in range(6):
                        S[6 * ka + i, 6 * kb + j] -= (
                            Y[i, 0] * H_cross[b, j, 0] + Y[i, 1] * H_cross[b, j, 1] + Y[i, 2] * H_cross[b, j, 2]
                        )


@kernel
def point_steps(
    starts: Array,
    slot_of: Array,
    H_point_inverse: Array,
    g_point: Array,
    H_cross: Array,
    step: Array,
    point_step: Array,
) -> None:
    """Fill `point_step` (P, 3) from the pose step (F, 6)."""
    t = np.empty(3)
    for p in range(len(starts) - 1):
        for j in range(3):
            t[j] = g_point[p, j]
        for a in range(starts[p], starts[p + 1]):
            ka = slot_of[a]
            if ka < 0:
                continue
            for i in range(6):
                for j in range(3):
                    t[j] += H_cross[a, i, j] * step[ka, i]
        for i in range(3):
            point_step[p, i] = -(
                H_point_inverse[p, i, 0] * t[0] + H_point_inverse[p, i, 1] * t[1] + H_point_inverse[p, i, 2] * t[2]
            )
