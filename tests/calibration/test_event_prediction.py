"""What event pixels should see."""

import numpy as np
import pytest
from rendered_boards import counterphase_set, shuttered_set

from hybridtrack.calibration.apertures import frame_aperture
from hybridtrack.calibration.board_view import place_frame_pixels
from hybridtrack.calibration.event_prediction import choose_pixels, picture_motion, predict_steps
from hybridtrack.calibration.view_light import fit_view_light
from hybridtrack.geometry import se3


def placed(rendered, pose=None):
    """Pixels of the first view that take part, and the view's light."""
    module, target = rendered.layout.module(), rendered.scene.target
    fit = rendered.true_fit()
    aperture = frame_aperture(module.frame_mode, module.cluster)
    place = place_frame_pixels(fit.lens, rendered.poses[0], target, module.frame_mode)
    light = fit_view_light(rendered.views[0], place, aperture, target)
    pose = rendered.poses[0] if pose is None else pose
    return choose_pixels(rendered.views[0], light, fit, pose, target, rendered.layout.event_positions()), fit


@pytest.mark.parametrize("found", [shuttered_set, counterphase_set])
def test_counts_follow_the_predicted_step(found):
    """At the true map counts are steps over threshold, edges included, within two counts of the dead zone."""
    rendered = found()
    places, _ = placed(rendered)
    steps = predict_steps(places, rendered.scene.target, np.zeros((len(places.pixel), 2)), 1.0)
    mean_threshold = 1.05 * rendered.scene.threshold
    difference = steps.count - steps.step / mean_threshold
    edge = np.abs(steps.d_uv).max(1) > 0.3
    assert edge.sum() > 300
    assert np.percentile(np.abs(difference), 99) < 2.2
    assert abs(np.corrcoef(steps.count[edge], steps.step[edge])[0, 1]) > 0.98


def test_derivatives_are_those_of_differences():
    """By position and by blur."""
    rendered = counterphase_set()
    places, _ = placed(rendered)
    target, still = rendered.scene.target, np.zeros((len(places.pixel), 2))
    steps = predict_steps(places, target, still, 1.0)
    h = 1e-4
    for k in range(2):
        move = still + h * np.eye(2)[k]
        slope = (predict_steps(places, target, move, 1.0).step - predict_steps(places, target, -move, 1.0).step) / (
            2 * h
        )
        np.testing.assert_allclose(steps.d_uv[:, k], slope, rtol=2e-3, atol=2e-3)
    slope = (
        predict_steps(places, target, still, np.exp(h)).step - predict_steps(places, target, still, np.exp(-h)).step
    ) / (2 * h)
    # The blur's part in moving shaded edges is left out of the derivative.
    np.testing.assert_allclose(steps.d_blur, slope, rtol=2e-2, atol=5e-3)


def test_motion_of_the_picture_is_that_of_differences():
    """The board's picture at each pixel under a twist of the pose."""
    rendered = counterphase_set()
    places, fit = placed(rendered)
    pose = rendered.poses[0]
    motion = picture_motion(places, fit, pose)
    board = np.concatenate([places.place.xy_m, np.zeros((len(places.pixel), 1))], axis=1)
    h = 1e-6
    for k in range(6):
        ahead, back = (fit.lens.project(se3.transform(pose @ se3.exp(s * h * np.eye(6)[k]), board)) for s in (1, -1))
        np.testing.assert_allclose(motion[..., k], (ahead - back) / (2 * h), rtol=1e-4, atol=1e-3)
