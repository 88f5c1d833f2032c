"""Bundle adjustment: exact on exact corners, honest on noisy ones, and with right derivatives."""

from dataclasses import replace

import numpy as np
import pytest
from rendered_boards import corner_views

from hybridtrack.calibration import bundle
from hybridtrack.calibration.bundle import Freedom, Scene, ViewPoints, adjust, adjust_poses, with_noise_floor
from hybridtrack.geometry import PerspectiveLens, se3

LENS = PerspectiveLens(1003.0, 998.0, 645.0, 396.0, (-0.2, 0.06, 0.0), (3e-4, -4e-4))
FREE = Freedom(np.array([n != "k3" for n in LENS.names]))


def disturbed(poses, lens=LENS):
    """A scene some way off the truth."""
    rng = np.random.default_rng(9)
    twists = rng.normal(size=(len(poses), 6)) * 0.004
    return Scene(PerspectiveLens(980.0, 1020.0, 640.0, 400.0, (-0.1, 0.0, 0.0)), poses @ se3.exp(twists))


def test_exact_corners_give_the_exact_lens():
    """Without noise all parameters come back to rounding."""
    views, poses = corner_views(np.random.default_rng(0), LENS, 6, 0.0)
    found = adjust(disturbed(poses), views, FREE).scene
    np.testing.assert_allclose(found.lens.parameters, LENS.parameters, rtol=1e-6, atol=1e-7)
    np.testing.assert_allclose(found.poses, poses, atol=1e-7)


def predicted(scene, corners):
    """Whitened corners, up to a constant."""
    return bundle._whitened(corners, -bundle._residuals(scene, corners))


def test_derivatives_are_those_of_differences():
    """Of corners by lens, board shape and pose, through the whitening."""
    views, poses = corner_views(np.random.default_rng(1), LENS, 2, 0.05)
    freedom = Freedom(np.ones(9, bool), np.array([0.001, 0.001, 0.001]))
    scene = Scene(LENS, poses, np.array([1e-3, 2e-4, -3e-4]))
    corners = bundle._table(views)
    _, by_shared, by_pose = bundle._linearised(scene, corners, freedom)
    h = 1e-6
    for k in range(12):
        step = h * np.eye(12)[k]
        ahead, back = (predicted(bundle._moved(scene, freedom, s * step, np.zeros((2, 6))), corners) for s in (1, -1))
        np.testing.assert_allclose(by_shared[..., k], (ahead - back) / (2 * h), rtol=2e-4, atol=2e-3)
    for k in range(6):
        step = np.tile(h * np.eye(6)[k], (2, 1))
        ahead, back = (predicted(bundle._moved(scene, freedom, np.zeros(12), s * step), corners) for s in (1, -1))
        np.testing.assert_allclose(by_pose[..., k], (ahead - back) / (2 * h), rtol=2e-4, atol=2e-2)


def test_covariance_is_that_of_many_draws():
    """Over 30 draws the normalised squared error of the lens is its number of parameters, to chance."""
    views, poses = corner_views(np.random.default_rng(2), LENS, 8, 0.0)
    rng, squared = np.random.default_rng(3), []
    for _ in range(30):
        noisy = [replace(v, uv=v.uv + rng.normal(size=v.uv.shape) * 0.05, whiten=v.whiten * 2e-3) for v in views]
        found = adjust(Scene(LENS, poses), noisy, FREE)
        error = (found.scene.lens.parameters - LENS.parameters)[FREE.lens]
        squared.append(error @ np.linalg.solve(found.covariance[:8, :8], error) / 8)
    assert 0.7 < np.mean(squared) < 1.4


def test_gross_errors_are_left_out():
    """Two corners a whole square off do not move the lens."""
    views, poses = corner_views(np.random.default_rng(4), LENS, 6, 0.03)
    views[0].uv[3] += 40.0
    views[2].uv[7] -= 25.0
    found = adjust(disturbed(poses), views, FREE)
    assert not found.used[0][3]
    assert not found.used[2][7]
    assert sum(int((~u).sum()) for u in found.used) == 2
    assert abs(found.scene.lens.fx - LENS.fx) < 1.0


def test_a_stretched_board_is_found_under_its_prior():
    """An aspect of two per mille is recovered where its deviation is stated, and misleads fy where it is not."""
    views, poses = corner_views(np.random.default_rng(5), LENS, 10, 0.02)
    middle = np.concatenate([v.board_m for v in views])[:, 1]
    middle = (middle.min() + middle.max()) / 2
    shrunk = [ViewPoints(v.board_m / [1, 1.002, 1] + [0, middle - middle / 1.002, 0], v.uv, v.whiten) for v in views]
    free = Freedom(FREE.lens, np.array([0.003, 0.0, 0.0]))
    found = adjust(Scene(LENS, poses), shrunk, free)
    assert found.scene.shape[0] == pytest.approx(0.002, abs=1e-4)
    assert found.scene.lens.fy == pytest.approx(LENS.fy, rel=2e-4)
    rigid = adjust(Scene(LENS, poses), shrunk, FREE)
    assert rigid.chi_square > 2 * found.chi_square


def test_poses_alone_leave_the_lens():
    """`adjust_poses` returns the lens it was given."""
    views, poses = corner_views(np.random.default_rng(6), LENS, 3, 0.02)
    found = adjust_poses(Scene(LENS, disturbed(poses).poses), views)
    assert found.scene.lens == LENS
    assert found.shared == 0
    assert np.sqrt(np.mean(np.concatenate(found.residuals) ** 2)) < 0.03


def test_a_noise_floor_adds_in_quadrature():
    """0.03 and 0.04 px make 0.05 px."""
    views, _ = corner_views(np.random.default_rng(7), LENS, 1, 0.03)
    whiten = with_noise_floor(views, 0.04)[0].whiten
    np.testing.assert_allclose(whiten, np.tile(np.eye(2) / 0.05, (len(whiten), 1, 1)), atol=1e-9)
