"""Whether the blinking seen in frames is the blinking seen by events, and under which mirroring.

The signed pictures of all views are correlated under the nominal lattice and its three mirrorings. Clear site and
centroid move this by a fraction of an event pixel, which smoothing makes irrelevant; they are found later. The sign
tells which half of the cycle a counterphase board's set A is in.
"""

from dataclasses import dataclass

import numpy as np
from scipy.ndimage import gaussian_filter, map_coordinates

from hybridtrack.module import HybridModule, nominal_matrix

Array = np.ndarray


@dataclass(frozen=True)
class Agreement:
    """The best mirroring and its correlation, negative where frames and events name the sets the other way round."""

    mirror_x: bool
    mirror_y: bool
    correlation: float


def normalised(picture: Array, smooth_px: float) -> Array:
    """A signed picture, smoothed, clipped to the size of its strong part, NaN as zero."""
    filled = np.nan_to_num(picture)
    strong = np.abs(filled)[np.abs(filled) > 0.2 * np.quantile(np.abs(filled), 0.98)]
    scale = float(np.median(strong)) if len(strong) else 1.0
    return gaussian_filter(np.clip(filled / max(scale, 1e-12), -1.5, 1.5), smooth_px)


def frame_positions(nominal: HybridModule, mirror_x: bool, mirror_y: bool) -> Array:
    """Frame positions (2, rows, columns), row first, of all event pixels under the nominal lattice, mirrored so."""
    grid = nominal.event_grid.model_copy(update={"mirror_x": mirror_x, "mirror_y": mirror_y})
    matrix = nominal_matrix(nominal.cluster, grid)
    columns, rows = np.meshgrid(np.arange(grid.width), np.arange(grid.height))
    uv = np.stack([columns, rows], axis=-1) @ matrix[:, :2].T + matrix[:, 2]
    xy = nominal.frame_mode.frame_from_colour(uv)
    return np.stack([xy[..., 1], xy[..., 0]])


def compare_pictures(
    swings: list[Array], amplitudes: list[Array], nominal: HybridModule, signed: bool = True
) -> Agreement:
    """Compare the swing of frames (Hf, Wf), DN, with event amplitudes (rows, columns), all views at once.

    Where the sign of neither is known (`signed` False, pictures of how much changes), only agreement counts.
    """
    pitch = 0.5 * (nominal.cluster.width + nominal.cluster.height) / nominal.frame_mode.binning
    frames = [normalised(swing, max(pitch, 0.7)) for swing in swings]
    events = [normalised(amplitude, 1.0) for amplitude in amplitudes]
    results = []
    for mirror_x in (False, True):
        for mirror_y in (False, True):
            where = frame_positions(nominal, mirror_x, mirror_y)
            cross, frame_power, event_power = 0.0, 0.0, 0.0
            for frame, event in zip(frames, events, strict=True):
                sampled = map_coordinates(frame, where, order=1, mode="constant")
                cross += float(np.sum(sampled * event))
                frame_power += float(np.sum(sampled**2))
                event_power += float(np.sum(event**2))
            scale = np.sqrt(frame_power * event_power)
            results.append(Agreement(mirror_x, mirror_y, float(cross / scale) if scale > 0 else 0.0))
    return max(results, key=lambda result: abs(result.correlation) if signed else result.correlation)
