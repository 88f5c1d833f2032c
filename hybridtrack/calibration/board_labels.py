"""Which corner of the board is which: a grid of crossings laid onto the target's pattern.

A grid may lie on the board in four rotations and at many offsets (never mirrored: the frame shows the board's front).
Each asks certain squares to blink with set A, with set B, or not at all, and the squares around the board to be still;
what the picture shows there decides. The answer must be clear, or there is none.
"""

from dataclasses import dataclass

import numpy as np
from scipy.ndimage import gaussian_filter, map_coordinates, minimum_filter

from hybridtrack.calibration.grid_growth import Grid
from hybridtrack.calibration.saddle_points import Saddles
from hybridtrack.module import Target

Array = np.ndarray

_TURNS = tuple(np.array(m) for m in ([[1, 0], [0, 1]], [[0, -1], [1, 0]], [[-1, 0], [0, -1]], [[0, 1], [-1, 0]]))
_WRONG_SHARE = 0.03
_LEAD = 2  # cells by which the answer must beat the next one
_OUTSIDE_COST = 2


@dataclass(frozen=True)
class Cells:
    """What squares of a grid do: `places` (M, 2) of their first corner, `blink` (M,) 1, 0 or -1."""

    places: Array
    blink: Array


@dataclass(frozen=True)
class Labelling:
    """`ij` (N, 2) of each crossing, in the order of the grid's places; (0, 0) where off the board. `wrong`: squares
    that contradict it; `lead`: by how many more the next best labelling is contradicted; `half_turn_lead`: same, for
    the board turned by half."""

    ij: Array
    wrong: int
    lead: int
    half_turn_lead: int
    cells: int


def _step_vectors(grid: Grid, xy: Array) -> dict[tuple[int, int], Array]:
    """Steps (2, 2) in px from each crossing to its next along each axis, where a neighbour is known on either side."""
    steps = {}
    for place, n in grid.index.items():
        rows = []
        for axis in ((1, 0), (0, 1)):
            ahead, back = (place[0] + axis[0], place[1] + axis[1]), (place[0] - axis[0], place[1] - axis[1])
            found = []
            if ahead in grid.index:
                found.append(xy[grid.index[ahead]] - xy[n])
            if back in grid.index:
                found.append(xy[n] - xy[grid.index[back]])
            rows.append(np.mean(found, axis=0) if found else None)
        if rows[0] is not None and rows[1] is not None:
            steps[place] = np.array(rows)
    return steps


def read_cells(grid: Grid, saddles: Saddles, picture: Array, known: Array, counterphase: bool) -> Cells:
    """Read what squares around the crossings do, one ring of squares beyond them included, from `picture` (H, W)
    where it is `known` (H, W)."""
    solid = minimum_filter(known, 7)
    steps = _step_vectors(grid, saddles.xy)
    smooth = gaussian_filter(picture, 1.5, mode="nearest")
    gathered: dict[tuple[int, int], list[tuple[float, float, float, float]]] = {}
    for place, step in steps.items():
        n = grid.index[place]
        amplitude = saddles.contrast[n] / (2.0 if counterphase else 1.0)
        for da in (-2, -1, 0, 1):
            for db in (-2, -1, 0, 1):
                offset = np.array([da + 0.5, db + 0.5])
                x, y = saddles.xy[n] + offset @ step
                if 1 <= x <= picture.shape[1] - 2 and 1 <= y <= picture.shape[0] - 2:
                    distance = float(offset @ offset)
                    gathered.setdefault((place[0] + da, place[1] + db), []).append((distance, x, y, amplitude))
    places, blink = [], []
    for place, votes in gathered.items():
        near = [v for v in votes if v[0] <= min(vote[0] for vote in votes) + 1e-6]
        x, y, amplitude = np.mean([v[1:] for v in near], axis=0)
        if not solid[round(y), round(x)]:
            continue
        value = float(map_coordinates(smooth, [[y], [x]], order=1)[0]) / amplitude
        if 0.35 < abs(value) < 0.6:
            continue
        places.append(place)
        blink.append(int(np.sign(value)) if abs(value) >= 0.6 else 0)
    return Cells(np.array(places, dtype=int).reshape(-1, 2), np.array(blink, dtype=int))


def _expected(target: Target) -> Array:
    """Square sets with a wide still margin, so that any cell can be looked up."""
    return np.pad(target.square_sets().astype(int), max(target.columns, target.rows) + 4)


def label_grid(grid: Grid, cells: Cells, target: Target) -> Labelling | None:
    """Find the labelling that the squares agree with; None where none does, or where another does nearly as well."""
    places, pad = grid.places(), max(target.columns, target.rows) + 4
    if len(places) == 0 or len(cells.places) == 0:
        return None
    expected = _expected(target)
    scored: list[tuple[int, int, Array]] = []
    for turn, matrix in enumerate(_TURNS):
        corners = places @ matrix.T
        middles = np.floor((cells.places + 0.5) @ matrix.T).astype(int)
        low, high = corners.min(0), corners.max(0)
        for i in range(2 - (high[0] - low[0]), target.columns - 1):
            for j in range(2 - (high[1] - low[1]), target.rows - 1):
                offset = np.array([i, j]) - low
                ij = corners + offset
                on_board = np.all((ij >= 1) & (ij <= [target.columns - 1, target.rows - 1]), axis=1)
                if on_board.mean() < 0.9:
                    continue
                at = np.clip(middles + offset + pad, 0, np.array(expected.shape)[::-1] - 1)
                wrong = int(np.sum(expected[at[:, 1], at[:, 0]] != cells.blink))
                wrong += _OUTSIDE_COST * int(np.sum(~on_board))
                scored.append((wrong, turn, np.where(on_board[:, None], ij, 0)))
    if not scored:
        return None
    scored.sort(key=lambda entry: entry[0])
    wrong, turn, ij = scored[0]
    if wrong > max(1.0, _WRONG_SHARE * len(cells.blink)):
        return None
    lead = scored[1][0] - wrong if len(scored) > 1 else len(cells.blink)
    turned = [entry[0] for entry in scored if entry[1] == (turn + 2) % 4]
    if lead < _LEAD:
        return None
    return Labelling(ij, wrong, lead, min(turned) - wrong if turned else len(cells.blink), len(cells.blink))
