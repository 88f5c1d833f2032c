"""Coverage in numbers and sentences."""

from dataclasses import replace

import numpy as np
from rendered_boards import corner_views

from hybridtrack.calibration.coverage import (
    coverage_findings,
    coverage_of,
    displacement_jacobian,
    facing_deg,
    field_points,
    tilts_deg,
)
from hybridtrack.calibration.lens_choice import fit_model
from hybridtrack.geometry import PerspectiveLens, se3, so3

SIZE = (1280, 800)
LENS = PerspectiveLens(1000.0, 1000.0, 640.0, 400.0, (-0.2, 0.05, 0.0))


def fitted(count, tilt_deg, spread, seed=0, nearest_m=0.35):
    """A fit and its views."""
    views, poses = corner_views(np.random.default_rng(seed), LENS, count, 0.03, tilt_deg, spread, nearest_m=nearest_m)
    return fit_model("k1k2p", views, SIZE, np.zeros(3)), views, poses


def test_a_good_set_has_no_findings():
    """Twelve tilted views over the picture: condition a few hundred, edge deviation hundredths of a pixel."""
    solution, views, _ = fitted(16, 35.0, 0.35)
    coverage = coverage_of(solution, views, SIZE)
    assert coverage.area > 0.85
    assert coverage.condition < 1000
    assert coverage.edge_sigma_px < 0.2
    assert coverage_findings(coverage) == []


def test_a_central_set_names_the_corners_to_add():
    """Where no corner of the picture was reached, the finding says which."""
    solution, views, _ = fitted(8, 35.0, 0.0, nearest_m=0.8)
    findings = coverage_findings(coverage_of(solution, views, SIZE))
    assert any("upper left" in f and "add a view with the board in that corner" in f for f in findings)


def test_a_flat_set_asks_for_tilt():
    """Views that all face the board ask for tilts of 20 to 35 degrees."""
    solution, views, _ = fitted(10, 5.0, 0.35)
    findings = coverage_findings(coverage_of(solution, views, SIZE))
    assert any("tilted by 20 to 35 degrees" in f for f in findings)


def test_tilt_is_the_angle_to_the_optical_axis():
    """Against the true poses: off the middle of the picture too."""
    solution, _, poses = fitted(6, 35.0, 0.3)
    np.testing.assert_allclose(tilts_deg(solution), np.degrees(np.arccos(np.abs(poses[:, 2, 2]))), atol=0.2)


def test_parallel_boards_face_one_way_whatever_their_roll():
    """Turning the board in its plane changes no normal, and says nothing of focal length."""
    solution, _, poses = fitted(4, 30.0, 0.2)
    rolls = [se3.compose(so3.exp(np.array([0.0, 0.0, roll])), np.zeros(3)) for roll in (0.0, 1.0, 2.0)]
    rolled = replace(solution, scene=replace(solution.scene, poses=poses[0] @ np.array(rolls)))
    assert facing_deg(rolled) < 1e-4
    assert facing_deg(solution) > 20.0


def test_turning_the_camera_is_no_displacement():
    """The displacement of a lens has no part that a rotation of the camera could make."""
    solution, _, _ = fitted(6, 35.0, 0.3)
    uv = field_points(*SIZE)
    assert uv.shape == (20, 2)
    J = displacement_jacobian(solution, uv)
    rays = solution.scene.lens.unproject(uv)
    turn = se3.compose(so3.exp(np.array([1e-6, -2e-6, 1e-6])), np.zeros(3))
    turned = solution.scene.lens.project(se3.transform(turn, rays))
    move = (turned - uv).ravel()
    assert np.abs(J.reshape(-1, J.shape[-1]).T @ move).max() < 1e-6 * np.abs(J).max() * np.linalg.norm(move) * 40 + 1e-9
