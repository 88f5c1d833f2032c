"""Saddle points of a checkered picture: where four squares meet.

Smoothed, a crossing of two edges between squares of alternating light is a saddle: the Hessian has determinant
-(c / (pi s^2))^2 for contrast c and blur s, and edges have none. Candidates are the maxima of its root, in units of the
local contrast; a ring around each must alternate four times between bright and dark.
"""

from dataclasses import dataclass

import numpy as np
from scipy.ndimage import gaussian_filter, map_coordinates, maximum_filter, minimum_filter

Array = np.ndarray

_RESPONSE = 0.25  # of what a sharp crossing would give
_CONTRAST = 0.12  # of the picture's contrast
_RING = 32
_PURITY = 0.72  # share of the ring's variation that alternates four times


@dataclass(frozen=True)
class Saddles:
    """`xy` (N, 2) frame px; `axes` (N, 2) rad: directions of the two edges, the second the first one turned by 45 to
    135 degrees, with bright squares between them; `contrast` (N,) bright minus dark."""

    xy: Array
    axes: Array
    contrast: Array


def _derivatives(picture: Array, sigma: float) -> dict[str, Array]:
    orders = {"": (0, 0), "x": (0, 1), "y": (1, 0), "xx": (0, 2), "xy": (1, 1), "yy": (2, 0)}
    return {name: gaussian_filter(picture, sigma, order=order, mode="nearest") for name, order in orders.items()}


def _refined(d: dict[str, Array], rows: Array, columns: Array) -> tuple[Array, Array]:
    """Sub-pixel saddle (N, 2) by one Newton step on the smoothed picture, and whether it stayed near."""
    g = {name: value[rows, columns] for name, value in d.items()}
    det = g["xx"] * g["yy"] - g["xy"] ** 2
    dx = -(g["yy"] * g["x"] - g["xy"] * g["y"]) / det
    dy = -(g["xx"] * g["y"] - g["xy"] * g["x"]) / det
    near = (np.abs(dx) < 1.5) & (np.abs(dy) < 1.5)
    return np.stack([columns + dx, rows + dy], axis=-1), near


def _ring_values(picture: Array, xy: Array, radius: float) -> Array:
    """Picture along a ring (N, RING) around each point."""
    angle = 2.0 * np.pi * np.arange(_RING) / _RING
    x = xy[:, :1] + radius * np.cos(angle)
    y = xy[:, 1:] + radius * np.sin(angle)
    return np.asarray(map_coordinates(picture, [y, x], order=1, mode="nearest"))


def _edge_axes(ring: Array) -> Array:
    """Directions (N, 2) in [0, pi) of the two edges from zero crossings of the ring; NaN where there are not four.

    Bright lies between the first and the second, turning from x to y.
    """
    level = ring - 0.5 * (ring.max(1) + ring.min(1))[:, None]
    following = np.roll(level, -1, axis=1)
    axes = np.full((len(ring), 2), np.nan)
    step = 2.0 * np.pi / _RING
    for n in range(len(ring)):
        at = np.flatnonzero((level[n] >= 0) != (following[n] >= 0))
        if len(at) != 4:
            continue
        angle = step * (at + level[n, at] / (level[n, at] - following[n, at]))
        if following[n, at[0]] < 0:  # start with a crossing from dark to bright
            angle = np.roll(angle, -1)
        opposite = np.mod(angle[2:] - angle[:2], 2.0 * np.pi)
        if np.any(np.abs(opposite - np.pi) > 0.6):
            continue
        axes[n] = angle[:2] + 0.5 * (opposite - np.pi)
    first = np.mod(axes[:, 0], np.pi)
    return np.stack([first, first + np.mod(axes[:, 1] - axes[:, 0], np.pi)], axis=-1)


def _alternating(ring: Array) -> Array:
    """Share (N,) of the ring's variation in its second harmonic and that one's odd multiples."""
    spectrum = np.abs(np.fft.rfft(ring, axis=1)) ** 2
    total = spectrum[:, 1:].sum(1)
    return (spectrum[:, 2] + spectrum[:, 6]) / np.maximum(total, 1e-30)


def find_saddles(picture: Array, known: Array, sigma_px: float) -> Saddles:
    """Find crossings in `picture` (H, W) at smoothing `sigma_px`, away from pixels that are not `known` (H, W).

    Squares must be wider than 6 sigma_px.
    """
    d = _derivatives(picture, sigma_px)
    window = 2 * int(np.ceil(2.5 * sigma_px)) + 1
    contrast = maximum_filter(d[""], window) - minimum_filter(d[""], window)
    least = _CONTRAST * float(np.percentile(contrast, 99.5))
    strength = np.sqrt(np.maximum(d["xy"] ** 2 - d["xx"] * d["yy"], 0.0)) * np.pi * (sigma_px**2 + 0.5)
    response = np.where(contrast > max(least, 1e-12), strength / np.maximum(contrast, 1e-12), 0.0)
    peak = (response == maximum_filter(response, window)) & (response > _RESPONSE)
    margin = int(np.ceil(2.0 * sigma_px))
    peak &= minimum_filter(known, window)
    peak[:margin] = peak[-margin:] = peak[:, :margin] = peak[:, -margin:] = False
    rows, columns = np.nonzero(peak)
    xy, near = _refined(d, rows, columns)
    xy = xy[near]
    ring = _ring_values(d[""], xy, 2.6 * sigma_px)
    axes = _edge_axes(ring)
    good = (_alternating(ring) > _PURITY) & np.all(np.isfinite(axes), axis=1)
    return Saddles(xy[good], axes[good], np.ptp(ring[good], axis=1))
