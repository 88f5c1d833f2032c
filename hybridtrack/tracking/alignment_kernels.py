"""Align templates to pictures: inverse-compositional Lucas-Kanade (Baker and Matthews 2004) in log light.

The warp takes a template position x, counted from the feature, to the picture: W(x) = p + A x. Increments live in the
template, dW(x) = x + d + D x, so that derivatives come from the template's slopes: J = [s, s x^T, 1] for (d, D, log
gain). After each step W <- W o dW^-1: A <- A (I + D)^-1, p <- p - A d. A quadratic prior on A^-1 A_before keeps
the shape where the patch does not support it.
"""

import numpy as np

from hybridtrack.compiled import kernel

Array = np.ndarray
UNKNOWNS = 7  # d (2), D by rows (4), log gain


@kernel
def bilinear(picture: Array, u: float, v: float) -> float:
    """Value of an (H, W) picture at column `u`, row `v`; NaN outside."""
    rows, columns = picture.shape
    i, j = int(np.floor(v)), int(np.floor(u))
    if i < 0 or j < 0 or i >= rows - 1 or j >= columns - 1:
        return np.nan
    a, b = v - i, u - j
    top = (1.0 - b) * picture[i, j] + b * picture[i, j + 1]
    bottom = (1.0 - b) * picture[i + 1, j] + b * picture[i + 1, j + 1]
    return (1.0 - a) * top + a * bottom


@kernel
def cubic_weights(f: float, out: Array) -> None:
    """Four weights of cubic convolution at fraction `f` (Keys 1981, a = -1/2)."""
    out[0] = ((-0.5 * f + 1.0) * f - 0.5) * f
    out[1] = (1.5 * f - 2.5) * f * f + 1.0
    out[2] = ((-1.5 * f + 2.0) * f + 0.5) * f
    out[3] = (0.5 * f - 0.5) * f * f


@kernel
def bicubic(picture: Array, u: float, v: float, wu: Array, wv: Array) -> float:
    """Value of an (H, W) picture at column `u`, row `v` by cubic convolution; NaN outside."""
    rows, columns = picture.shape
    i, j = int(np.floor(v)) - 1, int(np.floor(u)) - 1
    if i < 0 or j < 0 or i >= rows - 3 or j >= columns - 3:
        return np.nan
    cubic_weights(u - j - 1, wu)
    cubic_weights(v - i - 1, wv)
    w0, w1, w2, w3 = wu[0], wu[1], wu[2], wu[3]
    total = 0.0
    for a in range(4):
        line = picture[i + a]
        total += wv[a] * (w0 * line[j] + w1 * line[j + 1] + w2 * line[j + 2] + w3 * line[j + 3])
    return total


@kernel
def cut_patch(picture: Array, u: float, v: float, out: Array) -> tuple[float, float]:
    """Copy the (S, S) patch on the grid around the pixel nearest to (u, v), edges repeated.

    Returns where (u, v) lies in it, from the patch's middle.
    """
    rows, columns = picture.shape
    size = out.shape[0]
    j0, i0 = int(np.rint(u)), int(np.rint(v))
    half = size // 2
    for a in range(size):
        i = min(max(i0 + a - half, 0), rows - 1)
        for b in range(size):
            out[a, b] = picture[i, min(max(j0 + b - half, 0), columns - 1)]
    return u - j0, v - i0


@kernel
def with_slopes(values: Array, out: Array) -> None:
    """Write a patch (S, S) and its central differences to `out` (S, S, 3); one-sided at the rim."""
    size = values.shape[0]
    for i in range(size):
        for j in range(size):
            left, right = max(j - 1, 0), min(j + 1, size - 1)
            above, below = max(i - 1, 0), min(i + 1, size - 1)
            out[i, j, 0] = values[i, j]
            out[i, j, 1] = (values[i, right] - values[i, left]) / (right - left)
            out[i, j, 2] = (values[below, j] - values[above, j]) / (below - above)


@kernel
def smear(values: Array, shifts: Array, out: Array) -> None:
    """Mean of a log-light patch (S, S) over shifts (K, 2) px in linear light, back in log light, to `out` (S, S).

    What a moving feature's exposure looks like: at time k the template lies `shifts[k]` from where it is at the middle.
    """
    size = values.shape[0]
    light = np.exp(values)
    out[:] = 0.0
    for k in range(len(shifts)):
        for i in range(size):
            v = min(max(i - shifts[k, 1], 0.0), size - 1.001)
            a = int(v)
            fa = v - a
            for j in range(size):
                u = min(max(j - shifts[k, 0], 0.0), size - 1.001)
                b = int(u)
                fb = u - b
                top = (1.0 - fb) * light[a, b] + fb * light[a, b + 1]
                bottom = (1.0 - fb) * light[a + 1, b] + fb * light[a + 1, b + 1]
                out[i, j] += (1.0 - fa) * top + fa * bottom
    for i in range(size):
        for j in range(size):
            out[i, j] = np.log(out[i, j] / len(shifts))


@kernel
def solve(a: Array, b: Array) -> None:
    """Solve a symmetric positive definite system (N, N) in place of the right sides `b` (N, K); `a` is overwritten."""
    n = len(a)
    for i in range(n):
        for k in range(i + 1, n):
            factor = a[k, i] / a[i, i]
            for j in range(i, n):
                a[k, j] -= factor * a[i, j]
            for j in range(b.shape[1]):
                b[k, j] -= factor * b[i, j]
    for i in range(n - 1, -1, -1):
        for j in range(b.shape[1]):
            for k in range(i + 1, n):
                b[i, j] -= a[i, k] * b[k, j]
            b[i, j] /= a[i, i]


@kernel
def newton_step(h: Array, g: Array, with_shape: bool, step: Array) -> None:
    """Solve the normal equations (7, 7) to `step` (7,); without the shape's four unknowns where asked."""
    n = UNKNOWNS if with_shape else 3
    small, right = np.zeros((n, n)), np.zeros((n, 1))
    for i in range(n):
        row = i if with_shape or i < 2 else UNKNOWNS - 1
        right[i, 0] = g[row]
        for k in range(n):
            small[i, k] = h[row, k if with_shape or k < 2 else UNKNOWNS - 1]
    solve(small, right)
    step[:] = 0.0
    for i in range(n):
        step[i if with_shape or i < 2 else UNKNOWNS - 1] = right[i, 0]


@kernel
def position_covariance(h: Array, a: Array, sigma: float, with_shape: bool, out: Array) -> None:
    """Covariance uu, uv, vv of p to `out[:3]`: the inverse of the normal equations (7, 7), from template to picture."""
    n = UNKNOWNS if with_shape else 3
    small, right = np.zeros((n, n)), np.zeros((n, 2))
    right[0, 0] = right[1, 1] = 1.0
    for i in range(n):
        for k in range(n):
            row = i if with_shape or i < 2 else UNKNOWNS - 1
            small[i, k] = h[row, k if with_shape or k < 2 else UNKNOWNS - 1]
    solve(small, right)
    c00, c01, c11 = right[0, 0], 0.5 * (right[0, 1] + right[1, 0]), right[1, 1]
    s = sigma * sigma
    out[0] = s * (a[0, 0] ** 2 * c00 + 2.0 * a[0, 0] * a[0, 1] * c01 + a[0, 1] ** 2 * c11)
    out[1] = s * (a[0, 0] * a[1, 0] * c00 + (a[0, 0] * a[1, 1] + a[0, 1] * a[1, 0]) * c01 + a[0, 1] * a[1, 1] * c11)
    out[2] = s * (a[1, 0] ** 2 * c00 + 2.0 * a[1, 0] * a[1, 1] * c01 + a[1, 1] ** 2 * c11)


@kernel
def gather(
    picture: Array,
    trust: Array,
    template: Array,
    offset: Array,
    radius: float,
    p: Array,
    a: Array,
    gain: float,
    sigma: float,
    h: Array,
    g: Array,
    wu: Array,
    wv: Array,
) -> Array:
    """One iteration's normal equations `h` (7, 7), `g` (7,), robust by Cauchy weights.

    Returns sums: weights, weighted squared residuals, weighted I, T, II, TT, IT, and the full patch's weight.
    """
    sums = np.zeros(8)
    jac = np.zeros(UNKNOWNS)
    h[:], g[:] = 0.0, 0.0
    size = template.shape[0]
    middle = (size - 1) // 2
    for i in range(size):
        y = i - middle - offset[1]
        for j in range(size):
            x = j - middle - offset[0]
            reach = max(abs(x), abs(y))
            if reach > radius:
                continue
            taper = min(1.0, radius - reach)
            sums[7] += taper
            u, v = p[0] + a[0, 0] * x + a[0, 1] * y, p[1] + a[1, 0] * x + a[1, 1] * y
            value = bicubic(picture, u, v, wu, wv)
            if np.isnan(value):
                continue
            weight = taper * bilinear(trust, u, v)
            t = template[i, j, 0]
            residual = value - t - gain
            scaled = residual / (2.5 * sigma)
            robust = weight / (1.0 + scaled * scaled)
            s_u, s_v = template[i, j, 1], template[i, j, 2]
            jac[0], jac[1] = s_u, s_v
            jac[2], jac[3], jac[4], jac[5], jac[6] = s_u * x, s_u * y, s_v * x, s_v * y, 1.0
            for k in range(UNKNOWNS):
                g[k] += robust * jac[k] * residual
                for n in range(k + 1):
                    h[k, n] += robust * jac[k] * jac[n]
            sums[0] += weight
            sums[1] += weight * min(residual * residual, 9.0 * sigma * sigma)
            sums[2] += weight * value
            sums[3] += weight * t
            sums[4] += weight * value * value
            sums[5] += weight * t * t
            sums[6] += weight * value * t
    for k in range(UNKNOWNS):
        for n in range(k):
            h[n, k] = h[k, n]
    return sums


@kernel
def correlation(sums: Array) -> float:
    """Weighted correlation of picture and template from the sums of `gather`."""
    w = max(sums[0], 1e-9)
    mean_i, mean_t = sums[2] / w, sums[3] / w
    var_i, var_t = sums[4] / w - mean_i * mean_i, sums[5] / w - mean_t * mean_t
    return (sums[6] / w - mean_i * mean_t) / np.sqrt(max(var_i * var_t, 1e-12))


@kernel
def add_shape_prior(before: Array, a: Array, weight: float, h: Array, g: Array) -> None:
    """Hold the shape near where it started: an increment D takes the deviation before^-1 A - I back by about D."""
    determinant = before[0, 0] * before[1, 1] - before[0, 1] * before[1, 0]
    for k in range(2):
        first = (before[1, 1] * a[0, k] - before[0, 1] * a[1, k]) / determinant
        second = (before[0, 0] * a[1, k] - before[1, 0] * a[0, k]) / determinant
        g[2 + k] += weight * (first - (1.0 if k == 0 else 0.0))
        g[4 + k] += weight * (second - (1.0 if k == 1 else 0.0))
    for k in range(2, 6):
        h[k, k] += weight


@kernel
def compose(p: Array, a: Array, step: Array) -> None:
    """W <- W o dW^-1, in place: A <- A (I + D)^-1, p <- p - A d."""
    d00, d01, d10, d11 = 1.0 + step[2], step[3], step[4], 1.0 + step[5]
    determinant = d00 * d11 - d01 * d10
    for i in range(2):
        left, right = a[i, 0], a[i, 1]
        a[i, 0] = (left * d11 - right * d10) / determinant
        a[i, 1] = (right * d00 - left * d01) / determinant
        p[i] -= a[i, 0] * step[0] + a[i, 1] * step[1]


@kernel
def align(
    picture: Array,
    trust: Array,
    template: Array,
    offset: Array,
    radius: float,
    p: Array,
    a: Array,
    shape_sigma: float,
    iterations: int,
    out: Array,
) -> bool:
    """Align one template (S, S, 3) to log light (H, W), from the warp in `p` (2,) and `a` (2, 2), in place.

    `trust` (H, W) weighs pixels; `shape_sigma` is the shape's expected change since `a`, 0: keep it. Writes to `out`:
    covariance uu, uv, vv of p (px^2, residual as measured, neighbours taken as independent), correlation, share of
    the patch that was used, RMS residual, log gain. Returns whether it converged.
    """
    h, g = np.zeros((UNKNOWNS, UNKNOWNS)), np.zeros(UNKNOWNS)
    wu, wv, step = np.zeros(4), np.zeros(4), np.zeros(UNKNOWNS)
    before = a.copy()
    sums = gather(picture, trust, template, offset, radius, p, a, 0.0, 1.0, h, g, wu, wv)
    # The log gain starts at its best value, so that the first residuals measure the misfit of pattern.
    gain = (sums[2] - sums[3]) / max(sums[0], 1e-9)
    sigma, converged, prior = 0.3, False, 0.0
    out[:] = 0.0
    for iteration in range(iterations + 1):
        sums = gather(picture, trust, template, offset, radius, p, a, gain, sigma, h, g, wu, wv)
        if sums[0] < 0.2 * sums[7] or h[0, 0] * h[1, 1] - h[0, 1] ** 2 <= 1e-9 * h[6, 6] ** 2:
            out[4] = sums[0] / max(sums[7], 1e-9)
            return False
        sigma = max(np.sqrt(sums[1] / sums[0]), 0.004)
        if shape_sigma > 0.0:
            prior = (sigma / shape_sigma) ** 2
            add_shape_prior(before, a, prior, h, g)
        if converged or iteration == iterations:
            break
        with_shape = shape_sigma > 0.0 and iteration >= 2
        newton_step(h, g, with_shape, step)
        length = np.hypot(step[0], step[1])
        if length > 2.0:
            for k in range(UNKNOWNS):
                step[k] *= 2.0 / length
        if abs((1.0 + step[2]) * (1.0 + step[5]) - step[3] * step[4]) < 0.2:
            return False
        compose(p, a, step)
        gain += step[6]
        converged = length < 0.003 and (shape_sigma == 0.0 or iteration >= 3)
    position_covariance(h, a, sigma, shape_sigma > 0.0, out)
    out[3], out[4], out[5], out[6] = correlation(sums), sums[0] / sums[7], sigma, gain
    return converged or length < 0.03
