"""Corners by the smaller eigenvalue of the structure tensor (Shi and Tomasi 1994), spread over a grid of cells."""

import cv2
import numpy as np

Array = np.ndarray


def corner_response(log_light: Array, trust: Array) -> Array:
    """Smaller eigenvalue (H, W) over a 7x7 block of log light smoothed a little, weighted by trust squared."""
    smooth = cv2.GaussianBlur(log_light, (0, 0), 1.0)
    response = cv2.cornerMinEigenVal(smooth, blockSize=7, ksize=3)
    worst = cv2.erode(trust, np.ones((7, 7), np.uint8))
    return response * worst**2


def refine(response: Array, rows: Array, columns: Array) -> Array:
    """Sub-pixel maxima (N, 2) as (u, v): a parabola through the neighbours on each axis."""
    positions = []
    for axis_row, axis_column in ((0, 1), (1, 0)):
        before = response[rows - axis_row, columns - axis_column]
        after = response[rows + axis_row, columns + axis_column]
        curve = before - 2.0 * response[rows, columns] + after
        shift = np.where(curve < 0, 0.5 * (before - after) / np.where(curve < 0, curve, 1.0), 0.0)
        positions.append(np.clip(shift, -0.5, 0.5))
    return np.stack([columns + positions[0], rows + positions[1]], axis=1)


def detect_corners(log_light: Array, trust: Array, taken: Array, count: int, margin: int, share: float) -> Array:
    """Up to `count` new corners (N, 2) as (u, v) frame px, strongest first within each cell of a grid.

    `log_light`, `trust` (H, W); `taken` (K, 2) positions that must not be found again; `margin` px kept clear of the
    rim; a corner needs `share` of the strong corners' response (95th percentile of the local maxima).
    """
    height, width = log_light.shape
    spacing = max(6.0, 0.6 * float(np.sqrt(height * width / max(count + len(taken), 1))))
    response = corner_response(log_light, trust)
    size = 2 * int(0.5 * spacing) + 1
    peaks = (response >= cv2.dilate(response, np.ones((size, size), np.uint8))) & (response > 0)
    free = np.zeros((height, width), np.uint8)
    free[margin : height - margin, margin : width - margin] = 1
    for u, v in taken:
        if np.isfinite(u) and np.isfinite(v):
            cv2.circle(free, (round(float(u)), round(float(v))), int(spacing), 0, -1)
    rows, columns = np.nonzero(peaks & (free > 0))
    if not len(rows):
        return np.empty((0, 2))
    strength = response[rows, columns]
    floor = share * np.percentile(response[peaks], 95.0)
    good = strength > floor
    rows, columns, strength = rows[good], columns[good], strength[good]
    return refine(response, rows, columns)[_spread(rows, columns, strength, taken, (height, width), count)]


def _spread(rows: Array, columns: Array, strength: Array, taken: Array, shape: tuple[int, int], count: int) -> Array:
    """Indices of up to `count` candidates: each cell's best first, cells with fewer features before fuller ones."""
    cell = max(1.0, float(np.sqrt(shape[0] * shape[1] / max(count + len(taken), 1))))
    across = int(shape[1] // cell) + 1
    cells = (rows // cell).astype(int) * across + (columns // cell).astype(int)
    held: dict[int, int] = {}
    for u, v in taken[np.isfinite(taken).all(axis=1)]:
        index = int(v // cell) * across + int(u // cell)
        held[index] = held.get(index, 0) + 1
    order = np.argsort(-strength, kind="stable")
    ranks = np.empty(len(order), int)
    for k in order:
        ranks[k] = held.get(int(cells[k]), 0)
        held[int(cells[k])] = ranks[k] + 1
    return np.lexsort((-strength, ranks))[:count]
