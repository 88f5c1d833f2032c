"""Mirroring of the event grid, and its offset to a pixel or so, from pictures alone.

Under each of four mirrorings and a range of offsets, the log step of the frames is looked up at the event pixels'
positions and correlated with their signed amplitudes. Squares are much wider than a cluster, so that any offset within
one serves to tell mirrorings apart.
"""

from dataclasses import dataclass

import numpy as np
from scipy.ndimage import map_coordinates

from hybridtrack.calibration.view_data import ViewImages
from hybridtrack.errors import DegenerateDataError
from hybridtrack.module import HybridModule

Array = np.ndarray

_LEAST_LEAD = 0.1
_LEAST_CORRELATION = 0.25
_BEYOND_PX = 1
_LEAST_SHARE = 0.02  # of the brightest level: smaller light counts as this much


@dataclass(frozen=True)
class MapStart:
    """Mirroring, `offset` (2,) of the clear site inside its cluster to about a pixel, and its `correlation`."""

    mirror: tuple[bool, bool]
    offset: tuple[float, float]
    correlation: float


def lattice_matrix(module: HybridModule, mirror: tuple[bool, bool], offset: tuple[float, float]) -> Array:
    """The (2, 3) matrix of the lattice with `offset` of the clear site's optical centre inside its cluster."""
    rows = np.zeros((2, 3))
    pitch = (module.cluster.width, module.cluster.height)
    size = (module.event_grid.width, module.event_grid.height)
    for k in range(2):
        rows[k, k] = -pitch[k] if mirror[k] else pitch[k]
        rows[k, 2] = offset[k] + (pitch[k] * (size[k] - 1) if mirror[k] else 0)
    return rows


def event_positions(module: HybridModule, matrix: Array) -> Array:
    """Colour positions (He, We, 2) of all event pixels under `matrix` (2, 3)."""
    columns, rows = np.meshgrid(np.arange(module.event_grid.width), np.arange(module.event_grid.height))
    return np.stack([columns, rows], axis=-1) @ matrix[:, :2].T + matrix[:, 2]


def log_step_picture(view: ViewImages) -> Array:
    """Logarithm of bright over dark light (Hf, Wf), NaN where either is unknown."""
    top = np.nanpercentile(np.fmax(view.bright_dn, view.dark_dn), 99.0)
    floor = max(_LEAST_SHARE * top, 1e-9)
    return np.asarray(np.log(np.maximum(view.bright_dn, floor)) - np.log(np.maximum(view.dark_dn, floor)))


def _looked_up(picture: Array, uv: Array, module: HybridModule) -> Array:
    """The frame picture at colour positions; NaN outside the frame or beside unknown pixels."""
    xy = module.frame_mode.frame_from_colour(uv)
    return np.asarray(map_coordinates(picture, [xy[..., 1], xy[..., 0]], order=1, cval=np.nan))


def _correlation(steps: list[Array], amplitudes: list[Array], module: HybridModule, matrix: Array) -> float:
    """Correlation of amplitudes with frame steps over all views, both about zero."""
    uv = event_positions(module, matrix)
    cross = power_step = power_amplitude = 0.0
    for step, amplitude in zip(steps, amplitudes, strict=True):
        seen = _looked_up(step, uv, module)
        known = np.isfinite(seen) & np.isfinite(amplitude)
        cross += float(np.sum(seen[known] * amplitude[known]))
        power_step += float(np.sum(seen[known] ** 2))
        power_amplitude += float(np.sum(amplitude[known] ** 2))
    return cross / np.sqrt(max(power_step * power_amplitude, 1e-300))


def clipped_amplitude(view: ViewImages) -> Array:
    """Signed amplitude with hot pixels cut to the strength of the board's."""
    firm = np.abs(view.amplitude[np.isfinite(view.amplitude) & (view.snr > 3)])
    limit = 1.5 * float(np.percentile(firm, 90)) if len(firm) else 1.0
    return np.clip(view.amplitude, -limit, limit)


def find_map_start(views: list[ViewImages], module: HybridModule) -> MapStart:
    """Find mirroring and offset. Raises DegenerateDataError where the views leave the mirroring open."""
    steps = [log_step_picture(view) for view in views]
    amplitudes = [clipped_amplitude(view) for view in views]
    pitch = (module.cluster.width, module.cluster.height)
    middle = ((pitch[0] - 1) / 2.0, (pitch[1] - 1) / 2.0)
    flips = [(x, y) for x in (False, True) for y in (False, True)]
    scores = [_correlation(steps, amplitudes, module, lattice_matrix(module, flip, middle)) for flip in flips]
    order = np.argsort(scores)[::-1]
    best, second = float(scores[order[0]]), float(scores[order[1]])
    if best < _LEAST_CORRELATION or best - second < _LEAST_LEAD:
        raise DegenerateDataError(
            f"event map: expected frames and events to agree under one mirroring, got correlations of {best:.2f} and "
            f"{second:.2f} under the best two; add views with the board off the middle of the picture and rolled"
        )
    mirror = flips[int(order[0])]
    strongest = np.argsort([-float(np.nansum(np.abs(a))) for a in amplitudes])[:4]
    some = [steps[v] for v in strongest], [amplitudes[v] for v in strongest]
    tried = [
        (_correlation(*some, module, lattice_matrix(module, mirror, (float(i), float(j)))), float(i), float(j))
        for i in range(-_BEYOND_PX, pitch[0] + _BEYOND_PX)
        for j in range(-_BEYOND_PX, pitch[1] + _BEYOND_PX)
    ]
    correlation, i, j = max(tried)
    return MapStart(mirror, (i, j), correlation)
