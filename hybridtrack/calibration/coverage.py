"""How well a set of board views determines a lens, in numbers and in a sentence that says what to add."""

from dataclasses import dataclass

import numpy as np

from hybridtrack.calibration.bundle import Solution, ViewPoints
from hybridtrack.geometry import so3

Array = np.ndarray

_CELLS = (8, 5)


@dataclass(frozen=True)
class Coverage:
    """`area`: share of the array's cells that hold a corner; `missing`: corners of the picture that were not reached.

    `tilt_deg` (V,): angle between the board's normal and the optical axis; `facing_deg`: the largest angle between the
    normals of two views, for planes that are all parallel fix no focal length (Zhang 2000). `condition`: of the
    column-scaled Jacobian (about 600 is healthy, 1e5 and above worthless); `focal_share`: deviation of the focal
    length over itself; `edge_sigma_px`: deviation of the lens at the array's worst corner, orientation removed.
    """

    area: float
    missing: list[str]
    tilt_deg: Array
    facing_deg: float
    condition: float
    focal_share: float
    edge_sigma_px: float


def field_points(width: int, height: int, columns: int = 5, rows: int = 4) -> Array:
    """Points (columns * rows, 2) over the array, half a cell inside its edge."""
    u = (np.arange(columns) + 0.5) * width / columns - 0.5
    v = (np.arange(rows) + 0.5) * height / rows - 0.5
    return np.stack(np.meshgrid(u, v), axis=-1).reshape(-1, 2)


def displacement_jacobian(solution: Solution, uv: Array) -> Array:
    """Displacement (N, 2, S) px at `uv` (N, 2) per lens term, less the rotation of the camera that best cancels it."""
    lens = solution.scene.lens
    rays = lens.unproject(uv)
    _, d_point, d_lens = lens.project_with_jacobians(rays)
    J = d_lens[..., solution.freedom.lens]
    turn = -d_point @ so3.hat(rays)
    flat = turn.reshape(-1, 3)
    cancel, *_ = np.linalg.lstsq(flat, J.reshape(len(flat), -1), rcond=None)
    return np.asarray(J - (flat @ cancel).reshape(J.shape))


def tilts_deg(solution: Solution) -> Array:
    """Angle (V,) between the board's normal and the optical axis: without it a view says nothing of focal length."""
    return np.asarray(np.degrees(np.arccos(np.minimum(np.abs(solution.scene.poses[:, 2, 2]), 1.0))))


def facing_deg(solution: Solution) -> float:
    """Largest angle between the board's normals in any two views."""
    normals = solution.scene.poses[:, :3, 2]
    return float(np.degrees(np.arccos(np.clip(normals @ normals.T, -1.0, 1.0))).max())


def _reached(views: list[ViewPoints], size: tuple[int, int]) -> tuple[float, list[str]]:
    uv = np.concatenate([p.uv for p in views]) + 0.5
    column = np.clip((uv[:, 0] / size[0] * _CELLS[0]).astype(int), 0, _CELLS[0] - 1)
    row = np.clip((uv[:, 1] / size[1] * _CELLS[1]).astype(int), 0, _CELLS[1] - 1)
    area = len(np.unique(row * _CELLS[0] + column)) / (_CELLS[0] * _CELLS[1])
    x, y = uv[:, 0] / size[0], uv[:, 1] / size[1]
    missing = []
    for name, far_x, far_y in (("upper left", x, y), ("upper right", 1 - x, y), ("lower left", x, 1 - y),
                               ("lower right", 1 - x, 1 - y)):  # fmt: skip
        if not np.any((far_x < 0.2) & (far_y < 0.25)):
            missing.append(name)
    return area, missing


def coverage_of(solution: Solution, views: list[ViewPoints], size: tuple[int, int]) -> Coverage:
    """Measure the coverage of an adjusted set of views on an array of `size` (width, height)."""
    area, missing = _reached(views, size)
    shared = int(solution.freedom.lens.sum())
    covariance = solution.covariance[:shared, :shared]
    J = displacement_jacobian(solution, field_points(*size, 9, 7))
    variance = np.einsum("nij,jk,nik->n", J, covariance, J)
    lens = solution.scene.lens
    return Coverage(area, missing, tilts_deg(solution), facing_deg(solution), solution.condition,
                    float(np.sqrt(covariance[0, 0]) / lens.fx), float(np.sqrt(variance.max())))  # fmt: skip


def coverage_findings(coverage: Coverage) -> list[str]:
    """One sentence for each weakness, with the view that would cure it."""
    findings = []
    if coverage.facing_deg < 20.0:
        findings.append(
            f"lens: the board faced nearly the same way in all views (within {coverage.facing_deg:.0f} degrees), so "
            "that focal length and distance are hard to tell apart; add views tilted by 20 to 35 degrees, each way"
        )
    if coverage.missing:
        findings.append(
            f"lens: no corner of the board was seen in the {', '.join(coverage.missing)} of the picture, so distortion "
            "is extrapolated there and its true error may exceed the stated one; add a view with the board "
            "in that corner"
        )
    if coverage.focal_share > 0.002:
        findings.append(
            f"lens: the focal length is uncertain by {100 * coverage.focal_share:.2g} %; add views of the board that "
            "are tilted, and that fill the picture"
        )
    if coverage.edge_sigma_px > 0.5:
        findings.append(
            f"lens: the deviation at the picture's edge is {coverage.edge_sigma_px:.2g} px; add views with the board "
            "close to the edges and corners of the picture"
        )
    return findings
