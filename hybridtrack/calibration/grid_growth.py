"""From saddle points to a grid: neighbours along edges, each predicted from those already found.

Neighbouring crossings of a checker alternate: between the same two directions one has a bright square, the next a dark
one. A candidate that breaks this, or lies off its predicted place, does not join.
"""

from dataclasses import dataclass, field

import numpy as np

from hybridtrack.calibration.saddle_points import Saddles

Array = np.ndarray

_STEPS = ((1, 0), (0, 1), (-1, 0), (0, -1))
_CONE = np.cos(np.radians(22.0))
_OFF = 0.22  # of a square: how far off its predicted place a crossing may lie
_LEAST = 6
_STRETCH = 1.7  # how much longer than the shortest known step at a crossing an unpredicted one may be


@dataclass
class Grid:
    """Crossings by their place (a, b), whose first axis leads to the second by a turn from x to y."""

    index: dict[tuple[int, int], int] = field(default_factory=dict)
    frames: dict[tuple[int, int], Array] = field(default_factory=dict)

    def places(self) -> Array:
        """(N, 2) int."""
        return np.array(list(self.index), dtype=int).reshape(-1, 2)

    def members(self) -> Array:
        """Indices (N,) of the saddles, in the order of `places`."""
        return np.array(list(self.index.values()), dtype=int)


def _local_frame(saddles: Saddles, n: int, like: Array | None) -> tuple[Array, bool]:
    """Unit directions (2, 2), rows the two axes, and whether the quadrant between them is bright.

    With `like` the axes are those nearest to it.
    """
    first, second = saddles.axes[n]
    edge = np.array([[np.cos(first), np.sin(first)], [np.cos(second), np.sin(second)]])
    if like is None:
        return edge, True
    options = []
    for turned, bright in ((edge, True), (np.array([edge[1], -edge[0]]), False)):
        for sign in (1.0, -1.0):
            options.append((float(np.sum(sign * turned * like)), sign * turned, bright))
    _, frame, bright = max(options, key=lambda option: option[0])
    return frame, bright


def _predicted_step(grid: Grid, xy: Array, place: tuple[int, int], step: tuple[int, int]) -> Array | None:
    """The step from a crossing to its neighbour, from steps already known: straight on, or beside."""
    at = xy[grid.index[place]]
    back = (place[0] - step[0], place[1] - step[1])
    if back in grid.index:
        return np.asarray(at - xy[grid.index[back]])
    for side in ((step[1], step[0]), (-step[1], -step[0])):
        beside = (place[0] + side[0], place[1] + side[1])
        across = (beside[0] + step[0], beside[1] + step[1])
        if beside in grid.index and across in grid.index:
            return np.asarray(xy[grid.index[across]] - xy[grid.index[beside]])
    return None


def _nearest_along(xy: Array, at: Array, axes: Array, step: tuple[int, int]) -> int | None:
    """The nearest crossing in a cone about `step` along the local axes, unless others lie much nearer in theirs.

    Without that condition a gap in the board (a steady dark square) would be stepped over as if it were one square.
    """
    offset = xy - at
    distance = np.linalg.norm(offset, axis=1)
    nearest: dict[tuple[int, int], int] = {}
    for each in _STEPS:
        with np.errstate(invalid="ignore", divide="ignore"):
            inside = (offset @ (each[0] * axes[0] + each[1] * axes[1])) / distance > _CONE
        if inside.any():
            nearest[each] = int(np.flatnonzero(inside)[np.argmin(distance[inside])])
    if step not in nearest:
        return None
    shortest = min(distance[n] for n in nearest.values())
    return nearest[step] if distance[nearest[step]] <= _STRETCH * shortest else None


def grow_grid(saddles: Saddles, seed: int, blocked: set[int]) -> Grid:
    """Grow a grid from one crossing, leaving out those in `blocked`."""
    grid, xy = Grid(), saddles.xy
    frame, _ = _local_frame(saddles, seed, None)
    grid.index[(0, 0)], grid.frames[(0, 0)] = seed, frame
    taken, queue = set(blocked) | {seed}, [(0, 0)]
    while queue:
        place = queue.pop(0)
        at, axes = xy[grid.index[place]], grid.frames[place]
        for step in _STEPS:
            target = (place[0] + step[0], place[1] + step[1])
            if target in grid.index:
                continue
            predicted = _predicted_step(grid, xy, place, step)
            if predicted is None:
                candidate = _nearest_along(xy, at, axes, step)
            else:
                offset = np.linalg.norm(xy - at - predicted, axis=1)
                candidate = int(np.argmin(offset))
                if offset[candidate] > _OFF * np.linalg.norm(predicted):
                    candidate = None
            if candidate is None or candidate in taken:
                continue
            frame, bright = _local_frame(saddles, candidate, axes)
            # Seed: bright between its axes. Even places repeat it, odd ones have it dark.
            if bright != ((target[0] + target[1]) % 2 == 0) or float(np.min(np.sum(frame * axes, axis=1))) < 0.85:
                continue
            grid.index[target], grid.frames[target] = candidate, frame
            taken.add(candidate)
            queue.append(target)
    return grid


def _unbent(grid: Grid, xy: Array) -> Grid:
    """The grid without crossings that lie off the middle of two opposite neighbours."""
    bad = set()
    for place, n in grid.index.items():
        for step in ((1, 0), (0, 1)):
            ahead, back = (place[0] + step[0], place[1] + step[1]), (place[0] - step[0], place[1] - step[1])
            if ahead in grid.index and back in grid.index:
                a, b = xy[grid.index[ahead]], xy[grid.index[back]]
                if np.linalg.norm(a + b - 2.0 * xy[n]) > 0.25 * np.linalg.norm(a - b):
                    bad.add(place)
    keep = {place: n for place, n in grid.index.items() if place not in bad}
    return Grid(keep, {place: grid.frames[place] for place in keep})


def largest_grid(saddles: Saddles, attempts: int = 12) -> Grid:
    """The largest of the grids grown from up to `attempts` seeds, strong crossings first; may be empty."""
    best, tried = Grid(), set()
    for seed in np.argsort(-saddles.contrast, kind="stable"):
        if int(seed) in tried or attempts == 0:
            continue
        attempts -= 1
        grid = _unbent(grow_grid(saddles, int(seed), set()), saddles.xy)
        tried |= set(grid.index.values()) | {int(seed)}
        if len(grid.index) > len(best.index):
            best = grid
    return best if len(best.index) >= _LEAST else Grid()
