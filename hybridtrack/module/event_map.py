"""The map from the event grid to the colour array: nominal lattice, or calibrated affine map with a radial term."""

import numpy as np
from pydantic import Field

from hybridtrack.module.layout import Array, Cluster, ColourArray, EventGrid, Part


class LatticeTest(Part):
    """Whether the affine map agrees with the die's lattice, and the p-value of that test."""

    consistent: bool | None = None
    p_value: float | None = Field(default=None, ge=0, le=1)


class ColourFromEvent(Part):
    """Calibrated map: `(x, y, 1)` to `(u, v)` by `matrix` (centroid included), then a radial move.

    With `radial` k the position moves by `k * r^2 * (p - centre)`, r in units of half the array's diagonal.
    """

    matrix: tuple[tuple[float, float, float], tuple[float, float, float]]
    centroid: tuple[float, float] | None = None
    radial: float = 0.0
    centre: tuple[float, float] | None = None
    lattice: LatticeTest | None = None


def nominal_matrix(cluster: Cluster, grid: EventGrid) -> Array:
    """The (2, 3) matrix of the nominal lattice: cluster pitch, mirroring and clear site, no centroid."""
    clear = cluster.clear_site if cluster.clear_site is not None else (0, 0)
    sign_x, sign_y = (-1.0 if grid.mirror_x else 1.0), (-1.0 if grid.mirror_y else 1.0)
    u0 = clear[0] + (cluster.width * (grid.width - 1) if grid.mirror_x else 0)
    v0 = clear[1] + (cluster.height * (grid.height - 1) if grid.mirror_y else 0)
    return np.array([[sign_x * cluster.width, 0.0, u0], [0.0, sign_y * cluster.height, v0]])


def apply_event_map(matrix: Array, xy: Array, radial: float, centre: Array, half_diagonal_px: float) -> Array:
    """Map event-grid positions (..., 2) to the colour array (..., 2)."""
    matrix = np.asarray(matrix, float)
    uv = np.asarray(xy, float) @ matrix[:, :2].T + matrix[:, 2]
    if radial:
        offset = uv - centre
        uv = uv + radial * np.sum((offset / half_diagonal_px) ** 2, axis=-1, keepdims=True) * offset
    return uv


def invert_event_map(matrix: Array, uv: Array, radial: float, centre: Array, half_diagonal_px: float) -> Array:
    """Map colour-array positions (..., 2) to the event grid (..., 2).

    The radial move is thousandths of a pixel to a few pixels, so that a fixed-point iteration converges in a few
    steps.
    """
    uv = np.asarray(uv, float)
    straight = uv
    if radial:
        for _ in range(20):
            offset = straight - centre
            straight = uv - radial * np.sum((offset / half_diagonal_px) ** 2, axis=-1, keepdims=True) * offset
    matrix = np.asarray(matrix, float)
    return (straight - matrix[:, 2]) @ np.linalg.inv(matrix[:, :2]).T


def map_terms(
    calibrated: ColourFromEvent | None, cluster: Cluster, grid: EventGrid, array: ColourArray
) -> tuple[Array, float, Array]:
    """Return matrix (2, 3), radial and centre (2,) of the calibrated map, or of the nominal one."""
    middle = np.array([(array.width - 1) / 2.0, (array.height - 1) / 2.0])
    if calibrated is None:
        return nominal_matrix(cluster, grid), 0.0, middle
    centre = middle if calibrated.centre is None else np.asarray(calibrated.centre, float)
    return np.asarray(calibrated.matrix, float), calibrated.radial, centre
