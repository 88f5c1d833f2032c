"""Lens from corners: exact, honest, and refused where views do not determine it."""

import cv2
import numpy as np
import pytest
from rendered_boards import as_boards, corner_views, shuttered_set

from hybridtrack.calibration.bundle import Freedom, Scene, Solution
from hybridtrack.calibration.coverage import displacement_jacobian, field_points
from hybridtrack.calibration.lens_fit import fit_lens, fit_view_points
from hybridtrack.errors import BoardNotFoundError, DegenerateDataError
from hybridtrack.geometry import PerspectiveLens, so3

SIZE = (1280, 800)
LENS = PerspectiveLens(1000.0, 1003.0, 644.0, 396.0, (-0.2, 0.06, 0.0), (4e-4, -3e-4))


def fit(views, model=None, **options):
    return fit_view_points(views, np.arange(len(views)), SIZE, model, **options)


def test_exact_corners_give_the_exact_lens():
    """Model chosen and parameters recovered to a millionth."""
    views, poses = corner_views(np.random.default_rng(0), LENS, 8, 0.0)
    found = fit(views)
    assert found.lens.fx == pytest.approx(LENS.fx, rel=1e-6)
    np.testing.assert_allclose(found.camera_from_board, poses, atol=1e-6)
    assert found.rms_px < 1e-4
    assert found.parameters[:4] == ("lens.fx", "lens.fy", "lens.cx", "lens.cy")
    assert found.joint_covariance.shape == (len(found.parameters) + 48,) * 2


def test_residual_and_lens_are_those_of_opencv_on_the_same_corners():
    """With the same terms and equal weights both are the least squares fit (cv2.calibrateCamera)."""
    views, _ = corner_views(np.random.default_rng(1), LENS, 6, 0.05)
    found = fit(views, "k1k2k3p")
    rms, K, *_ = cv2.calibrateCamera(
        [v.board_m.astype(np.float32) for v in views], [v.uv.astype(np.float32)[:, None] for v in views], SIZE, None,
        None, criteria=(cv2.TERM_CRITERIA_EPS | cv2.TERM_CRITERIA_COUNT, 300, 1e-14),
    )  # fmt: skip
    assert found.rms_px <= rms / np.sqrt(2.0) * (1 + 1e-5)
    assert found.lens.fx == pytest.approx(K[0, 0], rel=1e-5)
    assert found.lens.fy == pytest.approx(K[1, 1], rel=1e-5)


def displacement_nees(found, true):
    """Squared normalised displacement over the field, orientation removed, over its degrees of freedom."""
    free = np.array([f"lens.{n}" in found.parameters for n in found.lens.names])
    solution = Solution(Scene(found.lens, np.zeros((0, 4, 4))), Freedom(free), [], [], 0.0, 1, found.covariance, 1.0,
                        np.zeros((0, 0)))  # fmt: skip
    uv = field_points(*SIZE)
    J = displacement_jacobian(solution, uv).reshape(-1, free.sum())
    rays = true.unproject(uv)
    error = (found.lens.project(rays) - uv).ravel()
    _, d_point, _ = found.lens.project_with_jacobians(rays)
    turn = (-d_point @ so3.hat(rays)).reshape(-1, 3)
    error = error - turn @ np.linalg.lstsq(turn, error, rcond=None)[0]
    values, vectors = np.linalg.eigh(J @ found.covariance @ J.T)
    most = np.argsort(values)[::-1][: free.sum() - 2]
    return float(np.sum((vectors[:, most].T @ error) ** 2 / values[most]) / len(most))


def test_stated_deviation_is_the_true_one_over_draws():
    """Lens, poses and noise redrawn 12 times: the mean normalised squared error is near one."""
    squares = []
    for seed in range(12):
        rng = np.random.default_rng(seed)
        focal, centre = 1000 * (1 + rng.normal(size=2) * 0.02), [640, 400] + 8 * rng.normal(size=2)
        radial, tangential = (-0.2 + 0.04 * rng.normal(), 0.06, 0.0), tuple(4e-4 * rng.normal(size=2))
        lens = PerspectiveLens(*focal, *centre, radial, tangential)
        views, _ = corner_views(rng, lens, 10, 0.04)
        squares.append(displacement_nees(fit(views, "k1k2p"), lens))
    assert 0.6 < np.mean(squares) < 1.5


def test_corner_covariances_too_small_are_enlarged():
    """Corners said to be ten times better than they are give the deviation that their residual asks for."""
    views, _ = corner_views(np.random.default_rng(2), LENS, 8, 0.05)
    told = fit(views, "k1k2p")
    views = [type(v)(v.board_m, v.uv, v.whiten * 10.0) for v in views]
    found = fit(views, "k1k2p")
    assert np.sqrt(found.covariance[0, 0]) == pytest.approx(np.sqrt(told.covariance[0, 0]), rel=0.15)


def test_views_that_all_face_the_board_are_refused():
    """Focal length and distance can't be told apart: one sentence says which views to add."""
    views, _ = corner_views(np.random.default_rng(3), LENS, 8, 0.05, tilt_deg=0.5)
    with pytest.raises(DegenerateDataError, match="add views tilted by 20 to 35 degrees"):
        fit(views, "k1")


def test_views_of_one_pose_are_refused():
    """The same tilted view many times over fixes no focal length, however small its residual."""
    views, _ = corner_views(np.random.default_rng(4), LENS, 1, 0.0)
    rng = np.random.default_rng(5)
    repeated = [type(views[0])(views[0].board_m, views[0].uv + rng.normal(size=views[0].uv.shape) * 0.05,
                               views[0].whiten) for _ in range(6)]  # fmt: skip
    with pytest.raises(DegenerateDataError, match="faces different ways"):
        fit(repeated, "k1k2p")


def test_small_central_boards_are_refused():
    """With the board never off the middle the lens at the picture's edge is anybody's guess."""
    views, _ = corner_views(np.random.default_rng(6), LENS, 8, 0.05, spread=0.02, nearest_m=0.8)
    with pytest.raises(DegenerateDataError, match="board in each corner of the picture"):
        fit(views)


def test_central_boards_that_determine_a_lens_are_flagged():
    """Where the fit holds but corners of the picture were not reached, the finding names them."""
    views, _ = corner_views(np.random.default_rng(6), LENS, 8, 0.01, spread=0.02, nearest_m=0.5)
    found = fit(views, "k1")
    assert any("upper left" in f and "distortion is extrapolated" in f for f in found.findings)


def test_two_boards_are_refused():
    """Three views with enough corners are required."""
    scene = shuttered_set()
    boards = as_boards(scene, np.random.default_rng(0), 0.02)
    with pytest.raises(BoardNotFoundError, match="at least 3 views"):
        fit_lens(boards[:2], scene.scene.target, scene.layout.module())


def test_boards_give_a_lens():
    """`fit_lens` on six boards with 0.02 px corners: focal length within a few of its deviations."""
    scene = shuttered_set()
    boards = as_boards(scene, np.random.default_rng(0), 0.02)
    found = fit_lens(boards, scene.scene.target, scene.layout.module(), "k1k2p")
    sigma = np.sqrt(np.diag(found.covariance))
    assert np.all(np.abs(found.lens.parameters[:4] - scene.scene.lens.parameters[:4]) < 4 * sigma[:4])
    assert found.views.tolist() == list(range(6))
