"""Compiled loops of the lens models.

Both radial functions are the odd polynomial f(r) = r (1 + k0 r^2 + k1 r^4 + k2 r^6 + k3 r^8); the
perspective model has k3 = 0. Parameter vectors `p` are fx, fy, cx, cy, k1, k2, k3, p1, p2 and fx, fy, cx,
cy, k1, k2, k3, k4. `limit` is the radius (perspective) or angle in rad (fisheye) up to which the model has
an inverse. Rows that have no value are NaN.
"""

import math

from hybridtrack.compiled import kernel

_EPSILON = 2.220446049250313e-16
_EDGE = 1.0 + 1e-12  # a point on the limit stays inside under rounding


@kernel
def radial_value(r, k0, k1, k2, k3):  # type: ignore[no-untyped-def]
    """f(r)."""
    q = r * r
    return r * (1.0 + q * (k0 + q * (k1 + q * (k2 + q * k3))))


@kernel
def radial_slope(r, k0, k1, k2, k3):  # type: ignore[no-untyped-def]
    """df/dr."""
    q = r * r
    return 1.0 + q * (3.0 * k0 + q * (5.0 * k1 + q * (7.0 * k2 + q * 9.0 * k3)))


@kernel
def invert_radial(value, limit, k0, k1, k2, k3):  # type: ignore[no-untyped-def]
    """The r in [0, limit] with f(r) = value >= 0, by Newton steps inside a shrinking bracket; NaN if none."""
    if not value < math.inf:
        return math.nan
    low, high = 0.0, limit
    if limit < math.inf:
        top = radial_value(limit, k0, k1, k2, k3)
        if value >= top:
            return limit if value <= top * _EDGE else math.nan
    else:
        high = max(1.0, value)
        while radial_value(high, k0, k1, k2, k3) < value:
            high *= 2.0
    r = min(value, high)
    for _ in range(200):
        excess = radial_value(r, k0, k1, k2, k3) - value
        if excess > 0.0:
            high = r
        else:
            low = r
        slope = radial_slope(r, k0, k1, k2, k3)
        step = excess / slope if slope > 0.0 else math.inf
        if abs(excess) <= _EPSILON * value or abs(step) <= _EPSILON * r:
            break
        r -= step
        if not low < r < high:
            r = 0.5 * (low + high)
            if r in (low, high):
                break
    return r


@kernel
def distort(a, b, p):  # type: ignore[no-untyped-def]
    """Distorted (xd, yd) of the undistorted (a, b), and xx, xy, yy of the Jacobian, which is symmetric."""
    q = a * a + b * b
    p1, p2 = p[7], p[8]
    scale = 1.0 + q * (p[4] + q * (p[5] + q * p[6]))
    rate = 2.0 * (p[4] + q * (2.0 * p[5] + q * 3.0 * p[6]))  # d scale / d a = rate * a
    xd = a * scale + 2.0 * p1 * a * b + p2 * (q + 2.0 * a * a)
    yd = b * scale + p1 * (q + 2.0 * b * b) + 2.0 * p2 * a * b
    xx = scale + rate * a * a + 2.0 * p1 * b + 6.0 * p2 * a
    xy = rate * a * b + 2.0 * p1 * a + 2.0 * p2 * b
    yy = scale + rate * b * b + 6.0 * p1 * b + 2.0 * p2 * a
    return xd, yd, xx, xy, yy


@kernel
def perspective_project(points, p, limit, uv):  # type: ignore[no-untyped-def]
    """Fill uv (N, 2) px from points (N, 3)."""
    for i in range(points.shape[0]):
        uv[i, 0] = uv[i, 1] = math.nan
        z = points[i, 2]
        if z > 0.0:
            a, b = points[i, 0] / z, points[i, 1] / z
            if math.hypot(a, b) <= limit * _EDGE:
                xd, yd, _, _, _ = distort(a, b, p)
                uv[i, 0], uv[i, 1] = p[0] * xd + p[2], p[1] * yd + p[3]


@kernel
def perspective_jacobians(points, p, limit, uv, d_point, d_parameters):  # type: ignore[no-untyped-def]
    """Fill uv (N, 2), d_point (N, 2, 3) and d_parameters (N, 2, 9)."""
    for i in range(points.shape[0]):
        uv[i] = math.nan
        d_point[i] = math.nan
        d_parameters[i] = math.nan
        z = points[i, 2]
        if not z > 0.0:
            continue
        a, b = points[i, 0] / z, points[i, 1] / z
        if not math.hypot(a, b) <= limit * _EDGE:
            continue
        xd, yd, xx, xy, yy = distort(a, b, p)
        fx, fy = p[0], p[1]
        uv[i, 0], uv[i, 1] = fx * xd + p[2], fy * yd + p[3]
        d_point[i, 0, 0], d_point[i, 0, 1] = fx * xx / z, fx * xy / z
        d_point[i, 1, 0], d_point[i, 1, 1] = fy * xy / z, fy * yy / z
        d_point[i, 0, 2] = -fx * (a * xx + b * xy) / z
        d_point[i, 1, 2] = -fy * (a * xy + b * yy) / z
        d_parameters[i] = 0.0
        d_parameters[i, 0, 0], d_parameters[i, 1, 1] = xd, yd
        d_parameters[i, 0, 2] = d_parameters[i, 1, 3] = 1.0
        q = a * a + b * b
        power = q
        for k in range(3):
            d_parameters[i, 0, 4 + k], d_parameters[i, 1, 4 + k] = fx * a * power, fy * b * power
            power *= q
        d_parameters[i, 0, 7], d_parameters[i, 1, 7] = fx * 2.0 * a * b, fy * (q + 2.0 * b * b)
        d_parameters[i, 0, 8], d_parameters[i, 1, 8] = fx * (q + 2.0 * a * a), fy * 2.0 * a * b


@kernel
def _undistort_from(a, b, xd, yd, p):  # type: ignore[no-untyped-def]
    """Newton steps from (a, b) to distort = (xd, yd), halved until the residual falls; point and residual."""
    x, y, xx, xy, yy = distort(a, b, p)
    residual = math.hypot(xd - x, yd - y)
    for _ in range(60):
        det = xx * yy - xy * xy
        if residual == 0.0 or not det > 0.0:
            break
        ex, ey = xd - x, yd - y
        da, db = (yy * ex - xy * ey) / det, (xx * ey - xy * ex) / det
        moved = False
        for _ in range(30):
            x, y, xx, xy, yy = distort(a + da, b + db, p)
            trial = math.hypot(xd - x, yd - y)
            if trial < residual and xx * yy > xy * xy and xx + yy > 0.0:
                a, b, residual, moved = a + da, b + db, trial, True
                break
            da, db = 0.5 * da, 0.5 * db
        if not moved:
            break
    return a, b, residual


@kernel
def _undistort(xd, yd, p, limit, tolerance):  # type: ignore[no-untyped-def]
    """Undistorted (a, b) inside the limit, or NaN."""
    rho = math.hypot(xd, yd)
    if rho == 0.0:
        return 0.0, 0.0
    top = limit
    if limit < math.inf:
        top = 0.999 * limit
        rho = min(rho, radial_value(top, p[4], p[5], p[6], 0.0))
    radial = invert_radial(rho, limit, p[4], p[5], p[6], 0.0)
    scale = radial / math.hypot(xd, yd)
    a, b, residual = _undistort_from(scale * xd, scale * yd, xd, yd, p)
    if not residual <= tolerance:  # walk out from the axis, where the inverse is known
        a, b = 0.0, 0.0
        for k in range(1, 33):
            a, b, residual = _undistort_from(a, b, xd * k / 32.0, yd * k / 32.0, p)
    excess = math.hypot(a, b) / limit
    if excess > 1.0:  # on the rim the slope is nearly zero and rounding moves the point out: does the rim itself fit?
        a, b = a / excess, b / excess
        x, y, _, _, _ = distort(a, b, p)
        residual = math.hypot(xd - x, yd - y)
    if residual <= tolerance:
        return a, b
    return math.nan, math.nan


@kernel
def perspective_unproject(uv, p, limit, directions):  # type: ignore[no-untyped-def]
    """Fill unit directions (N, 3) from uv (N, 2) px."""
    radial_only = p[7] == 0.0 and p[8] == 0.0
    for i in range(uv.shape[0]):
        xd, yd = (uv[i, 0] - p[2]) / p[0], (uv[i, 1] - p[3]) / p[1]
        rho = math.hypot(xd, yd)
        if not rho < math.inf:
            a, b = math.nan, math.nan
        elif radial_only:
            scale = invert_radial(rho, limit, p[4], p[5], p[6], 0.0) / rho if rho > 0.0 else 1.0
            a, b = scale * xd, scale * yd
        else:
            tolerance = max(4e-11 / max(p[0], p[1]), 8.0 * _EPSILON * rho)  # first term: 4e-11 px
            a, b = _undistort(xd, yd, p, limit, tolerance)
        length = math.sqrt(1.0 + a * a + b * b)
        directions[i, 0], directions[i, 1], directions[i, 2] = a / length, b / length, 1.0 / length


@kernel
def _fisheye_point(x, y, z, p, limit):  # type: ignore[no-untyped-def]
    """Radius r, angle, and f(angle) / r of a camera point; the last is NaN where it has no picture."""
    r = math.hypot(x, y)
    angle = math.atan2(r, z)
    if r == 0.0:
        return r, angle, (1.0 / z if z > 0.0 else math.nan)
    if not angle <= limit * _EDGE:
        return r, angle, math.nan
    return r, angle, radial_value(angle, p[4], p[5], p[6], p[7]) / r


@kernel
def fisheye_project(points, p, limit, uv):  # type: ignore[no-untyped-def]
    """Fill uv (N, 2) px from points (N, 3)."""
    for i in range(points.shape[0]):
        x, y = points[i, 0], points[i, 1]
        _, _, gain = _fisheye_point(x, y, points[i, 2], p, limit)
        uv[i, 0], uv[i, 1] = p[0] * gain * x + p[2], p[1] * gain * y + p[3]


@kernel
def fisheye_jacobians(points, p, limit, uv, d_point, d_parameters):  # type: ignore[no-untyped-def]
    """Fill uv (N, 2), d_point (N, 2, 3) and d_parameters (N, 2, 8)."""
    for i in range(points.shape[0]):
        x, y, z = points[i, 0], points[i, 1], points[i, 2]
        r, angle, gain = _fisheye_point(x, y, z, p, limit)
        if math.isnan(gain):
            uv[i] = math.nan
            d_point[i] = math.nan
            d_parameters[i] = math.nan
            continue
        fx, fy = p[0], p[1]
        uv[i, 0], uv[i, 1] = fx * gain * x + p[2], fy * gain * y + p[3]
        nx, ny = (x / r, y / r) if r > 0.0 else (0.0, 0.0)
        square = r * r + z * z
        slope = radial_slope(angle, p[4], p[5], p[6], p[7])
        stretch = slope * z / square - gain  # radial minus tangential rate
        d_point[i, 0, 0], d_point[i, 0, 1] = fx * (gain + stretch * nx * nx), fx * stretch * nx * ny
        d_point[i, 1, 0], d_point[i, 1, 1] = fy * stretch * nx * ny, fy * (gain + stretch * ny * ny)
        d_point[i, 0, 2], d_point[i, 1, 2] = -fx * slope * x / square, -fy * slope * y / square
        d_parameters[i] = 0.0
        d_parameters[i, 0, 0], d_parameters[i, 1, 1] = gain * x, gain * y
        d_parameters[i, 0, 2] = d_parameters[i, 1, 3] = 1.0
        power = angle * angle * angle
        for k in range(4):
            d_parameters[i, 0, 4 + k], d_parameters[i, 1, 4 + k] = fx * power * nx, fy * power * ny
            power *= angle * angle


@kernel
def fisheye_unproject(uv, p, limit, directions):  # type: ignore[no-untyped-def]
    """Fill unit directions (N, 3) from uv (N, 2) px."""
    for i in range(uv.shape[0]):
        xd, yd = (uv[i, 0] - p[2]) / p[0], (uv[i, 1] - p[3]) / p[1]
        rho = math.hypot(xd, yd)
        angle = invert_radial(rho, limit, p[4], p[5], p[6], p[7])
        if math.isnan(angle):
            directions[i] = math.nan
            continue
        scale = math.sin(angle) / rho if rho > 0.0 else 1.0
        directions[i, 0], directions[i, 1], directions[i, 2] = scale * xd, scale * yd, math.cos(angle)
