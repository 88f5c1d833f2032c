"""First lenses and poses."""

import numpy as np
import pytest
from rendered_boards import corner_views

from hybridtrack.calibration.bundle import ViewPoints
from hybridtrack.calibration.lens_start import pose_from_homography, start_pose, start_scene
from hybridtrack.errors import DegenerateDataError
from hybridtrack.geometry import FisheyeLens, PerspectiveLens, se3

PLAIN = PerspectiveLens(1000.0, 1000.0, 639.5, 399.5)


def test_pose_of_an_exact_homography():
    """Rotation and translation come back, whatever the homography's scale and sign."""
    pose = se3.exp(np.array([0.1, -0.2, 0.7, 0.4, -0.3, 1.1]))
    H = np.stack([pose[:3, 0], pose[:3, 1], pose[:3, 3]], axis=-1)
    for scale in (1.0, -3.0, 0.2):
        np.testing.assert_allclose(pose_from_homography(scale * H), pose, atol=1e-12)


def test_pose_under_the_true_lens_is_exact():
    """Without noise and distortion the first pose is the true one."""
    views, poses = corner_views(np.random.default_rng(0), PLAIN, 3, 0.0)
    for points, pose in zip(views, poses, strict=True):
        np.testing.assert_allclose(start_pose(PLAIN, points), pose, atol=1e-5)


@pytest.mark.parametrize(
    ("model", "lens"),
    [("perspective", PerspectiveLens(1040.0, 1040.0, 650.0, 390.0, (-0.2, 0.05, 0.0))),
     ("fisheye", FisheyeLens(520.0, 520.0, 640.0, 400.0, (0.02, -0.01, 0.0, 0.0)))],
)  # fmt: skip
def test_first_focal_length_is_within_a_fifth(model, lens):
    """Scanning finds the focal length closely enough for the adjustment to converge, for either model."""
    views, _ = corner_views(np.random.default_rng(1), lens, 6, 0.05)
    found = start_scene(model, views, 1280, 800)
    assert found.lens.model == model
    assert found.lens.fx == pytest.approx(lens.fx, rel=0.2)
    assert len(found.poses) == 6


def test_points_that_no_lens_explains_are_refused():
    """Fewer corners than a homography needs raise one sentence."""
    views, _ = corner_views(np.random.default_rng(2), PLAIN, 3, 0.0)
    few = [ViewPoints(v.board_m[:4], v.uv[:4], v.whiten[:4]) for v in views]
    with pytest.raises(DegenerateDataError, match="some focal length explains"):
        start_scene("perspective", few, 1280, 800)
