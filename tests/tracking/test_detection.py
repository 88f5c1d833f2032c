"""Corners in sharp pictures."""

import numpy as np

from hybridtrack.tracking.detection import detect_corners


def squares() -> np.ndarray:
    """Log light (120, 160) with bright squares whose corners lie at known places."""
    picture = np.full((120, 160), -2.0, np.float32)
    for v, u in ((30, 40), (30, 100), (80, 70)):
        picture[v : v + 20, u : u + 20] = -0.5
    return picture


def test_corners_of_squares_are_found() -> None:
    """All twelve corners of three squares are found, inside them by no more than half the block, and nothing else."""
    truth = [(u + a - 0.5, v + b - 0.5) for v, u in ((30, 40), (30, 100), (80, 70)) for a in (0, 20) for b in (0, 20)]
    found = detect_corners(squares(), np.ones((120, 160), np.float32), np.empty((0, 2)), 30, 8, 0.05)
    assert len(found) == 12
    distance = np.linalg.norm(found[:, None] - np.array(truth), axis=2)
    assert distance.min(axis=1).max() < 3.5


def test_taken_rim_saturated_and_flat_places_give_none() -> None:
    """No corner is found near one that is followed, in the margin, where light is saturated, or in a flat picture."""
    ones, picture = np.ones((120, 160), np.float32), squares()
    taken = np.array([[40.0, 30.0], [np.nan, np.nan]])
    found = detect_corners(picture, ones, taken, 30, 8, 0.05)
    assert np.linalg.norm(found - taken[0], axis=1).min() > 6
    assert np.all(detect_corners(picture, ones, np.empty((0, 2)), 30, 45, 0.05)[:, 1] >= 45)
    trust = ones.copy()
    trust[:60] = 0.0
    assert np.all(detect_corners(picture, trust, np.empty((0, 2)), 30, 8, 0.05)[:, 1] > 60)
    assert len(detect_corners(np.zeros((120, 160), np.float32), ones, np.empty((0, 2)), 30, 8, 0.05)) == 0


def test_few_corners_are_spread() -> None:
    """Asked for three, each square gives one before any gives a second."""
    found = detect_corners(squares(), np.ones((120, 160), np.float32), np.empty((0, 2)), 3, 8, 0.05)
    middles = np.array([[50.0, 40.0], [110.0, 40.0], [80.0, 90.0]])
    nearest = np.linalg.norm(found[:, None] - middles, axis=2).argmin(axis=1)
    assert len(found) == 3
    assert len(set(nearest.tolist())) >= 2
