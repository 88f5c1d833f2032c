"""Crossings of a checkered picture."""

import numpy as np
import pytest
from scipy.ndimage import gaussian_filter

from hybridtrack.calibration.saddle_points import find_saddles


def checker(angle=0.3, size=18.0, shape=(120, 160), noise=0.0, blur=0.8):
    """A checker of ones and zeros turned by `angle` about (80, 60), and its crossings inside the picture."""
    y, x = np.mgrid[0 : shape[0] * 4, 0 : shape[1] * 4] / 4.0 - 0.375
    turn = np.array([[np.cos(angle), np.sin(angle)], [-np.sin(angle), np.cos(angle)]])
    a, b = np.einsum("ij,jhw->ihw", turn, np.stack([x - 80.3, y - 60.2]))
    fine = ((np.floor(a / size) + np.floor(b / size)) % 2 == 0).astype(float)
    fine = gaussian_filter(fine, blur * 4)
    picture = fine.reshape(shape[0], 4, shape[1], 4).mean((1, 3))
    picture += np.random.default_rng(0).normal(size=shape) * noise
    grid = np.stack(np.meshgrid(np.arange(-8, 9), np.arange(-8, 9)), -1).reshape(-1, 2) * size
    crossings = grid @ turn + [80.3, 60.2]
    inside = np.all((crossings > 9) & (crossings < np.array(shape[::-1]) - 10), axis=1)
    return picture, crossings[inside]


@pytest.mark.parametrize("angle", [0.0, 0.3, 0.78])
def test_every_crossing_is_found_to_a_tenth_of_a_pixel(angle):
    """All crossings away from the rim are found, and nothing else is."""
    picture, true = checker(angle, noise=0.02)
    found = find_saddles(picture, np.ones(picture.shape, bool), 1.2)
    distance = np.linalg.norm(found.xy[:, None] - true, axis=-1)
    assert np.all(distance.min(0) < 0.15)
    inner = np.all((found.xy > 9) & (found.xy < np.array([150, 110])), axis=1)
    assert np.all(distance.min(1)[inner] < 0.15)


def test_axes_are_the_edges_directions():
    """The two edges are told to a degree or two, whatever the roll."""
    picture, _ = checker(0.3)
    found = find_saddles(picture, np.ones(picture.shape, bool), 1.2)
    folded = np.mod(found.axes - 0.3 + np.pi / 4, np.pi / 2) - np.pi / 4
    assert np.abs(folded).max() < 0.04


def test_edges_blobs_and_noise_are_not_crossings():
    """A single edge, a disc and pure noise give no crossing."""
    y, x = np.mgrid[0:100, 0:100].astype(float)
    picture = (x > 30.5).astype(float) + (np.hypot(x - 70, y - 50) < 12)
    picture = gaussian_filter(picture, 0.8) + np.random.default_rng(1).normal(size=picture.shape) * 0.01
    assert len(find_saddles(picture, np.ones(picture.shape, bool), 1.2).xy) == 0


def test_nothing_is_found_beside_unknown_pixels():
    """Where rows of the picture are not known, no crossing is claimed."""
    picture, _ = checker()
    known = np.ones(picture.shape, bool)
    known[40:80] = False
    found = find_saddles(np.where(known, picture, 0.0), known, 1.2)
    assert len(found.xy) > 5
    assert np.all((found.xy[:, 1] < 40) | (found.xy[:, 1] > 79))
