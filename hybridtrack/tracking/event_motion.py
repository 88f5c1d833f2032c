"""The picture's common velocity from events alone: the one under which they gather best.

Events of a window are carried back along a candidate velocity to one instant and counted on a coarse grid, ON and OFF
apart; the sum of squared counts is largest where edges fall on themselves (contrast maximisation, Gallego et al.
2018). Windows double while the search narrows, as long as the motion stays straight: no velocity is too fast to start.
"""

from dataclasses import dataclass

import numpy as np

from hybridtrack.compiled import kernel
from hybridtrack.recording import Events

Array = np.ndarray

FIRST_WINDOW_NS = 1_500_000
WINDOWS = 4
FASTEST_PX_S = 6000.0  # frame px
MOST_EVENTS = 12_000
LEAST_EVENTS = 300
LEAST_GAIN = 1.15  # of the sum of squares over that of standing still, for a velocity to be believed


@kernel
def gathered(t_s: Array, u: Array, v: Array, on: Array, velocity: Array, cell: float, counts: Array) -> float:
    """Sum of squared counts of events (N,), `t_s` from the instant that they are carried to, under `velocity` (2,).

    `counts` (2, rows, columns) is room for the counts on cells of `cell` px.
    """
    counts[:] = 0.0
    rows, columns = counts.shape[1], counts.shape[2]
    for k in range(len(t_s)):
        a, b = (u[k] - velocity[0] * t_s[k]) / cell, (v[k] - velocity[1] * t_s[k]) / cell
        j, i = int(np.floor(a)), int(np.floor(b))
        if i < 0 or j < 0 or i >= rows - 1 or j >= columns - 1:
            continue
        a -= j
        b -= i
        p = on[k]
        counts[p, i, j] += (1.0 - a) * (1.0 - b)
        counts[p, i, j + 1] += a * (1.0 - b)
        counts[p, i + 1, j] += (1.0 - a) * b
        counts[p, i + 1, j + 1] += a * b
    total = 0.0
    for p in range(2):
        for i in range(rows):
            for j in range(columns):
                total += counts[p, i, j] * counts[p, i, j]
    return total


@kernel
def best_velocity(
    t_s: Array, u: Array, v: Array, on: Array, middle: Array, step: float, reach: int, cell: float, counts: Array,
    best: Array,
) -> float:  # fmt: skip
    """Search `2 reach + 1` squared velocities around `middle` (2,), `step` apart; fill `best` (2,), return its sum."""
    candidate, highest = np.zeros(2), -1.0
    for i in range(-reach, reach + 1):
        for j in range(-reach, reach + 1):
            candidate[0], candidate[1] = middle[0] + j * step, middle[1] + i * step
            total = gathered(t_s, u, v, on, candidate, cell, counts)
            if total > highest:
                highest = total
                best[0], best[1] = candidate[0], candidate[1]
    return highest


@dataclass(frozen=True)
class CommonMotion:
    """`velocity` (2,) frame px/s, the last search's `step` and by how much events gather better than standing still."""

    velocity: Array
    step: float
    gain: float


def common_motion(events: Events, frame_uv: Array, at_ns: int, cell_px: float) -> CommonMotion | None:
    """Velocity of the picture about `at_ns`, or None where events are few or gather about none.

    `frame_uv` (rows, columns, 2): where event pixels look, frame px; `cell_px` their pitch there.
    """
    height, width = (int(np.nanmax(frame_uv[..., axis]) / cell_px) + 3 for axis in (1, 0))
    counts, velocity, gain = np.zeros((2, height, width)), np.zeros(2), 0.0
    window_ns, step, reach = FIRST_WINDOW_NS, 0.0, 0
    for level in range(WINDOWS):
        near = slice(*np.searchsorted(events.t, [at_ns - window_ns // 2, at_ns + window_ns // 2]))
        if near.stop - near.start < LEAST_EVENTS:
            return None
        own = np.arange(near.start, near.stop)[:: max(1, (near.stop - near.start) // MOST_EVENTS)]
        # Pixels stand on a grid, where standing still would gather best: spread over a cell none is favoured.
        spread = np.random.default_rng(0).uniform(-0.5, 0.5, (len(own), 2)) * cell_px
        place = frame_uv[events.y[own], events.x[own]] + spread
        columns = ((events.t[own] - at_ns) * 1e-9, place[:, 0].copy(), place[:, 1].copy(), events.on[own])
        step = cell_px / (window_ns * 1e-9)
        reach = int(np.ceil(FASTEST_PX_S / step)) if level == 0 else 2
        middle = velocity.copy()
        highest = best_velocity(*columns, middle, step, reach, cell_px, counts, velocity)
        gain = highest / max(gathered(*columns, np.zeros(2), cell_px, counts), 1e-9)
        if np.linalg.norm(velocity) * window_ns * 1e-9 > 8.0 * cell_px:
            break
        window_ns *= 2
    return CommonMotion(velocity, step, gain) if gain >= LEAST_GAIN else None
