"""Compiled loops of the light model: how much of each set of squares a pixel sees, blurred and averaged.

A board of sharp squares is blurred by a Gaussian point spread of `sigma` px and averaged over a pixel's aperture. Board
coordinates near a pixel are linear in the picture: `gradient` is d(board) / d(uv). Seen from a crossing of two edges,
the Gaussian in board coordinates has standard deviations sX, sY and correlation rho, and with x, y the distances from
the two edges in these units, the light is

    f = q00 + (q10 - q00) A + (q01 - q00) B + (q00 - q10 - q01 + q11) (A B + R)

with A = Phi(x), B = Phi(y), q the values of the four quadrants, and R the excess of the bivariate normal integral over
A B, by the tetrachoric series (Pearson 1900) sum rho^n / n! He_{n-1}(x) He_{n-1}(y) phi(x) phi(y), cut after n = 4:
edges up to 25 degrees off square leave an error under 1e-3. The aperture is averaged by quadrature nodes.
"""

import math

from hybridtrack.compiled import kernel

_ROOT_HALF = math.sqrt(0.5)
_NORMAL = 1.0 / math.sqrt(2.0 * math.pi)
_FLAT = 5.0  # further than this many deviations from every edge (plus the aperture), light is that of the square


@kernel
def _crossing(x, y, rho):  # type: ignore[no-untyped-def]
    """A, B, A B + R, phi(x), phi(y), and d(A B + R) by x and by y."""
    a = 0.5 * math.erfc(-x * _ROOT_HALF)
    b = 0.5 * math.erfc(-y * _ROOT_HALF)
    px = _NORMAL * math.exp(-0.5 * x * x)
    py = _NORMAL * math.exp(-0.5 * y * y)
    x2, y2 = x * x - 1.0, y * y - 1.0
    x3, y3 = x * (x2 - 2.0), y * (y2 - 2.0)
    x4, y4 = x * x3 - 3.0 * x2, y * y3 - 3.0 * y2
    r2, r3, r4 = rho * rho / 2.0, rho**3 / 6.0, rho**4 / 24.0
    p = px * py
    both = a * b + p * (rho + r2 * x * y + r3 * x2 * y2 + r4 * x3 * y3)
    both_x = px * b - p * (rho * x + r2 * x2 * y + r3 * x3 * y2 + r4 * x4 * y3)
    both_y = py * a - p * (rho * y + r2 * x * y2 + r3 * x2 * y3 + r4 * x3 * y4)
    return a, b, both, px, py, both_x, both_y


@kernel
def _padded(squares, row, column):  # type: ignore[no-untyped-def]
    """Value of a square; 0 outside the board."""
    if 0 <= row < squares.shape[0] and 0 <= column < squares.shape[1]:
        return squares[row, column]
    return 0.0


@kernel
def square_fractions(board, gradient, nodes, weights, kind, size, sigma, squares, out):  # type: ignore[no-untyped-def]
    """Fill `out` (N, 4): blurred value f of `squares`, d f / du, d f / dv, d f / d ln(sigma).

    `board` (N, 2) m, `gradient` (N, 2, 2) m/px, `nodes` (K, 2) px offsets of the aperture, `weights` (C, K) one set for
    each class of pixel, `kind` (N,) class of each pixel, `size` (2,) m of a square, `squares` (R, C) float.
    """
    reach = 0.0
    for k in range(nodes.shape[0]):
        reach = max(reach, math.hypot(nodes[k, 0], nodes[k, 1]))
    for n in range(board.shape[0]):
        gx0, gx1, gy0, gy1 = gradient[n, 0, 0], gradient[n, 0, 1], gradient[n, 1, 0], gradient[n, 1, 1]
        gx, gy = math.hypot(gx0, gx1), math.hypot(gy0, gy1)
        out[n] = math.nan
        if not (gx > 0.0 and gy > 0.0 and abs(board[n, 0]) < 1e6 and abs(board[n, 1]) < 1e6):
            continue
        rho = (gx0 * gy0 + gx1 * gy1) / (gx * gy)
        sx, sy = gx * sigma, gy * sigma
        i, j = math.floor(board[n, 0] / size[0] + 0.5), math.floor(board[n, 1] / size[1] + 0.5)
        x, y = board[n, 0] - i * size[0], board[n, 1] - j * size[1]
        q00, q10 = _padded(squares, j - 1, i - 1), _padded(squares, j - 1, i)
        q01, q11 = _padded(squares, j, i - 1), _padded(squares, j, i)
        far_x, far_y = abs(x) > gx * (_FLAT * sigma + reach), abs(y) > gy * (_FLAT * sigma + reach)
        out[n] = 0.0
        if far_x and far_y:
            if x < 0:
                out[n, 0] = q00 if y < 0 else q01
            else:
                out[n, 0] = q10 if y < 0 else q11
            continue
        d10, d01, d11 = q10 - q00, q01 - q00, q00 - q10 - q01 + q11
        if d10 == 0.0 and d01 == 0.0 and d11 == 0.0:
            out[n, 0] = q00
            continue
        for k in range(nodes.shape[0]):
            w = weights[kind[n], k]
            if w == 0.0:
                continue
            ex = (x + gx0 * nodes[k, 0] + gx1 * nodes[k, 1]) / sx
            ey = (y + gy0 * nodes[k, 0] + gy1 * nodes[k, 1]) / sy
            a, b, both, px, py, both_x, both_y = _crossing(ex, ey, rho)
            fx = d10 * px + d11 * both_x
            fy = d01 * py + d11 * both_y
            out[n, 0] += w * (q00 + d10 * a + d01 * b + d11 * both)
            out[n, 1] += w * (fx * gx0 / sx + fy * gy0 / sy)
            out[n, 2] += w * (fx * gx1 / sx + fy * gy1 / sy)
            out[n, 3] -= w * (fx * ex + fy * ey)


@kernel
def crossing_memberships(  # type: ignore[no-untyped-def]
    board, gradient, nodes, weights, kind, centre, shift, sigma, out
):
    """Fill `out` (N, 12) for pixels around one crossing: A, B, AB + R, and each one's d/du, d/dv, d/d ln(sigma).

    Order: A, B, AB, then A_u, A_v, A_s, B_u, B_v, B_s, AB_u, AB_v, AB_s, all averaged over the aperture. `centre` (2,)
    m is the crossing on the board; `shift` (2,) px moves the picture of the board; other arguments as in
    `square_fractions`.
    """
    for n in range(board.shape[0]):
        gx0, gx1, gy0, gy1 = gradient[n, 0, 0], gradient[n, 0, 1], gradient[n, 1, 0], gradient[n, 1, 1]
        gx, gy = math.hypot(gx0, gx1), math.hypot(gy0, gy1)
        rho = (gx0 * gy0 + gx1 * gy1) / (gx * gy)
        sx, sy = gx * sigma, gy * sigma
        x = board[n, 0] - centre[0] - gx0 * shift[0] - gx1 * shift[1]
        y = board[n, 1] - centre[1] - gy0 * shift[0] - gy1 * shift[1]
        out[n] = 0.0
        for k in range(nodes.shape[0]):
            w = weights[kind[n], k]
            if w == 0.0:
                continue
            ex = (x + gx0 * nodes[k, 0] + gx1 * nodes[k, 1]) / sx
            ey = (y + gy0 * nodes[k, 0] + gy1 * nodes[k, 1]) / sy
            a, b, both, px, py, both_x, both_y = _crossing(ex, ey, rho)
            out[n, 0] += w * a
            out[n, 1] += w * b
            out[n, 2] += w * both
            out[n, 3] += w * px * gx0 / sx
            out[n, 4] += w * px * gx1 / sx
            out[n, 5] -= w * px * ex
            out[n, 6] += w * py * gy0 / sy
            out[n, 7] += w * py * gy1 / sy
            out[n, 8] -= w * py * ey
            out[n, 9] += w * (both_x * gx0 / sx + both_y * gy0 / sy)
            out[n, 10] += w * (both_x * gx1 / sx + both_y * gy1 / sy)
            out[n, 11] -= w * (both_x * ex + both_y * ey)
