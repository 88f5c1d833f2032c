"""Where on the colour array a pixel gathers its light: quadrature nodes over its aperture.

A frame pixel averages the colour pixels of its bin; the clear ones are averaged in, left out, or replaced by their
neighbours, as the frame mode says. An event pixel has one colour pixel. Nodes are Gauss-Legendre points, whose weighted
sum is the aperture's average of a picture as smooth as a lens draws it.
"""

from dataclasses import dataclass

import numpy as np

from hybridtrack.module import Cluster, FrameMode

Array = np.ndarray


@dataclass(frozen=True)
class Aperture:
    """Quadrature of pixel apertures.

    `nodes` (K, 2): offsets in colour px from the pixel's position; `weights` (C, K), rows summing to 1, one row for
    each class of pixel; `kind`: class of each pixel, in the shape of the pixels.
    """

    nodes: Array
    weights: Array
    kind: Array


def _box_nodes(width_px: float, count: int) -> tuple[Array, Array]:
    """Gauss-Legendre nodes (count^2, 2) and weights of a square box centred on the origin."""
    points, weights = np.polynomial.legendre.leggauss(count)
    u, v = np.meshgrid(points * width_px / 2.0, points * width_px / 2.0)
    return np.stack([u.ravel(), v.ravel()], axis=-1), np.outer(weights, weights).ravel() / 4.0


def one_pixel_aperture(shape: tuple[int, ...]) -> Aperture:
    """Aperture of event pixels: one colour pixel."""
    nodes, weights = _box_nodes(1.0, 3)
    return Aperture(nodes, weights[None], np.zeros(shape, dtype=np.int64))


def _pixel_weights(clear: Array, binning: int, omitted: bool) -> Array:
    """Share (binning + 2, binning + 2) of each colour pixel in a bin and around it; `clear` marks the clear ones there.

    A clear pixel that is filled takes its value from the four beside it that are not clear. That leaves the mean
    position where it was, but not the shape: a lopsided bin moves a blurred edge by a hundredth of a pixel.
    """
    inside = np.zeros(clear.shape, bool)
    inside[1 : 1 + binning, 1 : 1 + binning] = True
    used = inside & ~clear
    if omitted and used.any():
        return used / used.sum()
    weights = used / binning**2
    for row, column in zip(*np.nonzero(inside & clear), strict=True):
        beside = [(row + dv, column + du) for dv, du in ((-1, 0), (1, 0), (0, -1), (0, 1))]
        beside = [place for place in beside if not clear[place]] or [(row, column)]
        for place in beside:
            weights[place] += 1.0 / binning**2 / len(beside)
    return weights


def frame_aperture(mode: FrameMode, cluster: Cluster) -> Aperture:
    """Apertures of all frame pixels (height, width), about their full bins' centres, clear sites as the mode says."""
    kind = np.zeros(mode.shape, dtype=np.int64)
    if mode.clear_in_frame == "included" or cluster.clear_site is None:
        nodes, weights = _box_nodes(float(mode.binning), mode.binning + 1)
        return Aperture(nodes, weights[None], kind)
    inner, inner_weights = _box_nodes(1.0, 2)
    steps = np.arange(-1, mode.binning + 1)
    centred = steps - 0.5 * (mode.binning - 1)
    nodes = (np.stack(np.meshgrid(centred, centred), axis=-1).reshape(-1, 1, 2) + inner).reshape(-1, 2)
    phase_u = (mode.crop[0] + mode.binning * np.arange(mode.width)) % cluster.width
    phase_v = (mode.crop[1] + mode.binning * np.arange(mode.height)) % cluster.height
    kind[:] = phase_v[:, None] * cluster.width + phase_u[None, :]
    classes = []
    for pv in range(cluster.height):
        for pu in range(cluster.width):
            clear_u = (pu + steps) % cluster.width == cluster.clear_site[0]
            clear_v = (pv + steps) % cluster.height == cluster.clear_site[1]
            share = _pixel_weights(clear_v[:, None] & clear_u, mode.binning, mode.clear_in_frame == "omitted")
            classes.append((share.reshape(-1, 1) * inner_weights).ravel())
    return Aperture(nodes, np.array(classes), kind)
