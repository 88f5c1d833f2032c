"""Where on the colour array a pixel gathers its light: quadrature nodes over its aperture.

A frame pixel averages the colour pixels of its bin, without the clear sites where the frame mode omits them; an event
pixel has one colour pixel. Nodes are Gauss-Legendre points, whose weighted sum is the aperture's average of a picture
as smooth as a lens draws it.
"""

from dataclasses import dataclass

import numpy as np

from hybridtrack.module import Cluster, FrameMode, clear_in_bin

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


def frame_aperture(mode: FrameMode, cluster: Cluster) -> Aperture:
    """Apertures of all frame pixels (height, width), about their full bins' centres.

    Omitted clear sites are left out; a filled one counts as if its light were that of its own place.
    """
    kind = np.zeros(mode.shape, dtype=np.int64)
    count, _ = clear_in_bin(mode, cluster)
    if mode.clear_in_frame != "omitted" or not np.any((count > 0) & (count < mode.binning**2)):
        nodes, weights = _box_nodes(float(mode.binning), mode.binning + 1)
        return Aperture(nodes, weights[None], kind)
    inner, inner_weights = _box_nodes(1.0, 2)
    steps = np.arange(mode.binning)
    centred = steps - 0.5 * (mode.binning - 1)
    nodes = (np.stack(np.meshgrid(centred, centred), axis=-1).reshape(-1, 1, 2) + inner).reshape(-1, 2)
    phase_u = (mode.crop[0] + mode.binning * np.arange(mode.width)) % cluster.width
    phase_v = (mode.crop[1] + mode.binning * np.arange(mode.height)) % cluster.height
    kind[:] = phase_v[:, None] * cluster.width + phase_u[None, :]
    assert cluster.clear_site is not None  # clear_in_bin found some
    weight_rows = []
    for pv in range(cluster.height):
        for pu in range(cluster.width):
            clear = ((pu + steps[None, :]) % cluster.width == cluster.clear_site[0]) & (
                (pv + steps[:, None]) % cluster.height == cluster.clear_site[1]
            )
            used = np.where(clear.all(), True, ~clear).astype(float)
            weight_rows.append((used.reshape(-1, 1) * inner_weights).ravel() / used.sum())
    return Aperture(nodes, np.array(weight_rows), kind)
